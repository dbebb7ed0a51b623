"""``replay`` as a real process: many recordings are one stream, its progress is seen, and it ends in good order."""

from __future__ import annotations

import json
import os
import pty
import re
import signal
import subprocess
import threading
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile
import zmq
from driftwatch.bus.wire import is_repeated
from driftwatch.daemon.replay import BLOCK_S
from driftwatch.records import parse_time
from driftwatch.store.queries import Reader

RATE = 2400
START = "2026-03-01T06:00:00Z"

Objects = Callable[[str], list[dict[str, Any]]]


@pytest.fixture
def folder(bench: Any) -> Path:
    """Return the folder with a configuration in it: many records a second where the step is 0.1 s."""
    found: Path = bench.folder
    bench.tiny()
    return found


def _record(path: Path, seconds: float, ended: float = 1_780_000_000.0) -> None:
    """Write noise, dated as by a recorder that ended at this moment."""
    samples = 0.1 * np.random.default_rng(0).standard_normal(round(seconds * RATE))
    soundfile.write(path, samples.astype(np.float32), RATE, subtype="FLOAT")
    os.utime(path, (ended, ended))


def _stores(folder: Path) -> list[str]:
    return sorted(path.name for path in folder.glob("*.db"))


def _stalled(bench: Any, *more: str) -> tuple[subprocess.Popen[str], str]:
    """Start a replay and return it with its first line: its first 240 records are more than the pipe holds."""
    bench.tiny(step_s=BLOCK_S / 120)
    process = bench.start("replay", "tiny.toml", "long.wav", "--start", START, "--json", *more)
    return process, process.stdout.readline()


# ---------------------------------------------------------------------------------------------- one stream


def test_recordings_whose_dates_meet_are_one_stream_without_a_gap(bench: Any, folder: Path, objects: Objects) -> None:
    _record(folder / "a.wav", 4.0, 1_780_000_004.0)
    _record(folder / "b.wav", 3.0, 1_780_000_007.5)
    records = objects(bench.run("replay", "tiny.toml", "a.wav", "b.wav", "--json").stdout)
    assert [one["kind"] for one in records if one["kind"] == "health"] == []
    assert records[-1]["samples"] == 7 * RATE
    assert records[0]["sources"] == ["a.wav", "b.wav"]
    assert parse_time(records[0]["time"]) == 1_780_000_000 * 10**9
    assert sum(one["kind"] == "measurement" for one in records) == 61  # (7 - 1) / 0.1, and one


def test_recordings_whose_dates_part_have_a_gap_that_no_window_reaches_across(
    bench: Any, folder: Path, objects: Objects
) -> None:
    _record(folder / "a.wav", 4.0, 1_780_000_004.0)
    _record(folder / "b.wav", 3.0, 1_780_000_067.0)
    done = bench.run("replay", "tiny.toml", "a.wav", "b.wav", "--start", START, "--json")
    records = objects(done.stdout)
    gap = [(one["fault"], one["phase"], one["lost_samples"]) for one in records if one["kind"] == "health"]
    assert gap == [("gap", "begin", 0), ("gap", "end", 60 * RATE)]
    assert records[-1]["samples"] == 67 * RATE
    assert records[0]["time"] == "2026-03-01T06:00:00.000000000Z"
    assert records[-1]["time"] == "2026-03-01T06:01:07.000000000Z"
    assert any("60.000 s are missing before b.wav" in words for words in records[0]["assumed"])
    for one in records:
        if one["kind"] == "measurement" and one["usable"]:
            begin, end = one["first_sample"], one["first_sample"] + one["samples"]
            assert end <= 4 * RATE or begin >= 64 * RATE
    people = bench.run("replay", "tiny.toml", "a.wav", "b.wav", "--start", START)
    assert "fault over  the input: gap, after 1 min 0 s" in people.stdout
    assert ": 67.0 s from 2026-03-01T06:00:00.000Z on, 1 min 0 s of it missing." in people.stdout


# ---------------------------------------------------------------------------------------------- where it goes


def test_each_replay_makes_a_new_store_named_after_its_run_and_leaves_the_configurations_alone(
    bench: Any, folder: Path, objects: Objects
) -> None:
    _record(folder / "a.wav", 3.0)
    runs = [objects(bench.run("replay", "tiny.toml", "a.wav", "--json").stdout)[0]["run"] for _ in range(2)]
    assert runs[0] != runs[1]
    assert _stores(folder) == sorted(f"run-{run}.db" for run in runs)
    with Reader.open(folder / f"run-{runs[0]}.db") as reader:
        assert [run.run for run in reader.runs()] == [runs[0]]


def test_a_replay_publishes_where_it_is_told_to(bench: Any, folder: Path, objects: Objects) -> None:
    _record(folder / "long.wav", 3 * BLOCK_S)
    process, first = _stalled(bench, "--publish", bench.endpoint)
    with zmq.Context() as context, context.socket(zmq.SUB) as subscriber:
        subscriber.setsockopt(zmq.LINGER, 0)
        subscriber.setsockopt(zmq.SUBSCRIBE, b"")
        subscriber.connect(bench.endpoint)
        with subscriber.get_monitor_socket(zmq.EVENT_HANDSHAKE_SUCCEEDED) as monitor:
            assert monitor.poll(10_000)
        subscriber.disable_monitor()
        assert process.stdout is not None
        printed = objects(first + process.stdout.read())
        heard = []
        while subscriber.poll(500):
            message = json.loads(subscriber.recv_multipart()[1])
            if not is_repeated(message):
                heard.append(message)
    assert process.wait(timeout=20) == 0
    assert len(heard) > len(printed) // 2  # what was stalled had gone before
    assert heard == printed[-len(heard) :]


# ---------------------------------------------------------------------------------------------- the end


def test_a_replay_that_is_interrupted_stores_what_was_read_and_says_how_far_it_came(
    bench: Any, folder: Path, objects: Objects
) -> None:
    _record(folder / "long.wav", 3 * BLOCK_S)
    process, first = _stalled(bench, "--store", "rows.db")
    process.send_signal(signal.SIGINT)
    assert process.stdout is not None
    records = objects(first + process.stdout.read())
    assert process.wait(timeout=20) == 1
    assert process.stderr is not None
    told = process.stderr.read()
    stored = f"what was read is stored in {folder}/rows.db"
    assert re.fullmatch(rf"Error: interrupted after \d+\.0 s of signal; {re.escape(stored)}\n", told)
    assert records[-1]["reason"] == "interrupted"
    assert records[-1]["samples"] in (BLOCK_S * RATE, 2 * BLOCK_S * RATE)
    with Reader.open(folder / "rows.db") as reader:
        (run,) = reader.runs()
        assert sum(run.counts.values()) == len(records) == records[-1]["sequence"]


def test_a_reader_that_has_had_enough_ends_a_replay_quietly(bench: Any, folder: Path) -> None:
    _record(folder / "long.wav", 3 * BLOCK_S)
    process, _ = _stalled(bench, "--store", "rows.db")
    assert process.stdout is not None
    process.stdout.close()
    assert process.wait(timeout=20) == 0
    assert process.stderr is not None
    assert process.stderr.read() == ""
    with Reader.open(folder / "rows.db") as reader:
        (run,) = reader.runs()
    assert run.end is not None
    assert run.end.reason == "interrupted"


def test_an_output_that_cannot_be_written_to_ends_a_replay_in_one_line(bench: Any, folder: Path) -> None:
    _record(folder / "long.wav", 3 * BLOCK_S)
    with Path("/dev/full").open("wb") as full:
        done = bench.run("replay", "tiny.toml", "long.wav", "--store", "sqlite:///rows.db", stdout=full)
    assert done.returncode == 1
    assert done.stderr.startswith("Error: standard output: No space left on device; expected to print every record")
    assert len(done.stderr.splitlines()) == 1
    with Reader.open(folder / "rows.db") as reader:
        assert [run.end is not None for run in reader.runs()] == [True]


# ---------------------------------------------------------------------------------------------- progress


def _on_a_terminal(bench: Any, *arguments: str) -> tuple[str, str]:
    """Run with standard error on a terminal; return what came on standard output and there."""
    ours, theirs = pty.openpty()
    process = bench.start(*arguments, stderr=theirs)
    os.close(theirs)
    shown = b""

    def read() -> None:
        nonlocal shown
        with suppress(OSError):  # the terminal is gone when the process is
            while part := os.read(ours, 4096):
                shown += part

    thread = threading.Thread(target=read)
    thread.start()
    out, _ = process.communicate(timeout=60)
    thread.join()
    os.close(ours)
    assert process.returncode == 0
    return out, shown.decode()


def test_progress_is_shown_on_a_terminal_with_the_speed_and_the_time_left(bench: Any, folder: Path) -> None:
    bench.tiny(step_s=BLOCK_S / 400)
    _record(folder / "long.wav", 4 * BLOCK_S)
    out, shown = _on_a_terminal(bench, "replay", "tiny.toml", "long.wav")
    assert re.search(r"\d+ x real time", shown)
    assert re.search(r"\d:\d\d:\d\d left", shown.replace("\x1b[0m", ""))
    assert re.search(r" \d+ %", shown)
    assert out.startswith("Times are UTC")  # the bar takes no line of the output's
    assert "Run " in out
    assert "\x1b" not in out


def test_no_progress_is_shown_where_standard_error_is_no_terminal(bench: Any, folder: Path) -> None:
    _record(folder / "a.wav", 3.0)
    assert bench.run("replay", "tiny.toml", "a.wav").stderr == ""
