"""``status`` against real daemons and crafted stores: its words, its order, its exit status."""

from __future__ import annotations

import fcntl
import json
import os
import pty
import signal
import struct
import subprocess
import sys
import termios
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner, Result
from driftwatch.bus.publisher import Publisher
from driftwatch.cli import main
from driftwatch.records import (
    NS,
    AlertState,
    Envelope,
    Fault,
    Health,
    Heartbeat,
    Origin,
    Phase,
    Priority,
    TimeQuality,
    Track,
    TrackStatus,
    fields_of,
)
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]
RUN = "5f0e8f0e-1111-4222-8333-123456789abc"
START_NS = 1_767_225_600 * NS
DEADLINE_S = 60.0

MOVING = "[[6.0, 400.0], [7.0, 380.0]]"
"""Where the resonance of the bench's configuration goes."""


@pytest.fixture(autouse=True)
def folder(bench: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    """Ask from the folder in which daemons are started; asking needs no process of its own, the daemon does."""
    monkeypatch.chdir(bench.folder)


def _status(*options: object) -> Result:
    done = CliRunner().invoke(main, ["status", "--wait", "10", *map(str, options)])
    assert done.exception is None or isinstance(done.exception, SystemExit), done.exception
    return done


def _until(code: int, *options: object) -> Result:
    """Ask until the exit status is as expected, a few times a second."""
    end = time.monotonic() + DEADLINE_S
    while (done := _status(*options)).exit_code != code:
        assert time.monotonic() < end, done.output
        time.sleep(0.2)
    return done


def _changed(bench: Any, config: Path, *pairs: tuple[str, str]) -> None:
    text = (bench.folder / config).read_text()
    for old, new in pairs:
        assert old in text
        text = text.replace(old, new)
    (bench.folder / config).write_text(text)


# ---------------------------------------------------------------------------------------------- real daemons


def test_a_daemon_is_quiet_has_an_alert_hangs_and_ends_and_is_told_so_each_time(
    bench: Any, objects: Any, measurement: Make
) -> None:
    config = bench.config(pace=4.0)
    _changed(bench, config, (MOVING, "400.0"))
    daemon = bench.start("run", config, "--json", stdout=subprocess.DEVNULL)
    run = _is_quiet(bench, config, objects)
    same = ["--store", "state/bench.db", "--publish", bench.endpoint]  # without the configuration
    assert bench.run("status", *same).returncode == 0

    with Writer.open(bench.folder / "other.db", "line 3") as writer:
        writer.write([measurement(1)])
    other = _status("--config", config, "--store", "other.db")  # a store that is not the daemon's
    assert other.exit_code == 4
    assert "CANNOT TELL  other.db holds nothing of run " in other.stdout
    missing = _status("--config", config, "--store", "none.db")
    assert missing.exit_code == 4
    assert "none.db does not exist" in missing.stdout

    _changed(bench, config, ("low = 390.0", "low = 405.0"))  # the band is now left
    daemon.send_signal(signal.SIGHUP)
    done = _until(3, "--config", config)
    assert done.stdout.startswith("ALERT  bench: 1 alert stands")
    assert "\nALERT high  drive end/rocking/bolts: frequency " in done.stdout
    (told,) = objects(_status("--config", config, "--json").stdout)
    assert [one["alert"] for one in told["alerts"]] == ["drive end/rocking/bolts"]
    assert told["alerts"][0]["priority"] == "high"

    daemon.send_signal(signal.SIGSTOP)
    hung = _status("--config", config, "--wait", "0.5")
    daemon.send_signal(signal.SIGCONT)
    assert hung.exit_code == 1
    assert hung.stdout.startswith(f"UNREACHABLE  no sign of life from {bench.endpoint};")
    assert "it has no end: cut off, or hanging" in " ".join(hung.stdout.split())

    daemon.send_signal(signal.SIGINT)
    assert daemon.wait(timeout=20) == 0
    ended = _status("--config", config, "--wait", "0.2")
    assert ended.exit_code == 1
    words = " ".join(ended.stdout.split())
    assert "last heard at 20" in words
    assert f"from run {run[:8]} of bench (simulated); it ended: stopped" in words
    (last,) = objects(_status("--config", config, "--wait", "0.2", "--json").stdout)
    assert (last["verdict"], last["exit"], last["run"], last["uptime_s"]) == ("unreachable", 1, run, None)


def _is_quiet(bench: Any, config: Path, objects: Any) -> str:
    """Wait until the daemon of a configuration is quiet; hold what is told of it to that; return its run."""
    done = _until(0, "--config", config)
    first, second, *_ = done.stdout.splitlines()
    assert first == "QUIET  bench: no alert stands, 1 of 1 mode tracked"
    assert second.startswith("measuring since 20")
    assert "tracking  drive end / rocking  " in done.stdout
    (told,) = objects(_status("--config", config, "--json").stdout)
    assert (told["verdict"], told["exit"], told["station"], told["origin"]) == ("quiet", 0, "bench", "simulated")
    assert told["cannot_tell"] == told["alerts"] == told["faults"] == []
    (mode,) = told["modes"]
    assert (mode["channel"], mode["mode"], mode["status"]) == ("drive end", "rocking", "tracking")
    assert abs(mode["frequency_hz"] - 400.0) < 6 * mode["frequency_std_hz"]  # of a Gaussian beyond: 2e-9
    assert 0.0 <= mode["last_seen_s"] < DEADLINE_S
    return str(told["run"])


def test_nothing_anywhere_is_unreachable_and_nonsense_starts_nothing(bench: Any) -> None:
    done = _status("--publish", bench.endpoint, "--wait", "0.2")
    assert done.exit_code == 1
    assert "does not exist" in done.stdout
    for options, says in (
        (["--config", "none.toml"], "no such file"),
        (["--publish", "nowhere"], "'nowhere' cannot be listened to"),
        (["--wait", "0"], "--wait"),
    ):
        refused = _status(*options)
        assert (refused.exit_code, refused.stdout) == (2, "")
        assert says in refused.stderr
    assert bench.files() == {}


# ---------------------------------------------------------------------------------------------- crafted stores


def _wrapped(sequence: int, body: Any) -> Envelope:
    return Envelope("line 3", RUN, Origin.LIVE, sequence, None, START_NS + sequence * NS, TimeQuality.FREE, body)


def _track(sequence: int, mode: str, status: TrackStatus = TrackStatus.TRACKING, **changes: Any) -> Envelope:
    values: dict[str, Any] = {field.name: None for field in fields_of(Track)}
    values |= {"channel": "drive end", "mode": mode, "status": status, "last_measurement_ns": START_NS}
    return _wrapped(sequence, Track(**(values | changes)))


def _fault(sequence: int, incident: str, phase: Phase = Phase.BEGIN) -> Envelope:
    values: dict[str, Any] = {field.name: None for field in fields_of(Health)}
    values |= {"fault": Fault.DEVICE, "phase": phase, "incident": incident, "since_ns": START_NS}
    return _wrapped(sequence, Health(**(values | {"seconds": 0.0, "lost_samples": 7})))


def _beat(**changes: Any) -> Heartbeat:
    values: dict[str, Any] = {"station": "line 3", "run": RUN, "origin": Origin.LIVE, "time_ns": START_NS + 60 * NS}
    values |= {"time_quality": TimeQuality.FREE, "uptime_s": 60.0, "sample_age_s": 0.1, "queue_fill": 0.0}
    return Heartbeat(**(values | {"worst_alert": None, "sequence": 1} | changes))


@contextmanager
def _beating(endpoint: str, beat: Heartbeat) -> Iterator[None]:
    """Publish a heartbeat again and again."""
    done = threading.Event()

    def publish() -> None:
        with Publisher(endpoint) as publisher:
            while not done.wait(0.1):
                publisher.heartbeat(beat)

    thread = threading.Thread(target=publish)
    thread.start()
    try:
        yield
    finally:
        done.set()
        thread.join()


@pytest.fixture
def crafted(bench: Any, alert: Make) -> Callable[..., Result]:
    """Return what stores records, beats, and asks."""

    def ask(records: list[Envelope], beat: Heartbeat, *options: str) -> Result:
        with Writer.open(bench.folder / "driftwatch.db", "line 3") as writer:
            writer.write(records)
        with _beating(bench.endpoint, beat):
            return _status("--publish", bench.endpoint, *options)

    return ask


def test_of_a_crafted_store_the_worst_comes_first_with_the_last_word_on_everything(
    crafted: Any, alert: Make, objects: Any
) -> None:
    header = {"origin": Origin.LIVE, "time_quality": TimeQuality.FREE}
    normal = {"state": AlertState.NORMAL, "previous_state": AlertState.NORMAL}
    records = [
        _track(1, "a", TrackStatus.LOST),
        _track(2, "b", TrackStatus.SEARCHING),
        _track(3, "c", TrackStatus.LOST),
        _track(4, "d", TrackStatus.HELD, reason="unexcited"),
        _track(5, "a"),  # found again
        alert(6, alert="x/low", priority=Priority.LOW, **header),
        alert(7, alert="x/urgent", priority=Priority.URGENT, **header),
        alert(8, alert="x/gone", priority=Priority.URGENT, **header),
        alert(9, alert="x/gone", priority=Priority.URGENT, **normal, **header),
        alert(10, alert="x/dark", determinate=False, **normal, **header),
        _fault(11, "over"),
        _fault(12, "open"),
        _fault(13, "over", Phase.END),
    ]
    done = crafted(records, _beat(sequence=13))
    assert done.exit_code == 3
    told = [line.split(":")[0] for line in done.stdout.splitlines() if not line.startswith(" ")]
    assert [line.partition("  seen")[0].rstrip() for line in told[2:]] == [
        "ALERT urgent  x/urgent",
        "ALERT low  x/low",
        "CANNOT TELL  x/dark",
        "FAULT  the input",
        "lost             drive end / c",
        "held, unexcited  drive end / d",
        "searching        drive end / b",
        "tracking         drive end / a",
    ]
    (found,) = objects(crafted([_track(14, "e")], _beat(sequence=14), "--json").stdout)
    assert [one["alert"] for one in found["alerts"]] == ["x/urgent", "x/low", "x/dark"]
    assert [one["incident"] for one in found["faults"]] == ["open"]
    assert [one["mode"] for one in found["modes"]] == ["c", "d", "b", "a", "e"]
    assert found["modes"][0]["last_seen_s"] == 60.0
    assert found["time"] == "2026-01-01T00:01:00.000000000Z"


@pytest.mark.parametrize(
    ("records", "beat", "says"),
    [
        ([_track(1, "a")], _beat(sample_age_s=9.0), "samples do not advance: the last came 9 s ago"),
        ([_track(1, "a")], _beat(sample_age_s=None), "no sample has come in the 1 min 0 s since the start"),
        ([_track(1, "a")], _beat(unsaved=7, unsaved_s=3.0), "7 records wait for it, in trouble for 3 s"),
        ([_track(1, "a")], _beat(sequence=2), "driftwatch.db ends at record 1, the daemon has published 2"),
        ([_track(1, "a"), _fault(2, "open")], _beat(), "FAULT  the input: device"),
        ([_fault(1, "open"), _fault(2, "open", Phase.END)], _beat(), "no mode has a reading yet"),
        ([_track(1, "a", TrackStatus.LOST)], _beat(), "no alert stands, 0 of 1 mode tracked"),
    ],
    ids=["late samples", "no sample", "unsaved", "an old copy", "a fault", "no mode", "a mode that is not found"],
)
def test_what_cannot_be_told_says_why(crafted: Any, records: list[Envelope], beat: Heartbeat, says: str) -> None:
    done = crafted(records, beat)
    assert done.exit_code == 4
    assert done.stdout.startswith("CANNOT TELL  line 3: ")
    assert says in " ".join(done.stdout.split()).replace("CANNOT TELL ", "CANNOT TELL  ").replace("FAULT ", "FAULT  ")


def test_the_same_without_trouble_is_quiet(crafted: Any) -> None:
    assert crafted([_track(1, "a")], _beat()).exit_code == 0


def test_what_beats_but_is_no_daemon_is_told_in_one_line(bench: Any) -> None:
    import zmq

    done = threading.Event()

    def publish() -> None:
        with zmq.Context() as context, context.socket(zmq.PUB) as socket:
            socket.setsockopt(zmq.LINGER, 0)
            socket.bind(bench.endpoint)
            while not done.wait(0.1):
                socket.send_multipart((b"heartbeat", b"[1]"))

    thread = threading.Thread(target=publish)
    thread.start()
    try:
        told = _status("--publish", bench.endpoint)
    finally:
        done.set()
        thread.join()
    assert (told.exit_code, told.stdout) == (1, "")
    assert "sent b'[1]', which is no heartbeat" in told.stderr


# ---------------------------------------------------------------------------------------------- watching


def test_a_watch_without_a_terminal_repeats_itself_follows_changes_and_ends_with_the_last_exit_status(
    bench: Any, alert: Make
) -> None:
    with Writer.open(bench.folder / "driftwatch.db", "line 3") as writer:
        writer.write([_track(1, "a")])
        with _beating(bench.endpoint, _beat()):
            watch = bench.start("status", "--publish", bench.endpoint, "--watch", "--json")
            assert watch.stdout is not None
            assert json.loads(watch.stdout.readline())["verdict"] == "quiet"
            writer.write([replace(alert(2, origin=Origin.LIVE, time_quality=TimeQuality.FREE), sequence=2)])
            while json.loads(watch.stdout.readline())["verdict"] != "alert":
                pass
            writer.write([_track(3, "b", TrackStatus.LOST)])
            while len((told := json.loads(watch.stdout.readline()))["modes"]) < 2:
                pass
            assert [one["mode"] for one in told["modes"]] == ["b", "a"]
            watch.send_signal(signal.SIGINT)
            watch.communicate(timeout=20)
            assert watch.returncode == 3


def test_a_watch_on_a_terminal_is_redrawn_in_place_and_gives_it_back(bench: Any) -> None:
    with Writer.open(bench.folder / "driftwatch.db", "line 3") as writer:
        writer.write([_track(1, "a")])
    terminal, inside = pty.openpty()
    fcntl.ioctl(inside, termios.TIOCSWINSZ, struct.pack("HHHH", 24, 60, 0, 0))
    kept = {key: value for key, value in os.environ.items() if key not in ("COLUMNS", "LINES", "NO_COLOR")}
    with _beating(bench.endpoint, _beat()):
        process = subprocess.Popen(
            [sys.executable, "-m", "driftwatch", "status", "--publish", bench.endpoint, "--watch"],
            cwd=bench.folder,
            stdin=inside,
            stdout=inside,
            stderr=inside,
            env={**kept, "TERM": "xterm-256color", "OMP_NUM_THREADS": "1"},
        )
        try:
            os.close(inside)
            read = b""
            while read.count(b"QUIET") < 2 or b"\x1b[1A" not in read:  # drawn again, after going up
                read += os.read(terminal, 65_536)
            process.send_signal(signal.SIGINT)
            while b"\x1b[?25h" not in read:  # the cursor is back
                read += os.read(terminal, 65_536)
            assert process.wait(timeout=20) == 0
        finally:
            process.kill()
            process.wait()
            os.close(terminal)
