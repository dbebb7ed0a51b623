"""``driftwatch store`` tells what a store is, finds what is wrong with it, prunes it and copies it."""

from __future__ import annotations

import json
import os
import sqlite3
import threading
from collections.abc import Callable
from contextlib import closing
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner, Result
from driftwatch.cli import main
from driftwatch.records import NS, Envelope, Fault, Health, Phase, time_text
from driftwatch.store.care import backup
from driftwatch.store.errors import StoreError
from driftwatch.store.queries import Reader
from driftwatch.store.tables import HEAD
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]

START = 1_767_225_600 * NS


@pytest.fixture(autouse=True)
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Work in an empty folder."""
    monkeypatch.chdir(tmp_path)
    return tmp_path


def _call(*words: str) -> Result:
    return CliRunner().invoke(main, ["store", *words])


def _object(*words: str, status: int = 0) -> dict[str, Any]:
    done = _call(*words, "--json")
    assert done.exit_code == status, done.output
    (line,) = done.stdout.splitlines()
    found: dict[str, Any] = json.loads(line)
    return found


@pytest.fixture
def records(folder: Path, measurement: Make, run_record: Make) -> list[Envelope]:
    """Write a run to the default store and return its records."""
    found = [run_record(1), *(measurement(sequence) for sequence in range(2, 41)), run_record(41, phase=Phase.END)]
    with Writer.open("driftwatch.db", "line 3", clock=lambda: START) as writer:
        writer.write(found)
    return found


def test_info_tells_what_the_store_is(records: list[Envelope], folder: Path) -> None:
    found = _object("info")
    assert found == {
        "path": str(folder / "driftwatch.db"),
        "bytes": (folder / "driftwatch.db").stat().st_size,
        "log_bytes": 0,
        "free_bytes": 0,
        "schema": HEAD,
        "sqlite": sqlite3.sqlite_version,
        "writer": None,
        "runs": 1,
        "counts": {"measurement": 39, "run": 2},
        "oldest": time_text(records[0].time_ns),
        "newest": time_text(records[-1].time_ns),
        "predecessors": [],
    }
    text = _call("info").stdout
    assert f"SQLite        {sqlite3.sqlite_version}" in text
    assert "writer        nobody" in text


def test_info_names_who_writes_and_what_stood_before(folder: Path, records: list[Envelope]) -> None:
    with Writer.open("driftwatch.db", "line 3") as writer, writer.transaction() as connection:
        connection.exec_driver_sql("INSERT INTO predecessor VALUES (1, 'old.db', 'damaged: by hand', ?)", (START,))
        found = _object("info")
    assert found["writer"] == f"process {os.getpid()} (station 'line 3')"
    assert _object("info")["writer"] is None
    assert _object("info")["predecessors"] == [
        {"path": "old.db", "reason": "damaged: by hand", "time": time_text(START)}
    ]
    assert "before it     old.db, until 2026-01-01T00:00:00.000Z: damaged: by hand" in _call("info").stdout


@pytest.mark.parametrize("verb", [["info"], ["check"], ["prune", "--keep-days", "1"], ["backup", "copy.db"]])
def test_a_store_that_is_missing_or_foreign_is_refused_and_left(folder: Path, verb: list[str]) -> None:
    (folder / "notes.db").write_text("remember the milk\n" * 100)
    for name, says in (("none.db", "does not exist"), ("notes.db", "is no database of driftwatch")):
        done = _call(*verb, "--store", name)
        assert (done.exit_code, says in done.stderr) == (2, True), done.output
    assert [path.name for path in folder.iterdir()] == ["notes.db"]


# ---------------------------------------------------------------------------------------------- check


def _delete(folder: Path, where: str) -> None:
    with closing(sqlite3.connect(folder / "driftwatch.db")) as connection:
        connection.execute(f"DELETE FROM measurement WHERE {where}")  # noqa: S608 - the test's own words
        connection.commit()


def test_a_whole_store_passes(records: list[Envelope]) -> None:
    found = _object("check")
    assert (found["ok"], found["runs"], found["records"], found["faults"], found["remarks"]) == (True, 1, 41, [], [])
    assert _call("check").stdout.endswith("is whole; 41 records of 1 run were looked at.\n")


def test_records_that_are_missing_in_the_midst_of_a_run_are_a_fault(records: list[Envelope], folder: Path) -> None:
    _delete(folder, "sequence IN (20, 21, 22, 30)")
    found = _object("check", status=1)
    assert found["faults"] == ["run 5f0e8f0e: 4 records are missing, the first after record 19"]
    assert "Fault: run 5f0e8f0e: 4 records are missing" in _call("check").stdout


@pytest.mark.parametrize(("told", "faults"), [(4.0, 0), (3.0, 1)])
def test_records_that_a_health_record_tells_as_lost_are_none(
    records: list[Envelope], folder: Path, told: float, faults: int
) -> None:
    health = Health(
        None, Fault.DISK, Phase.END, "i", START, 9.0, None, 0, value=told, limit=None, unit="records", detail=None
    )
    with Writer.open("driftwatch.db", "line 3") as writer:
        writer.write([replace(records[-1], sequence=42, body=health)])
    _delete(folder, "sequence IN (20, 21, 22, 30)")
    found = _object("check", status=faults)
    assert len(found["faults"]) == faults
    assert found["remarks"][0].startswith(f"run 5f0e8f0e: {told:.0f} records were never stored, as its health records")


def test_what_was_pruned_is_no_fault(records: list[Envelope], folder: Path) -> None:
    """The begin of the run, but for its own record; and one reading that was numbered a little late."""
    _delete(folder, "sequence < 20 OR sequence = 22")
    assert _object("check")["remarks"] == ["run 5f0e8f0e: its begin was pruned"]


@pytest.mark.parametrize("is_written", [False, True])
def test_damage_is_found(folder: Path, measurement: Make, is_written: bool) -> None:
    """Also while somebody writes, when it is looked through table by table."""
    with Writer.open("driftwatch.db", "line 3") as writer:
        writer.write([measurement(sequence) for sequence in range(1, 3000)])
    with closing(sqlite3.connect("driftwatch.db")) as connection:
        (page,) = connection.execute(
            "SELECT rootpage FROM sqlite_master WHERE name = 'ix_measurement_about'"
        ).fetchone()
    with (folder / "driftwatch.db").open("r+b") as file:
        file.seek((page - 1) * 4096)
        file.write(b"\xa5" * 4096)
    if is_written:
        with Writer.open("driftwatch.db", "line 3"):
            found = _object("check", status=1)
    else:
        found = _object("check", status=1)
    assert found["faults"]
    assert "not whole" in _call("check").stdout


# ---------------------------------------------------------------------------------------------- prune


def test_prune_removes_what_is_old_and_says_how_much(records: list[Envelope]) -> None:
    """The run began in January 2026, on the store's own clock and in stream time."""
    assert _object("prune", "--keep-days", "100000")["removed"] == 0
    assert _object("prune", "--keep-days", "1")["removed"] >= 39
    with Reader.open("driftwatch.db") as reader:
        assert reader.runs() == []


@pytest.mark.parametrize("days", ["nan", "inf", "-inf", "-1"])
def test_prune_is_refused_for_what_is_no_number_of_days(records: list[Envelope], days: str) -> None:
    assert _call("prune", "--keep-days", days).exit_code == 2
    assert _object("prune", "--keep-days", "1e9")["removed"] == 0


def test_prune_is_refused_while_a_daemon_writes_and_names_it(records: list[Envelope]) -> None:
    with Writer.open("driftwatch.db", "line 3"):
        done = _call("prune", "--keep-days", "1")
    assert done.exit_code == 2
    assert f"process {os.getpid()} (station 'line 3') is writing" in done.stderr
    assert _object("info")["counts"]["measurement"] == 39


# ---------------------------------------------------------------------------------------------- backup


def test_a_backup_is_whole_and_of_one_instant_while_somebody_writes(folder: Path, measurement: Make) -> None:
    """Each group has ten records, so a copy with another number of them would be of no instant."""
    ended = threading.Event()

    def write() -> None:
        with Writer.open("driftwatch.db", "line 3") as writer:
            sequence = 1
            while not ended.is_set():
                writer.write([measurement(sequence + number) for number in range(10)])
                sequence += 10
                started.set()

    started = threading.Event()
    with Writer.open("driftwatch.db", "line 3") as writer:
        writer.write([measurement(sequence, run="before") for sequence in range(1, 20_001)])
    thread = threading.Thread(target=write)
    thread.start()
    try:
        assert started.wait(30)
        for name in ("one.db", "two.db"):
            found = _object("backup", name)
            assert (found["verified"], found["bytes"]) == (True, (folder / name).stat().st_size)
    finally:
        ended.set()
        thread.join()
    counts = []
    for name in ("one.db", "two.db"):
        with Reader.open(name) as reader:
            before, during = reader.runs()
            assert before.counts == {"measurement": 20_000}
            counts.append(during.counts["measurement"])
    assert [count % 10 for count in counts] == [0, 0]
    assert counts[0] <= counts[1]
    assert _object("check", "--store", "one.db")["ok"]
    assert not [path for path in folder.iterdir() if ".part" in path.name]


def test_a_backup_never_writes_over_a_file(records: list[Envelope], folder: Path) -> None:
    (folder / "copy.db").write_text("mine")
    done = _call("backup", "copy.db")
    assert (done.exit_code, "copy.db is there already" in done.stderr) == (2, True)
    assert (folder / "copy.db").read_text() == "mine"


def test_a_copy_of_a_damaged_store_is_thrown_away(folder: Path, measurement: Make) -> None:
    with Writer.open("driftwatch.db", "line 3") as writer:
        writer.write([measurement(sequence) for sequence in range(1, 3000)])
    raw = bytearray((folder / "driftwatch.db").read_bytes())
    raw[-40_000:-20_000] = b"\xa5" * 20_000
    (folder / "driftwatch.db").write_bytes(raw)
    with pytest.raises(StoreError, match="the copy is not whole"):
        backup(folder / "driftwatch.db", folder / "copy.db")
    assert _call("backup", "copy.db").exit_code == 1
    assert not list(folder.glob("copy*"))
