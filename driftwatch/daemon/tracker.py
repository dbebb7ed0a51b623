"""The process that measures: blocks from the ring in, readings out by the pipe."""

from __future__ import annotations

import time
from multiprocessing.connection import Connection
from typing import Any

from driftwatch.daemon.messages import Finished, Measure, MeasuredBlock, MeasuredBlocks
from driftwatch.pipeline.group import ChannelGroup
from driftwatch.pipeline.reading import Reading
from driftwatch.records import Block, sample_time_ns
from driftwatch.stream.ring import Ring, Seen

AT_ONCE = 64
"""Blocks measured before their readings are told: few, so that a late worker soon shows that it works."""

LONGEST_LOOK_S = 0.005
"""Longest sleep between two looks for new blocks, seconds: part of the latency."""

PARENT_EVERY_S = 0.5
"""Time between two looks whether the parent is still there, seconds."""


def work(order: Measure, ring: Ring, connection: Connection[Any, Any]) -> None:
    """Measure until the stream ends.

    Raises
    ------
    OverrunError
        When blocks were written over before they were read.
    EOFError
        When the parent is gone.
    """
    pause = min(LONGEST_LOOK_S, ring.shape.frames / ring.shape.rate_hz / 4)
    tracker = _Tracker(order, ring)
    looked = 0.0
    while True:
        ended = ring.ended  # asked before the last look: what was published before it is then seen
        blocks = tracker.step()
        if blocks:
            connection.send(MeasuredBlocks(blocks))
            tracker.done()
            continue
        if ended and tracker.has_read_all:
            connection.send(Finished(tracker.finish()))
            return
        if time.monotonic() - looked > PARENT_EVERY_S:
            looked = time.monotonic()
            if connection.poll(0):
                connection.recv()  # there are no further orders: raises when the parent is gone
        time.sleep(pause)


class _Tracker:
    """Measures; after a restart it goes back as far as what is measured next may depend on."""

    def __init__(self, order: Measure, ring: Ring) -> None:
        self._order = order
        self._ring = ring
        self._source = order.source
        begin, first_sample = self._begin()
        self._group = ChannelGroup(order.config, order.source, order.channels, first_sample)
        self._reader = ring.reader(order.place, begin)

    def _begin(self) -> tuple[int, int]:
        """Return the number and the stream index at which to begin."""
        order = self._order
        if order.number == 0:
            return 0, self._source.first_sample
        wanted = order.position - ChannelGroup(order.config, order.source, order.channels).memory
        begin, first_sample = order.number, order.position
        oldest = max(order.oldest, self._ring.oldest())
        for number in range(order.number - 1, oldest - 1, -1):
            block = self._ring.seen(number)
            if block is None or first_sample <= max(wanted, self._source.first_sample):
                break
            if len(block.samples):
                begin, first_sample = number, block.first_sample
        return begin, first_sample

    @property
    def has_read_all(self) -> bool:
        """Whether there is no published block left."""
        return self._reader.next >= self._ring.published

    def step(self) -> list[MeasuredBlock]:
        """Measure what there is, a number of blocks at most; return those whose readings were not told before."""
        return [measured for block in self._reader.fresh(AT_ONCE) if (measured := self._measured(block)) is not None]

    def _measured(self, block: Seen) -> MeasuredBlock | None:
        readings: list[Reading] = []
        if len(block.samples):
            time_ns = sample_time_ns(self._source.start_ns, block.first_sample, self._source.rate_hz)
            pushed = Block(self._source.name, block.first_sample, time_ns, block.samples, block.cause)
            readings = self._group.push(pushed)
        if block.number < self._order.number:
            return None
        return MeasuredBlock(
            block.number, block.first_sample, len(block.samples), block.cause, block.arrived_ns, readings
        )

    def done(self) -> None:
        """Let go of the blocks that were told."""
        self._reader.done()

    def finish(self) -> list[Any]:
        """Return what the last samples still make known."""
        return self._group.finish()
