"""The process that reads the source: it alone touches the sound library, and it loads no more than it needs."""

from __future__ import annotations

import time
from multiprocessing.connection import Connection
from typing import Any

from driftwatch.daemon.card import CardCapture
from driftwatch.daemon.messages import Failed, ReadCard, ReadSource
from driftwatch.records import Block
from driftwatch.stream.instants import instant_ns
from driftwatch.stream.ring import Ring
from driftwatch.stream.source import StreamError

LOOK_S = 0.05
"""Longest sleep of a source that waits for its time, or for its readers, seconds."""

ROOM_S = 0.002
"""Sleep of a source that waits for room and is to go on as fast as it can, seconds."""


def work(order: ReadCard | ReadSource, ring: Ring, connection: Connection[Any, Any]) -> None:
    """Read a source until it ends or the parent has had enough."""
    if isinstance(order, ReadCard):
        CardCapture(order, ring, connection).run()
    else:
        _PacedCapture(order, ring, connection).run()


class _PacedCapture:
    """Reads a source that waits: a recording or a simulation, at its pace. Nothing of it is ever dropped."""

    def __init__(self, order: ReadSource, ring: Ring, connection: Connection[Any, Any]) -> None:
        self._order = order
        self._ring = ring
        self._connection = connection
        self._began = time.monotonic()
        ring.pass_undecided()
        last = ring.last_block()  # of an earlier process, if there was one
        self._first = order.source.first_sample if last is None else last.first_sample + len(last.samples)

    def run(self) -> None:
        try:
            for block in self._order.source.blocks(self._ring.shape.frames):
                if block.first_sample < self._first:
                    if self._is_enough():
                        break
                    continue
                if not self._is_wanted(block):
                    break
                self._give(block)
        except StreamError as error:
            self._connection.send(Failed(str(error)))
        self._ring.end()

    def _is_enough(self) -> bool:
        """Show that this process lives, and say whether the parent has had enough."""
        self._ring.beat(instant_ns())
        return bool(self._connection.poll(0))

    def _give(self, block: Block) -> None:
        number = self._ring.filled
        self._ring.take(block.samples, instant_ns(), False)
        self._ring.place(number, block.first_sample, block.cause)
        self._ring.publish(number + 1)

    def _is_wanted(self, block: Block) -> bool:
        """Wait until a block would have been there and there is room for it; False: the parent has had enough."""
        pace, source = self._order.pace, self._order.source
        due = self._began
        if pace > 0:
            due += (block.first_sample + block.count - self._first) / source.rate_hz / pace
        while True:
            if self._is_enough():
                return False
            left = due - time.monotonic()
            if left <= 0 and self._ring.has_room():
                return True
            time.sleep(min(LOOK_S, left) if left > 0 else ROOM_S)
