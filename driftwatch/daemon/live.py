"""The live run: one source at its pace through the station, a heartbeat every second, until told to stop."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass

from driftwatch.bus.publisher import Publisher
from driftwatch.daemon.keeper import Keeper
from driftwatch.daemon.stop import Stop
from driftwatch.pipeline.station import Station
from driftwatch.pipeline.ticks import with_ticks
from driftwatch.records import NS, Block, Heartbeat, Tick, sample_time_ns
from driftwatch.stream.source import Source, StreamError

BLOCK_S = 0.1
"""Samples handed to the pipeline at a time, seconds: a tenth of a second adds little to the latency."""

HEARTBEAT_S = 1.0
"""Time between two heartbeats, seconds."""

LOOK_S = 0.05
"""Longest wait between two looks at what is due, seconds: so often the keeper wants to be asked."""


@dataclass(frozen=True, slots=True)
class Clock:
    """The two things a live run asks of time; a test gives its own."""

    monotonic: Callable[[], float] = time.monotonic  # seconds
    wait: Callable[[Stop, float], bool] = Stop.wait  # until the stop or so many seconds; True: the stop came


class LiveRun:
    """Keeps the pace of a source and drives pipeline, keeper and heartbeat.

    Parameters
    ----------
    source, station, keeper
        Where samples come from, what is made of them, and where it goes.
    pace
        Times real time; 0: as fast as it can.
    publisher
        For heartbeats; None: there are none.
    chore
        Called with the monotonic time about once a second, for work that can wait.
    clock
        For the pace and the heartbeat only: it never reaches a record that is stored.
    """

    def __init__(
        self,
        source: Source,
        station: Station,
        keeper: Keeper,
        *,
        pace: float = 1.0,
        publisher: Publisher | None = None,
        chore: Callable[[float], None] = lambda _: None,
        clock: Clock | None = None,
    ) -> None:
        self._source = source
        self._station = station
        self._keeper = keeper
        self._pace = pace
        self._publisher = publisher
        self._chore = chore
        self._clock = clock or Clock()
        self._began = self._beat_due = self._clock.monotonic()
        self._sample_came: float | None = None

    def until(self, stop: Stop) -> str:
        """Run until the source ends or `stop` is set; store everything; return why it ended.

        Raises
        ------
        StreamError
            When the source fails; what it gave is stored first.
        CommitError
            When the store fails.
        """
        self._keeper.take(self._station.begin())
        try:
            reason = self._feed(stop)
        except StreamError as error:
            self._end(f"failed: {error}")
            raise
        self._end(reason)
        return reason

    def _feed(self, stop: Stop) -> str:
        for item in self._items():
            if not self._wait_for(item, stop):
                return "stopped"
            self._keeper.take(self._station.feed(item))
            if isinstance(item, Block):
                self._sample_came = self._clock.monotonic()
            self._housekeeping()
        return "the source ended"

    def _items(self) -> Iterator[Block | Tick]:
        frames = max(1, round(BLOCK_S * self._source.rate_hz * max(1.0, self._pace)))
        return with_ticks(self._source.blocks(frames), self._source.rate_hz)

    def _wait_for(self, item: Block | Tick, stop: Stop) -> bool:
        """Wait until an item would have been there; False: stop was set."""
        if self._pace == 0:
            return not stop.is_set()
        due = self._began + (self._end_ns(item) - self._source.start_ns) / NS / self._pace
        while (left := due - self._clock.monotonic()) > 0:
            if self._clock.wait(stop, min(left, LOOK_S)):
                return False
            self._housekeeping()
        return not stop.is_set()

    def _end_ns(self, item: Block | Tick) -> int:
        count = len(item.samples) if isinstance(item, Block) else 0
        return sample_time_ns(item.time_ns, count, self._source.rate_hz)

    def _housekeeping(self) -> None:
        """Commit what is due; every second give a sign of life and take a step of what can wait."""
        now = self._clock.monotonic()
        self._keeper.flush_due(now)
        if now < self._beat_due:
            return
        self._beat_due = max(self._beat_due + HEARTBEAT_S, now)  # late ones do not shift those that follow
        if self._publisher is not None:
            self._publisher.heartbeat(self._heartbeat(now))
        self._chore(now)

    def _heartbeat(self, now: float) -> Heartbeat:
        header = self._station.header
        return Heartbeat(
            station=header.station,
            run=header.run,
            origin=header.origin,
            time_ns=self._station.now_ns,
            time_quality=header.time_quality,
            uptime_s=now - self._began,
            sample_age_s=None if self._sample_came is None else now - self._sample_came,
            queue_fill=0.0,  # the source is read in step with the pipeline: nothing can pile up
            worst_alert=self._station.worst_alert,
            sequence=self._keeper.last_sequence,
        )

    def _end(self, reason: str) -> None:
        self._keeper.take(self._station.finish(reason))
        self._keeper.flush()
