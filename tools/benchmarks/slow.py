"""A subscriber that stops reading: what it costs the publisher's memory, and what it costs the others.

A publisher in a process of its own sends 200 records a second. Subscribers that read are heard first without, then
beside one that has stopped; each record carries the instant at which it was sent, on the one clock of all processes.
Memory is the publisher's resident memory, and what the system holds of the connection for it.
"""

from __future__ import annotations

import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import zmq
from driftwatch.records import parse_time
from driftwatch.stream.instants import instant_ns

from benchmarks.bars import Row, Size
from benchmarks.processes import resident_mb
from benchmarks.slow_ends import RATE

SECONDS = 600.0
SECONDS_SMALL = 6.0
ALONE = 1.0
"""Part of that for which the others are heard before, without the slow one: as long, or the longest waits would not
compare."""

READERS = 3
LIMIT_MB = 20.0
"""Most growth, 1e6 bytes."""

LIMIT_MS = 50.0
"""Most that others may wait longer, milliseconds."""

READ_EVERY_S = 0.5
_WARM_UP_S = 3.0


@dataclass
class Heard:
    """What came in a stretch of time."""

    waits_ms: list[float] = field(default_factory=list)  # from sent to heard, of each record at each reader
    memory_mb: list[float] = field(default_factory=list)  # resident, of the publisher
    queued_mb: list[float] = field(default_factory=list)  # in the system's send buffers of its connections


def run(size: Size) -> Iterator[Row]:
    """Yield waits without and with a subscriber that has stopped, and what it costs in memory."""
    seconds = size.seconds or (SECONDS if size.full else SECONDS_SMALL)
    alone, beside, gone = _measured(seconds)
    yield from _waits(f"without, {ALONE * seconds:.0f} s", alone)
    yield from _waits(f"beside it, {seconds:.0f} s", beside)
    for name, value in (("99th percentile", _percentile(beside) - _percentile(alone)), ("most", _most(beside, alone))):
        yield Row("the others", f"waited longer, {name}, ms", value, f"under {LIMIT_MS:.0f}", value < LIMIT_MS)
    before = np.median(alone.memory_mb) + np.median(alone.queued_mb)
    grown = float(np.max(np.add(beside.memory_mb, beside.queued_mb)) - before)
    yield Row("the publisher", "memory at first, MB", float(before), "", None)
    yield Row("the publisher", "of it in send buffers later, MB", max(beside.queued_mb), "", None)
    yield Row("the publisher", "memory grew by, MB", grown, f"under {LIMIT_MB:.0f}", grown < LIMIT_MB)
    yield Row("the slow one", "records that waited for it", gone[0], "", None)
    yield Row("the slow one", "records that it missed", gone[1], "", None)


def _measured(seconds: float) -> tuple[Heard, Heard, tuple[int, int]]:
    """Return what was heard without and beside the slow one, and what that one got at last and missed."""
    with ExitStack() as stack:
        publisher = _end(stack, "publish")
        endpoint = _line(publisher)
        readers = _Readers(stack, endpoint)
        readers.hear(publisher.pid, _WARM_UP_S)
        alone = readers.hear(publisher.pid, ALONE * seconds)
        slow = _end(stack, "stall", endpoint)
        _line(slow)
        readers.hear(publisher.pid, _WARM_UP_S)  # what came while it was waited for
        beside = readers.hear(publisher.pid, seconds)
        if min(len(alone.waits_ms) / ALONE, len(beside.waits_ms)) < 0.9 * READERS * RATE * seconds:
            raise RuntimeError(f"{len(beside.waits_ms)} records came; expected {RATE * READERS * seconds:.0f}")
        if slow.stdin is None:
            raise RuntimeError("the slow one has no standard input")
        slow.stdin.close()
        got, missed = (int(word) for word in _line(slow).split())
    return alone, beside, (got, missed)


class _Readers:
    """Subscribers that read."""

    def __init__(self, stack: ExitStack, endpoint: str) -> None:
        self._port = int(endpoint.rpartition(":")[2])
        context = stack.enter_context(zmq.Context())
        self._poller = zmq.Poller()
        for _ in range(READERS):
            socket = stack.enter_context(context.socket(zmq.SUB))
            socket.setsockopt(zmq.LINGER, 0)
            socket.subscribe("measurement/")
            socket.subscribe("track/")
            socket.connect(endpoint)
            self._poller.register(socket, zmq.POLLIN)

    def hear(self, pid: int, seconds: float) -> Heard:
        """Read for so long; look at the publisher's memory now and then."""
        heard = Heard()
        end, due = time.monotonic() + seconds, time.monotonic()
        while (now := time.monotonic()) < end:
            for socket, _ in self._poller.poll(100):
                line = socket.recv_multipart()[1]
                came_ns = instant_ns()
                if not line.endswith(b',"repeated":true}'):
                    heard.waits_ms.append((came_ns - _sent_ns(line)) / 1e6)
            if now >= due:
                due = now + READ_EVERY_S
                heard.memory_mb.append(resident_mb(pid))
                heard.queued_mb.append(_queued_mb(self._port))
        return heard


def _sent_ns(line: bytes) -> int:
    return parse_time(line.partition(b'"time":"')[2][:30].decode())


def _queued_mb(port: int) -> float:
    """Return what waits in the send buffers of the connections that were accepted on a port, 1e6 bytes."""
    found = 0
    for line in Path("/proc/net/tcp").read_text(encoding="ascii").splitlines()[1:]:
        words = line.split()
        if int(words[1].partition(":")[2], 16) == port:
            found += int(words[4].partition(":")[0], 16)
    return found / 1e6


def _waits(case: str, heard: Heard) -> Iterator[Row]:
    yield Row(case, "wait, median, ms", float(np.median(heard.waits_ms)), "", None)
    yield Row(case, "wait, 99th percentile, ms", _percentile(heard), "", None)
    yield Row(case, "wait, most, ms", max(heard.waits_ms), "", None)


def _percentile(heard: Heard) -> float:
    return float(np.percentile(heard.waits_ms, 99))


def _most(beside: Heard, alone: Heard) -> float:
    return max(beside.waits_ms) - max(alone.waits_ms)


def _end(stack: ExitStack, *words: str) -> subprocess.Popen[str]:
    """Start one of the ends; it goes with the stack."""
    process = subprocess.Popen(
        [sys.executable, "-m", "benchmarks.slow_ends", *words],
        cwd=Path(__file__).parent.parent,
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    )
    stack.enter_context(process)
    stack.callback(process.kill)
    return process


def _line(process: subprocess.Popen[str]) -> str:
    if process.stdout is None or not (line := process.stdout.readline()):
        raise RuntimeError("an end of the bench ended by itself; expected a line from it")
    return line.strip()
