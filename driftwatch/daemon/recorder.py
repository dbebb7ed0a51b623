"""The process that records the raw samples: a slow disk keeps nobody else waiting."""

from __future__ import annotations

import time
from multiprocessing.connection import Connection
from pathlib import Path
from typing import Any

from driftwatch.config import SoundcardSourceConfig
from driftwatch.daemon.messages import ClockSeen, Enough, Record, Recorded
from driftwatch.records import Block, sample_time_ns
from driftwatch.stream.recorder import NotRecordedError, Recorder
from driftwatch.stream.ring import MOST_READERS, OverrunError, Ring
from driftwatch.stream.sidefile import Identity

EVERY_S = 0.5
"""Time between two looks for new blocks, seconds: so much is lost at most when it is killed, and the disk's cache."""

RETRY_S = 5.0
"""Wait after a failed attempt to write, seconds."""

AT_ONCE = 1024
"""Blocks written before it is looked whether the parent is still there."""

PLACE = MOST_READERS - 1
"""The recorder's place in the ring, which is never noted there: nobody waits for it."""


def work(order: Record, ring: Ring, connection: Connection[Any, Any]) -> None:
    """Record until the stream ends."""
    _Driver(order, ring, connection).run()


class _Driver:
    def __init__(self, order: Record, ring: Ring, connection: Connection[Any, Any]) -> None:
        source = order.source
        configured = next(one for one in order.config.source if one.name == source.name)
        self._source = source
        self._ring = ring
        self._connection = connection
        identity = Identity(
            station=order.config.station.name,
            run=order.run,
            source=source.name,
            rate_hz=source.rate_hz,
            inputs=source.inputs,
            start_ns=source.start_ns,
            time_quality=source.time_quality,
            sample_format=configured.sample_format if isinstance(configured, SoundcardSourceConfig) else "float32",
        )
        self._recorder = Recorder(Path(order.folder), order.config.record, identity)
        self._reader = ring.reader(PLACE, ring.oldest())
        self._failed = False

    def run(self) -> None:
        enough = False
        while True:
            ended = self._ring.ended or enough
            wrote = self._wrote()
            if self._failed:
                time.sleep(RETRY_S if not ended else 0.0)
            if ended and not wrote:
                break
            if not wrote:
                time.sleep(EVERY_S)
            while self._connection.poll(0):
                match self._connection.recv():
                    case ClockSeen() as seen:
                        self._recorder.clock(seen.clock)
                    case Enough():
                        enough = True
        try:
            self._recorder.close()
        except NotRecordedError as error:
            self._connection.send(Recorded(str(error)))

    def _wrote(self) -> bool:
        """Write what there is, as far as the disk takes it; return whether there was anything."""
        before = self._reader.next
        try:
            for seen in self._reader.fresh(AT_ONCE):
                if len(seen.samples):
                    time_ns = sample_time_ns(self._source.start_ns, seen.first_sample, self._source.rate_hz)
                    block = Block(self._source.name, seen.first_sample, time_ns, seen.samples, seen.cause)
                    self._recorder.write(block)
        except NotRecordedError as error:
            self._reader.next += 1  # the disk is to be asked again with what comes then
            self._say(str(error))
            return True
        except OverrunError:
            self._reader.next = self._ring.oldest()
            self._say("samples were not recorded: the disk is too slow for them; lower the load on it or use another")
            return True
        self._ring.recorded = self._reader.next
        if self._reader.next > before:
            self._say(None)
        return self._reader.next > before

    def _say(self, error: str | None) -> None:
        if self._failed != (error is not None):
            self._failed = error is not None
            self._connection.send(Recorded(error))
