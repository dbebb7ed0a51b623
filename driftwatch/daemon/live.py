"""The live run: what its processes measured, through one pipeline and one keeper, on and on."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol, Self

from driftwatch.daemon.crew import LOOK_S, Crew, FaultBegins, FaultEnds
from driftwatch.daemon.incidents import Incidents, clock_step
from driftwatch.daemon.keeper import ANEW
from driftwatch.daemon.messages import ClockSeen, ClockStepped
from driftwatch.pipeline.ticks import Ticker
from driftwatch.records import NS, Fault, Heartbeat, Stretch, Tick, sample_time_ns
from driftwatch.store.errors import CommitError
from driftwatch.stream.clock import STEP_NS
from driftwatch.stream.instants import instant_ns
from driftwatch.stream.source import SourceFailedError

if TYPE_CHECKING:
    from pathlib import Path

    from driftwatch.bus.publisher import Publisher
    from driftwatch.config import Configuration
    from driftwatch.daemon.crew import News
    from driftwatch.daemon.feed import Feed
    from driftwatch.daemon.keeper import Keeper
    from driftwatch.daemon.messages import LiveSource, MeasuredBlock
    from driftwatch.daemon.stop import Stop
    from driftwatch.pipeline.station import Station
    from driftwatch.records import Clock, Envelope, Health

HEARTBEAT_S = 1.0
"""Time between two heartbeats, seconds."""

END_S = 30.0
"""How long everything may take to be measured after the last sample, seconds: a full queue takes a while."""

RECORDER_END_S = 5.0
"""How long the recorder may take to close its last segment, seconds."""

STALL_S = 30.0
"""Time without progress of the workers, although there is work, after which time goes on without them, seconds."""

STORE_END_S = 5.0
"""How long the end waits for a store that takes no rows, seconds."""

TICK_LAG_NS = NS // 2
"""So far ticks stay behind: samples that come again were taken a moment before they arrive."""


class Observer(Protocol):
    """Who wants to know what came of a block; a bench, which measures delays."""

    def __call__(self, arrived_ns: int, envelopes: list[Envelope]) -> None:
        """Take what a block that arrived at an instant (`instant_ns`) made known."""
        ...


@dataclass(frozen=True, slots=True)
class Company:
    """Whom a live run works with, beside its processes."""

    publisher: Publisher | None = None  # for heartbeats; None: there are none
    chore: Callable[[float], None] = lambda _: None  # once a second, with the monotonic time: work that can wait
    told: Callable[[str, bool], None] = lambda _text, _fault: None  # what is worth a line in the log
    beat: Callable[[Heartbeat], None] = lambda _: None  # each heartbeat, published or not
    ending: Callable[[], object] = lambda: None  # called when the end begins
    observer: Observer | None = None
    asked: Callable[[], None] = lambda: None  # at every turn: what was asked for enters the stream


class LiveRun:
    """Drives the processes, the pipeline and the keeper.

    Parameters
    ----------
    config
        The configuration; it has one source.
    run
        UUID of the run.
    feed
        What the source is and how it is read.
    company
        Whom else it works with.
    recordings
        Where raw samples are kept, if they are.

    Raises
    ------
    SourceRefusedError
        When there is not enough memory.
    """

    def __init__(self, config: Configuration, run: str, feed: Feed, company: Company, recordings: Path) -> None:
        self._name = feed.name
        self._is_card = feed.known is None
        self._company = company
        self._crew = Crew(config, run, feed, recordings, company.told)
        self._ring = self._crew.ring
        self._incidents = Incidents()
        self._merged = (0, time.monotonic())  # the number of blocks merged, and when that last grew
        self._ticker = Ticker()
        self._reason: str | None = None  # why the run ends; None: it goes on
        self._end_by = math.inf
        self._began = self._beat_due = time.monotonic()
        self._sample_came_ns: int | None = None
        self._samples = 0  # that came, gaps left out

    # ------------------------------------------------------------------------------------------ the whole

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        """Leave no process behind."""
        self._crew.close()

    def start(self, stop: Stop) -> LiveSource | None:
        """Start to capture; return what is known of the source once it is; None: the stop came before.

        Raises
        ------
        SourceRefusedError
            When the source cannot be read.
        """
        return self._crew.start(stop)

    def until(self, stop: Stop, station: Station, keeper: Keeper) -> str:
        """Run until the source, which was started, ends or `stop` is set; store everything; return why it ended.

        Raises
        ------
        SourceFailedError
            When it fails; what it gave is stored first.
        CommitError
            When the store fails.
        """
        source = self._crew.source
        if source is None:
            raise ValueError("the source was not started; expected start() to have returned what is known of it")
        self.station, self._keeper = station, keeper
        self._take(station.begin())
        self._crew.start_recording(source)
        while not self._is_over():
            self._step(stop)
        return self._close()

    def _step(self, stop: Stop) -> None:
        now = time.monotonic()
        if stop.is_set() and self._reason is None:
            self._begin_end("stopped", now)
        for news in self._crew.supervise(now):
            self._hear(news)
        self._take_blocks()
        self._tick_while_silent()
        self._company.asked()
        self._housekeeping(time.monotonic())
        self._crew.wait()

    # ------------------------------------------------------------------------------------------ what is told of it

    def _hear(self, news: News) -> None:
        match news:
            case FaultBegins():
                self._note(self._incidents.begin(news.key, news.fault, self.station.now_ns, news.detail))
            case FaultEnds():
                self._note(self._incidents.end(news.key))
            case ClockSeen():
                self._note(news.clock)
            case ClockStepped():
                self._company.told(f"The computer's clock was set by {news.seconds:+.3f} s", True)
                for body in clock_step(self.station.now_ns, news.seconds, STEP_NS / NS):
                    self._note(body)

    def _hear_store(self) -> None:
        """Tell what became of the store, in the log and as records, which wait like all others."""
        for news in self._keeper.news():
            self._company.told(news.words, news.fault is not None)
            if news.goes_on:
                self._take([self.station.again()])
            if news.fault is not None:
                self._note(self._incidents.begin(news.key, news.fault, self.station.now_ns, news.words))
            if news.fault is None or news.key == ANEW:
                lost = {"value": float(news.lost), "unit": "records"} if news.fault is None else {}
                self._note(self._incidents.end(news.key, detail=news.words, **lost))

    def _note(self, body: Health | Clock | None) -> None:
        if body is not None:
            self._take([self.station.note(body)])

    def _take(self, envelopes: list[Envelope]) -> None:
        self._keeper.take(envelopes)

    # ------------------------------------------------------------------------------------------ the stream

    def _take_blocks(self) -> None:
        for block, readings in self._crew.merge.ready():
            if block.count == 0:
                continue
            self._tick_before(block)
            time_ns = self._time_ns(block.first_sample)
            stretch = Stretch(self._name, block.first_sample, time_ns, block.count, block.cause)
            envelopes = self.station.measured(stretch, readings)
            self._take(envelopes)
            self._sample_came_ns = block.arrived_ns
            self._samples += block.count
            if self._company.observer is not None:
                self._company.observer(block.arrived_ns, envelopes)

    def _time_ns(self, sample: int) -> int:
        source = self.station.source(self._name)
        return sample_time_ns(source.start_ns, sample, source.rate_hz)

    def _tick_before(self, block: MeasuredBlock) -> None:
        """Give the ticks that are still due before a block that comes after a gap."""
        if block.first_sample > self.station.position(self._name):
            self._tick_until(self._time_ns(block.first_sample), block.cause)
        self._ticker.silence_ends()

    def _tick_while_silent(self) -> None:
        """Give a tick for each second in which, as is known, nothing comes and nothing waits to be measured."""
        cause, now_ns = self._why_silent(), self._now_ns()
        if self._reason is None and cause is not None and now_ns is not None:
            self._tick_until(now_ns - TICK_LAG_NS, cause)

    def _why_silent(self) -> Fault | None:
        """Return why nothing comes that could be measured; None: something does, or may."""
        merged = self._crew.merge.merged
        if merged != self._merged[0]:
            self._merged = (merged, time.monotonic())
        if merged < self._ring.published:  # the workers are late, or at their end
            return Fault.PROCESS if time.monotonic() - self._merged[1] > STALL_S else None
        if self._ring.filled > self._ring.published:  # samples are there, only their place is not known yet
            return None
        if self._ring.silent is None and self._is_card and self._crew.has_no_source:
            return Fault.PROCESS
        return self._ring.silent

    def _now_ns(self) -> int | None:
        """Return the stream time of now, as the source counts it; None: only its samples tell."""
        tied = self._ring.tied
        return None if tied is None else self._time_ns(tied.at(instant_ns(), self._ring.shape.rate_hz))

    def _tick_until(self, until_ns: int, cause: Fault) -> None:
        """Give the ticks of this silence before a stream time."""
        since_ns = self._time_ns(self.station.position(self._name))
        for time_ns in self._ticker.before(until_ns, since_ns):
            self._take(self.station.feed(Tick(time_ns, cause)))

    # ------------------------------------------------------------------------------------------ what is due

    def _housekeeping(self, now: float) -> None:
        """Commit what is due; every second give a sign of life and take a step of what can wait."""
        self._keeper.flush_due(now)
        self._hear_store()
        if self._company.publisher is not None:
            self._company.publisher.serve()
        if now < self._beat_due:
            return
        self._beat_due = max(self._beat_due + HEARTBEAT_S, now)  # late ones do not shift those that follow
        heartbeat = self._heartbeat(now)
        if self._company.publisher is not None:
            self._company.publisher.heartbeat(heartbeat)
        self._company.beat(heartbeat)
        self._company.chore(now)

    @property
    def samples(self) -> int:
        """Samples, per input, that came and were measured: gaps left out."""
        return self._samples

    @property
    def is_silent(self) -> bool:
        """Whether it is known that no samples come."""
        return self._ring.silent is not None

    @property
    def attempts(self) -> int:
        """How often it was tried to open the device."""
        return self._ring.attempts

    def _heartbeat(self, now: float) -> Heartbeat:
        header = self.station.header
        age = None if self._sample_came_ns is None else max(0.0, (instant_ns() - self._sample_came_ns) / NS)
        unsaved, unsaved_s = self._keeper.unsaved(now)
        return Heartbeat(
            station=header.station,
            run=header.run,
            origin=header.origin,
            time_ns=self.station.now_ns,
            time_quality=header.time_quality,
            uptime_s=now - self._began,
            sample_age_s=age,
            queue_fill=self._ring.fill,
            worst_alert=self.station.worst_alert,
            sequence=self._keeper.last_sequence,
            unsaved=unsaved,
            unsaved_s=unsaved_s,
        )

    # ------------------------------------------------------------------------------------------ the end

    def _begin_end(self, reason: str, now: float) -> None:
        self._company.ending()
        self._reason = reason
        self._end_by = now + END_S
        self._crew.begin_end()

    def _is_over(self) -> bool:
        if self._crew.has_finished:
            return True
        if time.monotonic() > self._end_by:
            self._company.told("Not everything could be measured before the end: the workers were too late", True)
            return True
        return False

    def _close(self) -> str:
        if self._reason is None:
            self._company.ending()
        failure = self._crew.failure
        reason = self._reason or "the source ended"
        if failure is not None:
            reason = f"failed: {failure}"
        give_up = time.monotonic() + STORE_END_S
        self._settle(give_up)
        if self._keeper.trouble is None:  # else this is no end of it
            for body in self._incidents.end_all():
                self._note(body)
        silent_until_ns = self._now_ns() if self.is_silent else None
        self._take(self.station.finish(reason, self._crew.last_readings, silent_until_ns))
        try:
            self._settle(give_up)
            self._store_rest()
        finally:
            self._crew.end(RECORDER_END_S)
        if failure is not None:
            raise SourceFailedError(failure)
        return reason

    def _settle(self, until: float) -> None:
        """Store what waits; give a store that takes no rows until then to come back, with signs of life."""
        if self._keeper.trouble is None:
            self._keeper.flush_now(time.monotonic())
            self._hear_store()
        while self._keeper.trouble is not None and (now := time.monotonic()) < until:
            self._housekeeping(now)
            time.sleep(LOOK_S)

    def _store_rest(self) -> None:
        """Store the last records, or tell how many are lost with the end.

        Raises
        ------
        CommitError
            When they cannot be stored.
        """
        try:
            self._keeper.flush()
        except CommitError as error:
            raise CommitError(f"{error}; {self._keeper.unstored} records of this run were not stored") from error
