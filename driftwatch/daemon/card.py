"""Reading a sound card for weeks: opened by its name, watched, and opened again for ever when it is lost."""

from __future__ import annotations

import os
import stat
import sys
import time
from collections.abc import Callable, Iterable
from multiprocessing.connection import Connection
from typing import Any

from driftwatch.daemon.messages import (
    ClockSeen,
    ClockStepped,
    LiveSource,
    Opened,
    ReadCard,
    Refused,
    Told,
)
from driftwatch.daemon.wall import time_quality
from driftwatch.records import NS, Fault
from driftwatch.stream.arrival import ArrivalJudge, Placed
from driftwatch.stream.clock import WallClock, clock_record
from driftwatch.stream.instants import instant_ns
from driftwatch.stream.ring import Ring, Tie
from driftwatch.stream.soundcard import CardStream, find_input, leave_hung, sound_inputs, within
from driftwatch.stream.source import SourceRefusedError, StreamError

SILENCE_S = 4.0
"""Age of the last callback at which a stream that says nothing counts as lost: a busy computer is late by less."""

OPEN_S = 3.0
CLOSE_S = 1.0
"""How long opening and closing may take, seconds; what takes longer hangs, and only the end of the process ends it."""

FIRST_RETRY_S = 0.1
LONGEST_RETRY_S = 2.0
"""Wait before the second attempt to open the device, doubled each time up to the longest, seconds."""

LOOK_S = 0.004
"""Longest sleep between two looks at what the callback brought, seconds: part of the latency."""

PARENT_EVERY_S = 0.05
"""Time between two looks whether the parent wants no more, seconds."""

CLOCK_FIRST_S = 60.0
CLOCK_EVERY_S = 600.0
"""When the sample clock's figures are told for the first time, and how often then, seconds."""

LONGEST_STDERR = 1 << 16
"""Bytes of standard error that are kept before the next attempt to open the device."""

EXIT_HUNG = 3
"""Exit status of a process that gave up a sound library that hangs."""


class CardCapture:
    """Reads a sound card into a ring.

    Parameters
    ----------
    order
        What to read.
    ring
        Where samples go.
    connection
        To the parent.
    utc_ns
        The computer's clock.
    """

    def __init__(
        self,
        order: ReadCard,
        ring: Ring,
        connection: Connection[Any, Any],
        utc_ns: Callable[[], int] = time.time_ns,
    ) -> None:
        self._order = order
        self._ring = ring
        self._connection = connection
        self._utc_ns = utc_ns
        self._rate_hz = ring.shape.rate_hz
        self._judge = ArrivalJudge(self._rate_hz, ring.shape.frames, ring.shape.most_waiting * 3 // 4)
        self._wall = WallClock()
        self._start_ns = order.start_ns  # stream time of sample 0; None: it does not run yet
        self._device = ""
        self._reason = order.resumes  # why samples are missing before the next stream
        self._next = ring.filled  # number of the next block to decide on
        self._opened_ns = 0  # monotonic time
        self._retry_s = FIRST_RETRY_S
        self._told = ""
        self._chores_due = 0.0
        self._parent_due = 0.0
        self._enough = False
        self._clock_due = time.monotonic() + CLOCK_FIRST_S
        self._quality = time_quality()

    # ------------------------------------------------------------------------------------------ the loop

    def run(self) -> None:
        """Read until the parent has had enough."""
        self._resume()
        while not self._is_enough():
            stream = self._open()
            if stream is not None and not self._listen(stream):
                break
            self._pause(self._retry_s)
            self._retry_s = min(LONGEST_RETRY_S, 2.0 * self._retry_s)
        self._ring.end()

    def _resume(self) -> None:
        """Go on after a process that died: its undecided blocks have no place in time."""
        self._ring.pass_undecided()
        tied = self._ring.tied or self._last_tie()
        if tied is not None and self._start_ns is not None:
            self._ring.silent = self._reason
            self._judge.begin_at(tied.index, tied.monotonic_ns, tied.deviation)

    def _last_tie(self) -> Tie | None:
        last = self._ring.last_block()
        return None if last is None else Tie(last.first_sample + len(last.samples), last.arrived_ns, 0.0)

    def _is_enough(self) -> bool:
        """Say whether the parent wants no more; it is looked now and then, since to look costs more than to listen."""
        now = time.monotonic()
        if now >= self._parent_due and not self._enough:
            self._parent_due = now + PARENT_EVERY_S
            self._enough = bool(self._connection.poll(0))
        return self._enough

    def _pause(self, seconds: float) -> None:
        until = time.monotonic() + seconds
        while (left := until - time.monotonic()) > 0 and not self._is_enough():
            self._ring.beat(instant_ns())
            self._chores()
            time.sleep(min(left, 0.05))

    # ------------------------------------------------------------------------------------------ opening

    def _open(self) -> CardStream | None:
        """Try to open the device; None: it is not to be had now, which was told."""
        self._ring.beat(instant_ns())
        self._ring.attempt()
        _shorten_stderr()
        try:
            return within(OPEN_S, self._opened)
        except TimeoutError as error:
            text = f"{error}; expected the device to open; the sound server may be stopped"
            if self._start_ns is None and not self._order.source.wait_for_device:
                self._connection.send(Told(text, fault=True))  # the parent tries a few times before it refuses
            else:
                self._unavailable(text)
            self._leave()
        except StreamError as error:
            self._unavailable(str(error), error.problems if isinstance(error, SourceRefusedError) else None)
        return None

    def _opened(self) -> CardStream:
        source, order = self._order.source, self._order
        device = find_input(sound_inputs(), source.device, order.least_inputs)
        self._device = device.full_name
        return CardStream(
            device,
            rate_hz=source.rate_hz,
            inputs=min(self._ring.shape.inputs, device.inputs),
            sample_format=source.sample_format,
            frames=self._ring.shape.frames,
            sink=self._ring,
        )

    def _unavailable(self, text: str, lasting: tuple[str, ...] | None = None) -> None:
        """Tell that the device cannot be had; before the begin that ends the start, unless it is to be waited for."""
        if self._start_ns is None:
            if lasting or not self._order.source.wait_for_device:
                self._connection.send(Refused(lasting or (text,)))
                self._connection.recv()  # the parent ends this process: raises then
            self._told = text  # the parent tells it as what is waited for
            self._begin_waiting(text)
        self._ring.silent = self._reason
        if text != self._told:
            self._told = text
            self._connection.send(Told(text, fault=True))

    def _begin_waiting(self, text: str) -> None:
        """Let stream time begin now, without a sample."""
        now = instant_ns()
        self._start_ns = self._utc_ns()
        self._judge.begin_at(0, now)
        self._ring.tie(Tie(0, now, 0.0))
        self._connection.send(Opened(self._source(self._start_ns), text))

    def _source(self, start_ns: int) -> LiveSource:
        shape, named = self._ring.shape, self._order.source
        opened = f"{self._device or named.device or 'the default sound input'}, {shape.inputs} inputs"
        details = f"{named.sample_format}, blocks of {shape.frames} samples"
        return LiveSource(
            name=named.name,
            rate_hz=shape.rate_hz,
            inputs=shape.inputs,
            start_ns=start_ns,
            time_quality=self._quality,
            sources=(f"{opened}, {details}",),
            assumed=("the delay from the plug to the program is taken as none",),
        )

    def _leave(self) -> None:
        """End this process past a sound library that hangs; the parent starts another one."""
        sys.stderr.write("the sound system hangs; only a new process can try again\n")  # the parent tells it
        leave_hung(EXIT_HUNG)

    # ------------------------------------------------------------------------------------------ listening

    def _listen(self, stream: CardStream) -> bool:
        """Decide on what comes until the stream is lost; False: the parent has had enough."""
        self._place(self._judge.opened(self._reason))
        self._opened_ns = instant_ns()
        pause = min(LOOK_S, self._ring.shape.frames / self._rate_hz / 4)
        while (lost := self._lost(stream)) is None:
            self._decide()
            self._ring.beat(instant_ns())
            self._chores()
            if self._is_enough():
                self._close(stream)
                self._decide()
                self._place(self._judge.ended(Fault.DEVICE))
                return False
            time.sleep(pause)
        self._decide()
        self._lose(stream, lost)
        return True

    def _lost(self, stream: CardStream) -> str | None:
        """Return in what way the stream is lost; None: it is not."""
        if stream.finished:
            return "the stream ended: the device or its server is gone"
        if instant_ns() - max(self._opened_ns, self._ring.called_ns) > SILENCE_S * NS:
            return f"no samples came for {SILENCE_S:g} s: the device or its server stands still"
        return None

    def _lose(self, stream: CardStream, how: str) -> None:
        self._reason = Fault.DEVICE
        self._place(self._judge.ended(self._reason))
        self._ring.silent = self._reason
        self._told = how
        self._connection.send(Told(f"{self._device}: {how}; it is opened again", fault=True))
        self._close(stream)

    def _close(self, stream: CardStream) -> None:
        if not stream.close(CLOSE_S):
            self._place(self._judge.ended(Fault.DEVICE))
            if self._is_enough():
                self._ring.end()
            self._leave()

    def _decide(self) -> None:
        """Give what the callback brought its place in the stream."""
        for block in self._ring.arrived(self._next):
            if self._start_ns is None:
                self._begin(block.arrived_ns, block.count)
            if block.dropped_before:
                self._place(self._judge.dropped(block.dropped_before, block.arrived_ns))
            self._next = block.number + 1
            self._place(self._judge.came(block.number, block.count, block.arrived_ns, block.flagged))

    def _begin(self, arrived_ns: int, count: int) -> None:
        """Let stream time begin with the first sample."""
        age_ns = instant_ns() - arrived_ns
        self._start_ns = self._utc_ns() - age_ns - count * NS // self._rate_hz
        self._connection.send(Opened(self._source(self._start_ns), None))

    def _place(self, placed: Iterable[Placed]) -> None:
        for block in placed:
            self._ring.place(block.number, block.first_sample, block.cause or Fault.GAP)
            self._ring.publish(block.number + 1)
            if block.first_sample is not None and self._ring.silent is not None:
                self._ring.silent = None
                self._told = ""
                self._retry_s = FIRST_RETRY_S
                self._connection.send(Told(f"{self._device}: samples come again", fault=False))

    # ------------------------------------------------------------------------------------------ clocks

    def _chores(self) -> None:
        """Once a second: look at the clocks, and note where the stream stands for a process that goes on after this."""
        now = time.monotonic()
        if now < self._chores_due:
            return
        self._chores_due = now + 1.0
        monotonic_ns, utc_ns = instant_ns(), self._utc_ns()
        step = self._wall.saw(monotonic_ns, utc_ns)
        if step is not None and self._start_ns is not None:
            self._quality = time_quality()
            self._connection.send(ClockStepped(step, self._quality))
        if self._start_ns is None:
            return
        self._ring.tie(Tie(self._judge.expected_index(monotonic_ns), monotonic_ns, self._judge.deviation))
        if now >= self._clock_due and self._judge.rate.deviation_ppm is not None:
            self._clock_due = now + CLOCK_EVERY_S
            record = clock_record(self._order.source.name, self._rate_hz, self._start_ns, self._judge, self._wall)
            self._connection.send(ClockSeen(record))


def _shorten_stderr() -> None:
    """Forget what the sound library wrote on standard error, at each attempt, where that is a file and long."""
    status = os.fstat(2)
    if stat.S_ISREG(status.st_mode) and status.st_size > LONGEST_STDERR:
        os.ftruncate(2, 0)
        os.lseek(2, 0, os.SEEK_SET)
