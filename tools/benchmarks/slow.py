"""A subscriber that stops reading: what it costs the publisher's memory, and what it costs the others.

Two publishers, processes of their own, send 200 records a second each, to three subscribers each that read; beside
those of one there is one more, which has stopped. Both are heard at the same time, so that whatever else the machine
does falls on both. Each record carries the instant at which it was made, on the one clock of all processes. Memory is
the publisher's resident memory, and what the system holds of its connections for it.
"""

from __future__ import annotations

import subprocess
import sys
import time
from collections.abc import Iterator, Sequence
from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import zmq
from driftwatch.records import parse_time
from driftwatch.stream.instants import instant_ns

from benchmarks.bars import Row, Size
from benchmarks.processes import machine_busy_s, resident_mb
from benchmarks.slow_ends import RATE

SECONDS = 600.0
SECONDS_SMALL = 6.0
READERS = 3
LIMIT_MB = 20.0
"""Most growth, 1e6 bytes."""

LIMIT_MS = 50.0
"""Most that others may wait longer, milliseconds; it is meant for a quiet machine."""

READ_EVERY_S = 0.5
WARM_UP_S = 3.0


@dataclass
class Heard:
    """What came in a stretch of time."""

    waits_ms: list[float] = field(default_factory=list)  # from sent to heard, of each record at each reader
    memory_mb: list[float] = field(default_factory=list)  # resident, of the publisher
    queued_mb: list[float] = field(default_factory=list)  # in the system's send buffers of its connections


def run(size: Size) -> Iterator[Row]:
    """Yield waits without and with a subscriber that has stopped, and what it costs in memory."""
    seconds = size.seconds or (SECONDS if size.full else SECONDS_SMALL)
    busy_s, began = machine_busy_s(), time.monotonic()
    before, (without, beside), gone = _measured(seconds)
    busy = (machine_busy_s() - busy_s) / (time.monotonic() - began)
    yield Row(f"{seconds:.0f} s", "processors busy, all in all", busy, "", None)
    yield from _waits("without it", without)
    yield from _waits("beside it", beside)
    longer = [(name, of(beside) - of(without)) for name, of in (("99th percentile", _percentile), ("most", _most))]
    for name, value in longer:
        yield Row("the others", f"waited longer, {name}, ms", value, f"under {LIMIT_MS:.0f}", value < LIMIT_MS)
    at_first = float(np.median(before.memory_mb) + np.median(before.queued_mb))
    grown = float(np.max(np.add(beside.memory_mb, beside.queued_mb))) - at_first
    yield Row("the publisher", "memory at first, MB", at_first, "", None)
    yield Row("the publisher", "of it in send buffers later, MB", max(beside.queued_mb), "", None)
    yield Row("the publisher", "memory grew by, MB", grown, f"under {LIMIT_MB:.0f}", grown < LIMIT_MB)
    yield Row("the slow one", "records that waited for it", gone[0], "", None)
    yield Row("the slow one", "records that it missed", gone[1], "", None)


def _measured(seconds: float) -> tuple[Heard, tuple[Heard, Heard], tuple[int, int]]:
    """Return what was heard before there was the slow one, then without and beside it, and what it got and missed."""
    with ExitStack() as stack:
        publishers = [_end(stack, "publish") for _ in range(2)]
        endpoints = [_line(publisher) for publisher in publishers]
        readers = _Readers(stack, endpoints, [publisher.pid for publisher in publishers])
        readers.hear(WARM_UP_S)
        _, before = readers.hear(WARM_UP_S)
        slow = _end(stack, "stall", endpoints[1])
        _line(slow)
        readers.hear(WARM_UP_S)  # what came while it was waited for
        without, beside = readers.hear(seconds)
        for heard in (without, beside):
            if len(heard.waits_ms) < 0.9 * READERS * RATE * seconds:
                raise RuntimeError(f"{len(heard.waits_ms)} records came; expected {RATE * READERS * seconds:.0f}")
        if slow.stdin is None:
            raise RuntimeError("the slow one has no standard input")
        slow.stdin.close()
        got, missed = (int(word) for word in _line(slow).split())
    return before, (without, beside), (got, missed)


class _Readers:
    """Subscribers that read, `READERS` at each publisher."""

    def __init__(self, stack: ExitStack, endpoints: Sequence[str], pids: Sequence[int]) -> None:
        self._ports = [int(endpoint.rpartition(":")[2]) for endpoint in endpoints]
        self._pids = pids
        context = stack.enter_context(zmq.Context())
        self._poller = zmq.Poller()
        self._which: dict[zmq.Socket[bytes], int] = {}
        for number in range(READERS * len(endpoints)):
            which = number % len(endpoints)
            socket = stack.enter_context(context.socket(zmq.SUB))
            socket.setsockopt(zmq.LINGER, 0)
            socket.subscribe("measurement/")
            socket.subscribe("track/")
            socket.connect(endpoints[which])
            self._poller.register(socket, zmq.POLLIN)
            self._which[socket] = which

    def hear(self, seconds: float) -> list[Heard]:
        """Read for so long, and look at each publisher's memory now and then; return what came from each."""
        heard = [Heard() for _ in self._pids]
        end, due = time.monotonic() + seconds, time.monotonic()
        while (now := time.monotonic()) < end:
            for socket, _ in self._poller.poll(100):
                line = socket.recv_multipart()[1]
                came_ns = instant_ns()
                if not line.endswith(b',"repeated":true}'):
                    heard[self._which[socket]].waits_ms.append((came_ns - _sent_ns(line)) / 1e6)
            if now >= due:
                due = now + READ_EVERY_S
                for one, pid, port in zip(heard, self._pids, self._ports, strict=True):
                    one.memory_mb.append(resident_mb(pid))
                    one.queued_mb.append(_queued_mb(port))
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
    yield Row(case, "wait, most, ms", _most(heard), "", None)


def _percentile(heard: Heard) -> float:
    return float(np.percentile(heard.waits_ms, 99))


def _most(heard: Heard) -> float:
    return max(heard.waits_ms)


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
