"""Writing: how many times faster than real time rows are stored, and what pruning does to whoever writes beside it."""

from __future__ import annotations

import tempfile
import time
import uuid
from collections.abc import Callable, Iterator
from pathlib import Path

from driftwatch.daemon.keeper import COMMIT_EVERY_S, Keeper
from driftwatch.daemon.pruner import Pruner
from driftwatch.records import (
    NS,
    Body,
    Envelope,
    Measurement,
    Method,
    Origin,
    TimeQuality,
    Track,
    TrackStatus,
)
from driftwatch.store.lock import WriterLock
from driftwatch.store.writer import Writer

from benchmarks.bars import Row, Size

CHANNELS, MODES, WINDOWS = 8, 3, 2
"""Eight channels with three modes each, two windows a second."""

RATE = CHANNELS * MODES * WINDOWS * 2
"""Rows a second: a measurement and a track point each."""

TIMES = 20.0
DELAY_S = 1.0
OLD_ROWS = 1_000_000
STREAM_S = 1200.0
DAY_NS = 86_400 * NS


def run(size: Size) -> Iterator[Row]:
    """Yield the speed of storing over real time, and the longest wait of a group while old rows are pruned."""
    whole = size.full and size.seconds is None
    with tempfile.TemporaryDirectory() as name:
        yield from _speed(Path(name) / "speed.db", STREAM_S if whole else STREAM_S / 20)
        yield from _pruning(Path(name) / "pruning.db", OLD_ROWS if whole else OLD_ROWS // 20)


def _opened(path: Path, clock: Callable[[], int] = time.time_ns) -> Writer:
    return Writer.open_live(path, WriterLock(path, "bench"), clock)


def _speed(path: Path, seconds: float) -> Iterator[Row]:
    case = f"{seconds:.0f} s of {CHANNELS} channels, {MODES} modes"
    rows = _rows(str(uuid.uuid4()), 0)
    with _opened(path) as writer:
        elapsed = 0.0
        for _ in range(round(seconds / COMMIT_EVERY_S)):  # groups as a live run has them, each a transaction
            group = [next(rows) for _ in range(round(RATE * COMMIT_EVERY_S))]
            began = time.perf_counter()
            writer.write(group)
            elapsed += time.perf_counter() - began
    yield Row(case, "rows stored a second", RATE * seconds / elapsed, "", None)
    yield Row(case, "stored, times real time", seconds / elapsed, f"at least {TIMES:g}", seconds / elapsed >= TIMES)


def _pruning(path: Path, count: int) -> Iterator[Row]:
    """Take steps of pruning one after the other, far faster than a live run does, with a group between any two."""
    now_ns = 400 * DAY_NS
    old = _rows(str(uuid.uuid4()), 0)
    with _opened(path, lambda: 0) as writer:
        for _ in range(count // 5000):
            writer.write([next(old) for _ in range(5000)])
    case = f"{count} old rows pruned beside a writer"
    young = _rows(str(uuid.uuid4()), now_ns)
    longest_group = longest_step = 0.0
    steps = 0
    with _opened(path) as writer:
        keeper, pruner = Keeper(writer, is_patient=True), Pruner(writer, 90.0, lambda: now_ns)
        began = time.monotonic()
        while not pruner.is_done:
            keeper.take([next(young) for _ in range(round(RATE * COMMIT_EVERY_S))])
            due = time.monotonic()
            pruner.step(due)
            stepped = time.monotonic()
            keeper.flush()
            longest_step = max(longest_step, stepped - due)
            longest_group = max(longest_group, time.monotonic() - due)
            steps += 1
        elapsed = time.monotonic() - began
    yield Row(case, "steps", steps, "", None)
    yield Row(case, "rows removed a second", count / elapsed, "", None)
    yield Row(case, "longest step, s", longest_step, "", None)
    yield Row(case, "longest wait of a group, s", longest_group, f"at most {DELAY_S:g}", longest_group <= DELAY_S)


def _rows(run: str, since_ns: int) -> Iterator[Envelope]:
    """Yield the records of a run without end, window by window, as a station numbers them."""
    sequence = 0
    window = 0
    while True:
        time_ns = since_ns + window * NS // WINDOWS
        for channel in range(CHANNELS):
            for mode in range(MODES):
                about = (f"bearing {channel}", f"mode {mode}")
                for body in (_measurement(*about, window), _track(*about, window, time_ns)):
                    sequence += 1
                    yield _envelope(run, sequence, time_ns, body)
        window += 1


def _envelope(run: str, sequence: int, time_ns: int, body: Body) -> Envelope:
    previous = sequence - RATE // WINDOWS
    return Envelope(
        "bench", run, Origin.LIVE, sequence, previous if previous > 0 else None, time_ns, TimeQuality.FREE, body
    )


def _measurement(channel: str, mode: str, window: int) -> Measurement:
    off = window % 997 / 997
    return Measurement(
        channel, mode, Method.AMBIENT, None, 4.0, 24_000 * window, 192_000, 900.0 + off, 0.1, 40.0 + off, 1.5,
        37.0 + off, 43.0 + off, 0.01 * off, 0.1 + off, "m/s2", 20.0 + off, off, usable=True, reasons=(),
    )  # fmt: skip


def _track(channel: str, mode: str, window: int, time_ns: int) -> Track:
    off = window % 997 / 997
    return Track(
        channel, mode, TrackStatus.TRACKING, None, 900.0 + off, 0.05, 40.0 + off, 0.5, 39.0 + off, 41.0 + off, 0.01,
        None, None, None, None, 30.0, 1e-5 * off, 1e-5, 1e-4 * off, 1e-4, None, time_ns, None,
    )  # fmt: skip
