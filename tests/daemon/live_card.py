"""The live daemon on a virtual sound card, as tests drive it: the real program, what it says, and its processes."""

from __future__ import annotations

import calendar
import contextlib
import json
import os
import signal
import socket
import sqlite3
import subprocess
import sys
import threading
import time
import uuid
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Self

import numpy as np
import soundfile
import zmq
from driftwatch.stream.resonator import resonator_response
from numpy.typing import NDArray

Floats = NDArray[np.float32]
Row = dict[str, Any]

RATE = 48_000
NS = 1_000_000_000
BLOCK = 480
"""Samples in a block: `block_s` of 10 ms."""

WINDOW_S, STEP_S = 2.0, 0.25

TRUTH = {"a": (900.0, 40.0), "b": (1550.0, 80.0)}
"""Natural frequency in Hz and Q of the mode on each channel."""

LIMIT_S = 60.0
"""A deadline for what takes a few seconds on a computer that has nothing else to do."""

PROGRAM = [sys.executable, "-m", "driftwatch"]


def two_modes(seconds: int) -> Floats:
    """Return a mode on each of two inputs, under random force, 28 dB above white noise; shape (samples, 2)."""
    rng = np.random.default_rng(0)
    count = seconds * RATE
    responses = [resonator_response(rng, count, RATE, *pole, 0.05, "acceleration") for pole in TRUTH.values()]
    noisy = np.stack(responses, 1) + 0.002 * rng.standard_normal((count, 2))
    return noisy.astype(np.float32)


def write_wav(path: Path, samples: Floats) -> Path:
    soundfile.write(path, samples, RATE, subtype="FLOAT")
    return path


def free_port() -> int:
    with socket.socket() as one:
        one.bind(("127.0.0.1", 0))
        return int(one.getsockname()[1])


def configuration(
    folder: Path, *, device: str = "rig", source: str = "", daemon: str = "", record: bool = True, rest: str = ""
) -> Path:
    """Write a configuration of two modes, one with a band that is left at once, into a folder; return it."""
    publish, control = free_port(), free_port()
    path = folder / "card.toml"
    path.write_text(
        f"""schema = 1
[station]
name = "bench"
[[source]]
name = "card"
kind = "soundcard"
device = "{device}"
{source}
[[channel]]
name = "a"
input = 1
[[channel]]
name = "b"
input = 2
[[mode]]
name = "first"
channel = "a"
search_hz = [700.0, 1100.0]
window_s = {WINDOW_S}
step_s = {STEP_S}
[[mode]]
name = "second"
channel = "b"
search_hz = [1300.0, 1800.0]
window_s = {WINDOW_S}
step_s = {STEP_S}
[[mode.band]]
name = "high"
low = 1600.0
on_delay_s = 1.0
[store]
url = "sqlite:///state/rows.db"
[bus]
publish = "tcp://127.0.0.1:{publish}"
control = "tcp://127.0.0.1:{control}"
[daemon]
{daemon}
[record]
keep_hours = {1.0 if record else 0.0}
segment_s = 5.0
{rest}
"""
    )
    return path


# ---------------------------------------------------------------------------------------------- what is said


def ns_of(text: str) -> int:
    """Return the nanoseconds of an RFC 3339 time in UTC."""
    whole, _, fraction = text.removesuffix("Z").partition(".")
    seconds = calendar.timegm(time.strptime(whole, "%Y-%m-%dT%H:%M:%S"))
    return seconds * NS + int(fraction.ljust(9, "0") or 0)


@dataclass(frozen=True, slots=True)
class Beat:
    """A heartbeat from the bus."""

    came: float  # monotonic, s
    lag_s: float  # UTC at which the last sample arrived, less its stream time
    age_s: float


class Daemon:
    """``driftwatch run CONFIG --json`` as a process of its own; entering starts it, leaving ends all that is left.

    Parameters
    ----------
    config
        The configuration.
    env
        Its environment: of the sound card that it is to see.
    """

    def __init__(self, config: Path, env: dict[str, str]) -> None:
        self.config = config
        self.rows: list[Row] = []
        self.came: list[float] = []  # monotonic time of each row
        self.errors: list[str] = []
        self.beats: list[Beat] = []
        self._mark = f"CARD_TEST={uuid.uuid4()}"
        name, _, value = self._mark.partition("=")
        self._env = env | {name: value, "OMP_NUM_THREADS": "1"}
        self._news = threading.Condition()
        self._gone = False

    def __enter__(self) -> Self:
        self.process = subprocess.Popen(
            [*PROGRAM, "run", str(self.config), "--json"],
            env=self._env, cwd=self.config.parent,
            stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.PIPE,
        )  # fmt: skip
        self._threads = [threading.Thread(target=one) for one in (self._read_rows, self._read_errors, self._listen)]
        for thread in self._threads:
            thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self.process.kill()
        for pid in self.processes():
            with contextlib.suppress(ProcessLookupError):
                os.kill(pid, signal.SIGKILL)
        self.process.wait()
        self._gone = True
        for thread in self._threads:
            thread.join()

    def _read_rows(self) -> None:
        assert self.process.stdout is not None
        with self.process.stdout as lines:
            for line in lines:
                if not line.endswith(b"\n"):
                    break  # it was killed in the midst of it
                with self._news:
                    self.rows.append(json.loads(line))
                    self.came.append(time.monotonic())
                    self._news.notify_all()

    def _read_errors(self) -> None:
        assert self.process.stderr is not None
        with self.process.stderr as lines:
            for line in lines:
                with self._news:
                    self.errors.append(line.decode().rstrip("\n"))
                    self._news.notify_all()

    def _listen(self) -> None:
        endpoint = next(line for line in self.config.read_text().splitlines() if line.startswith("publish"))
        with zmq.Context() as context, context.socket(zmq.SUB) as socket:
            socket.setsockopt(zmq.SUBSCRIBE, b"heartbeat")
            socket.connect(endpoint.split('"')[1])
            while not self._gone:
                if not socket.poll(100):
                    continue
                text = socket.recv_multipart()[1]
                utc_s, came = time.time(), time.monotonic()
                row = json.loads(text)
                age_s = row["sample_age_s"]
                if age_s is not None:
                    with self._news:
                        self.beats.append(Beat(came, utc_s - age_s - ns_of(row["time"]) / NS, age_s))
                        self._news.notify_all()

    # ------------------------------------------------------------------------------------------ waiting

    def until(self, true: Callable[[], Any], seconds: float = LIMIT_S) -> Any:
        """Wait until something is true of what was said; return it."""
        with self._news:
            assert self._news.wait_for(true, seconds), self._so_far()
            return true()

    def row(self, true: Callable[[Row], bool], since: int = 0) -> int:
        """Wait for a row for which something is true; return its place."""
        return int(self.until(lambda: [i for i in range(since, len(self.rows)) if true(self.rows[i])])[0])

    def _so_far(self) -> str:
        kinds = [row["kind"] + (f" {row['phase']}" if "phase" in row else "") for row in self.rows]
        return f"it did not come; so far: {kinds[-20:]}, {self.errors[-5:]}"

    def measuring(self, first: int = 0) -> int:
        """Wait for a usable measurement of each mode in samples from index `first` on; return the later one's place."""
        return max(self.row(lambda row, c=channel: usable(row, c, first)) for channel in TRUTH)  # type: ignore[misc]

    @property
    def reached(self) -> int:
        """Stream index up to which measurements were told."""
        return max(
            (row["first_sample"] + row["samples"] for row in self.rows if row["kind"] == "measurement"), default=0
        )

    def more_beats(self, count: int) -> None:
        """Wait for so many heartbeats from now on."""
        wanted = len(self.beats) + count
        self.until(lambda: len(self.beats) >= wanted)

    # ------------------------------------------------------------------------------------------ its processes

    def processes(self) -> dict[int, str]:
        """Return the processes of this daemon that live, the main one too, and what each is for."""
        found = {}
        for folder in Path("/proc").glob("[0-9]*"):
            with contextlib.suppress(OSError):
                if self._mark.encode() in (folder / "environ").read_bytes().split(b"\0"):
                    words = (folder / "cmdline").read_bytes().decode().split("\0")
                    is_child = "driftwatch.daemon.process" in words
                    found[int(folder.name)] = words[words.index("driftwatch.daemon.process") + 1] if is_child else "run"
        return found

    def pid_of(self, role: str) -> int:
        """Return the first process of a role, for which it may have to be waited."""
        deadline = time.monotonic() + LIMIT_S
        while not (pids := sorted(pid for pid, what in self.processes().items() if what == role)):
            assert time.monotonic() < deadline, f"no {role} runs"
            time.sleep(0.02)
        return pids[0]

    def stop(self, number: signal.Signals = signal.SIGINT) -> int:
        """Ask it to end; return its exit status, once all it said was read."""
        self.process.send_signal(number)
        status = self.process.wait(LIMIT_S)
        for thread in self._threads[:2]:
            thread.join()
        return status


def usable(row: Row, channel: str, first: int = 0) -> bool:
    """Say whether a row is a usable measurement on a channel, of samples from index `first` on."""
    return row["kind"] == "measurement" and row["channel"] == channel and row["usable"] and row["first_sample"] >= first


def health(row: Row, phase: str) -> bool:
    return row["kind"] == "health" and row["phase"] == phase


# ---------------------------------------------------------------------------------------------- what is left


def stored(config: Path) -> list[int]:
    """Return the sequences of all rows in the store, sorted."""
    with contextlib.closing(sqlite3.connect(config.parent / "state" / "rows.db")) as base:
        tables = [name for (name,) in base.execute("SELECT name FROM sqlite_master WHERE type = 'table'")]
        of = [name for name in tables if "sequence" in [c[1] for c in base.execute(f"PRAGMA table_info({name})")]]
        return sorted(number for name in of for (number,) in base.execute(f"SELECT sequence FROM {name}"))  # noqa: S608


def recorded(config: Path) -> list[tuple[int, Floats]]:
    """Return what was recorded, read here by the side files alone: first index and samples of each unbroken stretch."""
    parts: list[tuple[int, Floats]] = []
    for side in (config.parent / "state" / "recordings").glob("*.json"):
        samples = soundfile.read(side.with_suffix(".wav"), dtype="float32", always_2d=True)[0]
        places = [(part["frame"], part["first_sample"]) for part in json.loads(side.read_text())["parts"]]
        ends = [*(frame for frame, _ in places[1:]), len(samples)]
        parts += [(first, samples[frame:end]) for (frame, first), end in zip(places, ends, strict=True)]
    return list(_joined(sorted(parts, key=lambda part: part[0])))


def _joined(parts: list[tuple[int, Floats]]) -> Iterator[tuple[int, Floats]]:
    run: list[tuple[int, Floats]] = []
    for part in parts:
        if run and run[-1][0] + len(run[-1][1]) != part[0]:
            yield run[0][0], np.concatenate([samples for _, samples in run])
            run = []
        run.append(part)
    if run:
        yield run[0][0], np.concatenate([samples for _, samples in run])


def place_in(played: Floats, heard: Floats) -> int:
    """Return where in the played samples a few that were heard stand: each pair of them is the only one of its kind."""
    where = played.tobytes().find(np.ascontiguousarray(heard).tobytes())
    assert where >= 0, "these samples were never played"
    assert where % played.itemsize == 0
    return where // (2 * played.itemsize)
