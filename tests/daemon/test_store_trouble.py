"""A live run outlasts its store: a full disk, a lock, a file that is deleted or damaged cost a fault, and no record.

One real daemon goes through all of it while a subscriber writes down what is published; what it saw at each stage is
looked at afterwards. The folder of its store is a small file system of its own where this computer allows to mount one.
"""

from __future__ import annotations

import json
import os
import socket
import sqlite3
import subprocess
import tempfile
import threading
import time
from collections.abc import Iterator
from contextlib import ExitStack, closing, contextmanager
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner
from driftwatch.cli import main
from driftwatch.daemon.live import STORE_END_S
from driftwatch.records import NS

from benchmarks.busy import BusyDaemon, Recorder, integrity, locked, stored, until

LOCKED_S = 6.0
SMALL_MB = 32

pytestmark = pytest.mark.timeout(600)


class Stage:
    """What a subscriber saw from one moment on, and what the daemon said."""

    def __init__(self, daemon: BusyDaemon, recorder: Recorder) -> None:
        self._daemon, self._recorder = daemon, recorder
        self._since = (len(recorder.records), len(recorder.beats), len(daemon.log))
        self._until: tuple[int | None, int | None, int | None] = (None, None, None)
        self.quiet: list[dict[str, Any]] = []  # published although the store took nothing
        self.stored: set[tuple[str, int]] = set()  # at its end
        self.looks: dict[str, Any] = {}

    def close(self) -> None:
        """Take no more in; look at what is stored by now."""
        self._until = (len(self._recorder.records), len(self._recorder.beats), len(self._daemon.log))
        self.stored = stored(self._daemon.database)

    @property
    def records(self) -> list[dict[str, Any]]:
        return [one for _, one in self._recorder.records[self._since[0] : self._until[0]]]

    @property
    def beats(self) -> list[dict[str, Any]]:
        return [one for _, one in self._recorder.beats[self._since[1] : self._until[1]]]

    @property
    def log(self) -> str:
        said = self._daemon.log
        return said[self._since[2] : self._until[2]]

    def faults(self, **wanted: Any) -> list[dict[str, Any]]:
        """Return the health records of the stage with these values."""
        found = [one for one in self.records if one["kind"] == "health"]
        return [one for one in found if all(one[name] == value for name, value in wanted.items())]

    def unsaved(self) -> bool:
        return any(beat["unsaved"] > 0 for beat in self.beats)

    def is_over(self) -> bool:
        return bool([one for one in self.faults(phase="end") if one["unit"] == "records"])


@contextmanager
def _small_disk(folder: Path) -> Iterator[bool]:
    """Mount a small file system where the folder is; give whether that could be done."""
    folder.mkdir()
    command = ["mount", "-t", "tmpfs", "-o", f"size={SMALL_MB}m", "tmpfs", str(folder)]
    can = os.geteuid() == 0 and subprocess.run(command, capture_output=True, check=False).returncode == 0
    try:
        yield can
    finally:
        if can:
            subprocess.run(["umount", "--lazy", str(folder)], check=True)


@contextmanager
def _told_to_manager() -> Iterator[tuple[str, list[str]]]:
    """Listen as the service manager does; give the socket's path and what came."""
    told: list[str] = []
    ended = threading.Event()
    with tempfile.TemporaryDirectory() as folder, socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as listening:
        listening.bind(f"{folder}/notify")
        listening.settimeout(0.1)

        def listen() -> None:
            while not ended.is_set():
                try:
                    told.append(listening.recv(5000).decode())
                except TimeoutError:
                    continue

        thread = threading.Thread(target=listen)
        thread.start()
        yield f"{folder}/notify", told
        ended.set()
        thread.join()


def _fill(folder: Path) -> Path:
    """Leave no room on the small disk."""
    path = folder / "filler"
    with path.open("wb", buffering=0) as file:
        for size in (1 << 20, 1 << 12):
            try:
                while True:
                    file.write(bytes(size))
            except OSError:
                continue
    return path


class Story:
    """What happened to one daemon, stage by stage."""

    def __init__(self, folder: Path, stack: ExitStack) -> None:
        self.stages: dict[str, Stage] = {}
        self.has_disk = stack.enter_context(_small_disk(folder / "state"))
        notify, self.told = stack.enter_context(_told_to_manager())
        self.daemon = stack.enter_context(BusyDaemon(folder))
        self.recorder = stack.enter_context(Recorder(self.daemon.endpoint))
        self.daemon.start(NOTIFY_SOCKET=notify)
        until(lambda: len(self.recorder.records) > 200, f"readings; it says {self.daemon.log}")

    @contextmanager
    def stage(self, name: str) -> Iterator[Stage]:
        stage = self.stages[name] = Stage(self.daemon, self.recorder)
        yield stage
        until(stage.is_over, f"the end of {name!r}; it says {stage.log}")
        until(lambda: "the store takes rows again" in stage.log, f"a line about the end; it says {stage.log}")
        stage.close()

    def all(self) -> None:
        database = self.daemon.database
        if self.has_disk:
            with self.stage("full") as stage:
                filler = _fill(database.parent)
                self._watch(stage, 2.0)
                filler.unlink()
        with self.stage("locked") as stage, locked(database):
            self._watch(stage, LOCKED_S)
        with self.stage("deleted") as stage:
            database.unlink()
        with self.stage("damaged") as stage:
            _damage(database)
        stage.looks = self._looks()
        self.end = Stage(self.daemon, self.recorder)
        with locked(database):
            until(self.end.unsaved, "trouble again")
            began = time.monotonic()
            self.status = self.daemon.end()
            self.ended_s = time.monotonic() - began

    def _watch(self, stage: Stage, seconds: float) -> None:
        """Watch the bus while the store takes nothing."""
        until(stage.unsaved, f"a sign that records wait; it says {stage.log}")
        before = len(self.recorder.records)
        time.sleep(seconds)
        stage.quiet = [one for _, one in self.recorder.records[before:]]

    def _looks(self) -> dict[str, Any]:
        """Return what the commands say that look into the store, while the run goes on in a new one."""
        found = {}
        where = ["--store", str(self.daemon.database)]
        for words in (
            ["runs"],
            ["readings", "--run", "last", "--limit", "3"],
            ["status", "--publish", self.daemon.endpoint],
        ):
            done = CliRunner().invoke(main, [*words, *where, "--json"])
            found[words[0]] = (done.exit_code, [json.loads(line) for line in done.stdout.splitlines()])
        return found


def _damage(path: Path) -> None:
    """Overwrite everything but the first page, and let whoever has pages in memory read them again."""
    with closing(sqlite3.connect(path, isolation_level=None, timeout=30)) as connection:
        until(lambda: connection.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchone()[0] == 0, "a folded log")
        with path.open("r+b") as file:
            file.seek(4096)
            file.write(b"\xa5" * (path.stat().st_size - 4096))
        connection.execute("PRAGMA user_version = 1")


@pytest.fixture(scope="module")
def story(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Story]:
    with ExitStack() as stack:
        told = Story(tmp_path_factory.mktemp("trouble"), stack)
        told.all()
        yield told


@pytest.fixture(params=["full", "locked"])
def waited(request: pytest.FixtureRequest, story: Story) -> Stage:
    """Return a stage in which the store took nothing for a while, and then everything."""
    if request.param == "full" and not story.has_disk:
        pytest.skip("a small disk that fills: this computer does not allow to mount one")
    return story.stages[request.param]


def test_every_record_is_published_once_and_in_order_whatever_happens(story: Story) -> None:
    numbers = [one["sequence"] for _, one in story.recorder.records]
    assert numbers == list(range(numbers[0], numbers[0] + len(numbers)))


def test_nothing_is_published_before_it_is_stored_and_nothing_is_lost(waited: Stage) -> None:
    assert waited.quiet == []
    assert waited.records
    assert {(one["run"], one["sequence"]) for one in waited.records} <= waited.stored


def _end(stage: Stage) -> int:
    (end,) = [one for one in stage.faults(phase="end") if one["unit"] == "records"]
    return int(end["sequence"])


def test_there_is_one_incident_from_begin_to_end_that_counts_what_was_lost(waited: Stage, story: Story) -> None:
    begin, end = waited.faults()
    assert (begin["phase"], end["phase"], begin["incident"]) == ("begin", "end", end["incident"])
    is_full = waited is story.stages.get("full")
    assert begin["fault"] == end["fault"] == ("disk" if is_full else "store")
    assert ("full" if is_full else "locked") in begin["detail"]
    assert (end["value"], end["unit"]) == (0.0, "records")
    assert end["seconds"] > (1.0 if is_full else LOCKED_S - 1.0)
    assert begin["detail"] in waited.log  # at once, and the end as well
    assert end["detail"] in waited.log


def test_heartbeats_go_on_and_say_how_much_waits_and_for_how_long(waited: Stage) -> None:
    waiting = [beat for beat in waited.beats if beat["unsaved"]]
    assert len(waiting) >= 2
    assert max(beat["unsaved"] for beat in waiting) > waiting[0]["unsaved"]
    assert waiting[-1]["unsaved_s"] > waiting[0]["unsaved_s"]
    assert all(beat["unsaved_s"] >= 0 for beat in waiting)  # 0 in one that is given at the very first failure
    assert max(beat["sequence"] for beat in waiting) < _end(waited)


def test_the_service_manager_is_told_that_records_wait(story: Story) -> None:
    assert any("STATUS=Measuring; the store takes no rows (locked): " in message for message in story.told)


@pytest.mark.parametrize("name", ["deleted", "damaged"])
def test_after_a_lost_or_damaged_file_the_run_goes_on_in_a_new_one_that_names_it(story: Story, name: str) -> None:
    stage, database = story.stages[name], story.daemon.database
    (again,) = [one for one in stage.records if one["kind"] == "run"]
    assert again["phase"] == "continue"
    anew = [one for one in stage.faults(fault="store") if "records go into another database" in one["detail"]]
    assert [one["phase"] for one in anew] == ["begin", "end"]
    assert str(database) in anew[0]["detail"]
    assert anew[0]["detail"] in stage.log
    after = [one for one in stage.records if one["sequence"] >= again["sequence"]]
    assert {(one["run"], one["sequence"]) for one in after} <= stage.stored


def test_a_damaged_file_is_set_aside_with_its_log_and_never_deleted(story: Story) -> None:
    folder = story.daemon.database.parent
    aside = list(folder.glob("rows.db.damaged-*Z"))
    assert len(aside) == 1
    assert aside[0].read_bytes()[4096:8192] == b"\xa5" * 4096
    with closing(sqlite3.connect(story.daemon.database)) as connection:
        ((path, reason, at_ns),) = connection.execute("SELECT path, reason, at_ns FROM predecessor")
    assert path == str(aside[0])
    assert "malformed" in reason
    assert abs(at_ns / NS - time.time()) < 3600
    assert integrity(story.daemon.database) == "ok"


def test_looks_into_the_store_cope_with_a_run_that_began_in_another_file(story: Story) -> None:
    looks = story.stages["damaged"].looks
    status, (run,) = looks["runs"]
    assert (status, run["ended"], run["run"]) == (0, False, story.recorder.records[0][1]["run"])
    status, rows = looks["readings"]
    assert (status, len(rows)) == (0, 3)
    status, (look,) = looks["status"]
    assert status in (0, 4)  # as the modes stand; not 1, a daemon that is not there
    assert look["run"] == run["run"]
    assert not any("ended" in words for words in look["cannot_tell"])


def test_the_end_waits_a_while_for_the_store_and_then_tells_what_was_not_stored(story: Story) -> None:
    assert story.status == 1
    assert story.ended_s > STORE_END_S
    last = story.end.log.splitlines()[-1]
    assert last.startswith("Error: ")
    assert "database is locked" in last
    assert last.split("; ")[-1].endswith("records of this run were not stored")
    assert int(last.split("; ")[-1].split()[0]) > 10
