"""Memory of the running daemon: that no process of it grows, live on a sound card and over hours of simulated signal.

The resident memory of every process is read a few times a second, after a warm-up. A slope over stream time is fitted
to the means of consecutive batches, not to the readings: those follow each other closely, and as many independent ones
would promise too narrow a limit. What dependence is left between the batches' residuals widens the standard error by
that of an autoregressive series of first order, sqrt((1 + r)/(1 - r)), with r taken from them and never below 0; the
limits are those of Student's t. (Batch means: Law & Kelton, Simulation Modeling and Analysis; from memory.)
"""

from __future__ import annotations

import json
import signal
import subprocess
import tempfile
import time
from collections.abc import Iterator, Mapping
from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from driftwatch.records import NS, parse_time
from numpy.typing import ArrayLike
from scipy import stats

from benchmarks.bars import Row, Size
from benchmarks.live_run import STARTING_S, Listener, start
from benchmarks.live_scene import LiveScene, Player, card, free_endpoint, two_cores
from benchmarks.processes import daemon_processes, resident_mb
from benchmarks.scene import MODES, RATE_HZ
from soundrig import Rig

SCENE = LiveScene(channels=2, modes=2, impacts=True)
SECONDS = 1200.0
SECONDS_SMALL = 4.0
SIMULATED_OVER_LIVE = 6.0
"""The simulated source runs so many times as long in stream time: 2 h for 20 minutes."""

WARM_UP = 0.5
LEAST_WARM_UP_S = 60.0
"""Before the measured time, as a part of it and at least: the ring of samples fills in half a minute, the page cache of
the database, 2 MB, in about 500 s of these modes' records."""

PER_S = 7200.0
LIMIT_MB = 5.0
"""Most growth in `PER_S`, 1e6 bytes."""

READ_EVERY_S = 0.25
"""Time between two readings of the memory, seconds: a simulation is over soon."""

CONFIDENCE = 0.95
BATCHES = 20


@dataclass
class Course:
    """What memory did."""

    stream_s: list[float] = field(default_factory=list)
    resident_mb: dict[str, list[float]] = field(default_factory=dict)  # by process


@dataclass(frozen=True, slots=True)
class Slope:
    """A slope with the limits of its two-sided interval of `CONFIDENCE`, 1e6 bytes per `PER_S`."""

    value: float
    low: float
    high: float


def run(size: Size) -> Iterator[Row]:
    """Yield the growth of the daemon and of each of its processes, with its limits."""
    seconds = size.seconds or (SECONDS if size.full else SECONDS_SMALL)
    least_s = LEAST_WARM_UP_S if size.full else 0.0
    with tempfile.TemporaryDirectory() as name, two_cores():
        live = followed(Path(name), seconds, max(least_s, WARM_UP * seconds), simulated=False)
        yield from _rows(f"live, {seconds:.0f} s", live, size.full)
    seconds *= SIMULATED_OVER_LIVE
    with tempfile.TemporaryDirectory() as name, two_cores():
        unpaced = followed(Path(name), seconds, max(least_s, WARM_UP * seconds), simulated=True)
        yield from _rows(f"simulated unpaced, {seconds:.0f} s", unpaced, size.full)


def followed(folder: Path, seconds: float, warm_up_s: float, *, simulated: bool) -> Course:
    """Run ``driftwatch run`` for so much stream time after the warm-up and read its memory.

    Raises
    ------
    RuntimeError
        When it does not come up, ends before its time or with a fault, or starts a process again.
    """
    endpoint = free_endpoint()
    source = _simulated() if simulated else card(SCENE.channels)
    (folder / "live.toml").write_text(SCENE.config(source, endpoint), encoding="utf-8")
    course = Course()
    with ExitStack() as stack:
        rig = stack.enter_context(Rig(rate_hz=RATE_HZ, inputs=SCENE.channels))
        if not simulated:
            stack.enter_context(Player(rig, SCENE.loop(), folder))
        listener = stack.enter_context(Listener(endpoint))
        daemon = start(stack, ["driftwatch", "run", "live.toml"], folder, rig.env)
        _follow(course, listener, daemon, seconds, warm_up_s)
        daemon.send_signal(signal.SIGINT)
        if daemon.wait(STARTING_S) != 0:
            said = (folder / "daemon.log").read_text(errors="replace")
            raise RuntimeError(f"the daemon ended with {daemon.returncode}:\n{said}")
    return course


def _follow(
    course: Course, listener: Listener, daemon: subprocess.Popen[bytes], seconds: float, warm_up_s: float
) -> None:
    """Read memory, now and then upon a message, from the warm-up's end to the end."""
    began_s: float | None = None
    since_s = 0.0
    processes: dict[str, int] = {}
    now = time.monotonic()
    due, patience = now, now + STARTING_S
    while since_s < warm_up_s + seconds or len(course.stream_s) < BATCHES:
        if daemon.poll() is not None or now > patience:
            raise RuntimeError("the daemon ended, or said nothing any more; expected it to measure until it is stopped")
        came, now = listener.next(0.2), time.monotonic()
        if came is None or now < due or (began_s is None and not came[1].startswith(b"measurement/")):
            continue
        due, patience = now + READ_EVERY_S, now + STARTING_S
        stream_s = parse_time(json.loads(came[2])["time"]) / NS
        began_s = stream_s if began_s is None else began_s
        since_s = stream_s - began_s
        if since_s >= warm_up_s:
            processes = processes or daemon_processes(daemon.pid)
            _read(course, processes, since_s)
    left = daemon_processes(daemon.pid)
    if left != processes:
        raise RuntimeError(f"the processes were {processes} and are {left}; expected the same ones to the end")


def _read(course: Course, processes: Mapping[str, int], since_s: float) -> None:
    course.stream_s.append(since_s)
    for name, pid in processes.items():
        course.resident_mb.setdefault(name, []).append(resident_mb(pid))


def slope(stream_s: ArrayLike, megabytes: ArrayLike) -> Slope:
    """Return how fast memory grows, by regression over batch means.

    Parameters
    ----------
    stream_s, megabytes
        When it was read, seconds, and what was read; at least `BATCHES` times.
    """
    times, values = np.asarray(stream_s, dtype=float), np.asarray(megabytes, dtype=float)
    x = np.array([np.mean(part) for part in np.array_split(times, BATCHES)])
    y = np.array([np.mean(part) for part in np.array_split(values, BATCHES)])
    from_mean = x - np.mean(x)
    spread = float(np.sum(from_mean**2))
    rate = float(np.sum(from_mean * y)) / spread
    residuals = y - np.mean(y) - rate * from_mean
    power = float(np.sum(residuals**2))
    r = max(0.0, float(np.sum(residuals[1:] * residuals[:-1])) / power) if power > 0 else 0.0
    std = np.sqrt(power / (BATCHES - 2) / spread * (1 + r) / (1 - r))
    half = float(stats.t.ppf((1 + CONFIDENCE) / 2, BATCHES - 2)) * std
    return Slope(*(PER_S * float(value) for value in (rate, rate - half, rate + half)))


def _rows(case: str, course: Course, full: bool) -> Iterator[Row]:
    total = np.sum(list(course.resident_mb.values()), axis=0)
    for name, values in course.resident_mb.items():
        grown = slope(course.stream_s, values)
        yield Row(case, f"{name}, mean, MB", float(np.mean(values)), "", None)
        yield Row(case, f"{name}, MB per 2 h", grown.value, "", None)
        yield Row(case, f"{name}, upper limit", grown.high, "", None)
    grown = slope(course.stream_s, total)
    yield Row(case, "the daemon, mean, MB", float(np.mean(total)), "", None)
    yield Row(case, "the daemon, MB per 2 h", grown.value, "", None)
    yield Row(case, "the daemon, lower limit", grown.low, "", None)
    bar = f"under {LIMIT_MB:.0f}, 95 % confidence"
    yield Row(case, "the daemon, upper limit", grown.high, bar, grown.high < LIMIT_MB if full else None)


def _simulated() -> str:
    """Return the table of a source that gives the scene's modes, each hit once a minute, endless, as fast as it can."""
    parts = [
        f'[[source]]\nname = "simulated"\nkind = "simulated"\nrate_hz = {RATE_HZ}\ninputs = {SCENE.channels}\n'
        "pace = 0.0\nnoise = 0.001"
    ]
    for (channel, name), frequency_hz in SCENE.truth().items():
        q, half_hz = next((q, half) for other, _, q, half in MODES if other == name)
        in_band = 1e-3 * np.sqrt(2 * half_hz / (RATE_HZ / 2))
        parts.append(
            f"[[source.resonator]]\ninput = {channel.removeprefix('c')}\nfrequency_hz = {frequency_hz}\nq = {q}\n"
            f'level = {10 * in_band}\nquantity = "velocity"\nimpact_every_s = 60.0\nimpact_peak = {100 * in_band}'
        )
    return "\n".join(parts)
