"""The live run: children that capture and measure, one pipeline, one keeper, and what watches over them all."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from multiprocessing import connection
from typing import TYPE_CHECKING, Any, Protocol, Self

from driftwatch.daemon.incidents import Incidents, clock_step
from driftwatch.daemon.merge import Merge
from driftwatch.daemon.messages import (
    ClockSeen,
    ClockStepped,
    Enough,
    Failed,
    Finished,
    LiveSource,
    Measure,
    MeasuredBlock,
    MeasuredBlocks,
    Opened,
    Record,
    Recorded,
    Refused,
    Told,
)
from driftwatch.daemon.supervised import Supervised
from driftwatch.pipeline.group import measured_channels
from driftwatch.pipeline.ticks import tick_times
from driftwatch.records import NS, Fault, Heartbeat, Stretch, Tick, sample_time_ns
from driftwatch.stream.clock import STEP_NS
from driftwatch.stream.instants import instant_ns
from driftwatch.stream.source import SourceFailedError, SourceRefusedError

if TYPE_CHECKING:
    from pathlib import Path

    from driftwatch.bus.publisher import Publisher
    from driftwatch.config import Configuration
    from driftwatch.daemon.feed import Feed
    from driftwatch.daemon.keeper import Keeper
    from driftwatch.daemon.stop import Stop
    from driftwatch.pipeline.station import Station
    from driftwatch.records import Envelope

HEARTBEAT_S = 1.0
"""Time between two heartbeats, seconds."""

LOOK_S = 0.05
"""Longest wait between two looks at what is due, seconds: so often the keeper wants to be asked."""

CAPTURE_PATIENCE_S = 5.0
"""Time without a sign of life after which a capturing process hangs, seconds: longer than it waits for the library."""

LEAST_PATIENCE_S = 5.0
"""Least time without progress after which a worker hangs, seconds; it is half of what the queue holds, if longer."""

END_S = 30.0
"""How long everything may take to be measured after the last sample, seconds: a full queue takes a while."""

RECORDER_END_S = 5.0
"""How long the recorder may take to close its last segment, seconds."""

STUMBLES = 3
"""So many deaths at the same block, and the worker begins behind it."""

STALL_S = 30.0
"""Time without progress of the workers, although there is work, after which time goes on without them, seconds."""

TICK_LAG_NS = NS // 2
"""So far ticks stay behind: samples that come again were taken a moment before they arrive."""

GIVE_UP_AFTER = 3
"""A source that died so often before its first sample is refused."""


class Observer(Protocol):
    """Who wants to know what came of a block; a bench, which measures delays."""

    def __call__(self, arrived_ns: int, envelopes: list[Envelope]) -> None:
        """Take what a block that arrived at a monotonic time made known."""
        ...


@dataclass(frozen=True, slots=True)
class Company:
    """Whom a live run works with, beside its children."""

    publisher: Publisher | None = None  # for heartbeats; None: there are none
    chore: Callable[[float], None] = lambda _: None  # once a second, with the monotonic time: work that can wait
    told: Callable[[str, bool], None] = lambda _text, _fault: None  # what is worth a line in the log
    beat: Callable[[Heartbeat], None] = lambda _: None  # each heartbeat, published or not
    ending: Callable[[], object] = lambda: None  # called when the end begins
    observer: Observer | None = None


class LiveRun:
    """Drives the children, the pipeline and the keeper.

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

    def __init__(
        self,
        config: Configuration,
        run: str,
        feed: Feed,
        company: Company,
        recordings: Path,
    ) -> None:
        self._config = config
        self._run = run
        self._feed = feed
        self._company = company
        self._recordings = recordings
        self._ring = feed.make_ring()
        self._shares = _shares(config, feed.name, config.daemon.workers)
        self._merge = Merge(len(self._shares))
        self._incidents = Incidents()
        self._capture = Supervised("capture", self._ring.descriptor, self._capture_order, CAPTURE_PATIENCE_S)
        self._trackers = [self._tracker(worker) for worker in range(len(self._shares))]
        self._recorder: Supervised | None = None
        self._source: LiveSource | None = None
        self._finished: dict[int, list[Any]] = {}
        self._trips: dict[int, tuple[int, int]] = {}  # of each worker: the block at which it died, and how often
        self._oldest: dict[int, int] = {}  # of each worker: the block before which it must not look back
        self._merged = (0, time.monotonic())  # the number of blocks merged, and when that last grew
        self._ticks: Iterator[int] | None = None  # times of those to come in this silence
        self._next_tick = 0
        self._reason: str | None = None  # why the run ends; None: it goes on
        self._failure: str | None = None
        self._end_by = math.inf
        self._began = self._beat_due = time.monotonic()
        self._sample_came_ns: int | None = None
        self._samples = 0  # that came, gaps left out

    # ------------------------------------------------------------------------------------------ the whole

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        """Leave no process behind."""
        self._end_children(0.0)
        self._ring.close()

    def until(self, stop: Stop, station: Station, keeper: Keeper) -> str:
        """Run until the source, which was started, ends or `stop` is set; store everything; return why it ended.

        Raises
        ------
        SourceFailedError
            When it fails; what it gave is stored first.
        CommitError
            When the store fails.
        """
        if self._source is None:
            raise ValueError("the source was not started; expected start() to have returned what is known of it")
        self.station, self._keeper = station, keeper
        self._take(station.begin())
        self._start_recording(self._source)
        while not self._is_over():
            self._step(stop)
        return self._close()

    def _step(self, stop: Stop) -> None:
        now = time.monotonic()
        if stop.is_set() and self._reason is None:
            self._begin_end("stopped", now)
        self._supervise(now)
        self._take_blocks()
        self._tick_while_silent()
        self._housekeeping(time.monotonic())
        self._wait()

    def _close(self) -> str:
        reason = self._reason or "the source ended"
        if self._failure is not None:
            reason = f"failed: {self._failure}"
        readings = [one for worker in sorted(self._finished) for one in self._finished[worker]]
        self._take([self.station.note(body) for body in self._incidents.end_all()])
        self._take(self.station.finish(reason, readings, self._end_of_silence_ns()))
        self._keeper.flush()
        self._end_children(RECORDER_END_S)
        if self._failure is not None:
            raise SourceFailedError(self._failure)
        return reason

    def _end_of_silence_ns(self) -> int | None:
        """Return the stream time of now where no samples come; else None: the last sample says it."""
        tied = self._ring.tied
        if self._ring.silent is None or tied is None:
            return None
        return self._time_ns(tied.at(instant_ns(), self._ring.shape.rate_hz))

    # ------------------------------------------------------------------------------------------ the start

    def start(self, stop: Stop) -> LiveSource | None:
        """Start to capture; return what is known of the source once it is; None: the stop came before.

        Raises
        ------
        SourceRefusedError
            When the source cannot be read.
        """
        for worker in range(len(self._shares)):
            self._ring.keep_for(worker, 0)
        while not stop.is_set():
            now = time.monotonic()
            for one in (self._capture, *self._trackers):
                one.start_if_due(now)
            if self._feed.known is not None:
                self._source = self._feed.known
                return self._source
            said, why = self._capture.heard(now)
            why = why or self._capture.hangs(now, self._ring.beat_ns, is_idle=False)
            for message in said:
                self._hear_capture(message)
            if self._source is not None:
                return self._source
            if why is not None and self._capture.restarts.deaths >= GIVE_UP_AFTER:
                raise SourceRefusedError([f"source {self._feed.name} cannot be read: {why}"])
            self._wait()
        return None

    def _capture_order(self) -> Any:
        cause = self._ring.silent or Fault.PROCESS
        return self._feed.order(self._source, cause)

    def _tracker(self, worker: int) -> Supervised:
        def order() -> Measure | None:
            if self._source is None:
                return None
            number, position = self._merge.next_of(worker), self._merge.position_of(worker)
            oldest = self._oldest.get(worker, 0)
            return Measure(self._config, self._source, self._shares[worker], worker, number, position, oldest)

        patience = max(LEAST_PATIENCE_S, self._config.daemon.queue_s / 2)
        return Supervised("tracker", self._ring.descriptor, order, patience)

    def _start_recording(self, source: LiveSource) -> None:
        if self._config.record.keep_hours > 0:
            order = Record(self._config, source, self._run, str(self._recordings))
            self._recorder = Supervised("recorder", self._ring.descriptor, lambda: order, None)

    # ------------------------------------------------------------------------------------------ the children

    def _supervise(self, now: float) -> None:
        """Hear every child, start again what died, and kill what hangs."""
        self._supervise_capture(now)
        for worker, tracker in enumerate(self._trackers):
            tracker.start_if_due(now)
            said, why = tracker.heard(now)
            for message in said:
                self._hear_tracker(worker, message)
            idle = self._ring.place_of(worker) >= self._ring.published
            why = why or tracker.hangs(now, self._ring.place_of(worker), is_idle=idle)
            if why is not None and worker not in self._finished:
                self._begin_process_fault(worker, why, tracker.is_looping(now))
                self._pass_stumbling_block(worker)
        if self._recorder is not None:
            self._supervise_recorder(self._recorder, now)

    def _pass_stumbling_block(self, worker: int) -> None:
        """Let a worker that dies at the same block again and again begin behind it: the others wait for it."""
        number = self._merge.next_of(worker)
        before, times = self._trips.get(worker, (number, 0))
        self._trips[worker] = (number, times + 1 if before == number else 1)
        if self._trips[worker][1] < STUMBLES:
            return
        seen = self._ring.seen(number) if number < self._ring.published else None
        if seen is None:
            return
        passed = MeasuredBlock(number, seen.first_sample, len(seen.samples), seen.cause, seen.arrived_ns, [])
        self._merge.add(worker, [passed])
        self._ring.keep_for(worker, number + 1)
        self._oldest[worker] = number + 1
        self._company.told(f"Block {number} was passed over: {STUMBLES} times a worker died at it", True)

    def _supervise_capture(self, now: float) -> None:
        if self._ring.ended:
            self._capture.dismiss()
        self._capture.start_if_due(now)
        said, why = self._capture.heard(now)
        for message in said:
            self._hear_capture(message)
        why = why or self._capture.hangs(now, self._ring.beat_ns, is_idle=self._ring.ended)
        if why is None:
            return
        if self._ring.ended:
            self._capture.dismiss()
        elif self._reason is not None:
            self._ring.end()  # it was to end anyway
        else:
            again = ", again and again" if self._capture.is_looping(now) else ""
            self._company.told(f"The process that reads the source died{again}: {why}; it is started again", True)

    def _supervise_recorder(self, recorder: Supervised, now: float) -> None:
        recorder.start_if_due(now)
        said, why = recorder.heard(now)
        for message in said:
            if isinstance(message, Recorded):
                self._record_state(message.error)
        if why is not None and self._ring.ended:
            recorder.dismiss()
        elif why is not None:
            self._fault("recorder", Fault.PROCESS, f"the process that records died: {why}; it is started again")
        elif recorder.child is not None and not recorder.is_looping(now):
            self._fault_ends("recorder")
        if self._ring.published - self._ring.recorded > self._ring.shape.most_waiting:
            self._fault("late recorder", Fault.DISK, "the recorder is late by more than the queue: see the disk")
        else:
            self._fault_ends("late recorder")

    def _record_state(self, error: str | None) -> None:
        if error is None:
            self._fault_ends("disk")
        else:
            self._fault("disk", Fault.DISK, error)

    def _hear_capture(self, message: Any) -> None:
        match message:
            case Opened():
                self._source = message.source
                if message.waiting_for is not None:
                    self._company.told(f"Waiting for the device: {message.waiting_for}", True)
            case Refused():
                raise SourceRefusedError(message.problems)
            case Told():
                self._company.told(message.text, message.fault)
            case ClockSeen():
                self._take([self.station.note(message.clock)])
                if self._recorder is not None:
                    self._recorder.tell(message)
            case ClockStepped():
                self._company.told(f"The computer's clock was set by {message.seconds:+.3f} s", True)
                bodies = clock_step(self.station.now_ns, message.seconds, STEP_NS / NS)
                self._take([self.station.note(body) for body in bodies])
            case Failed():
                self._failure = message.text

    def _hear_tracker(self, worker: int, message: Any) -> None:
        match message:
            case MeasuredBlocks():
                self._merge.add(worker, message.blocks)
                self._fault_ends(f"worker {worker}")
            case Finished():
                self._finished[worker] = message.readings
                self._trackers[worker].dismiss()

    def _begin_process_fault(self, worker: int, why: str, is_looping: bool) -> None:
        channels = ", ".join(self._shares[worker])
        again = ", again and again" if is_looping else ""
        detail = f"the process that measures {channels} died{again}: {why}; it is started again a little way back"
        self._fault(f"worker {worker}", Fault.PROCESS, detail)

    def _fault(self, key: str, fault: Fault, detail: str) -> None:
        body = self._incidents.begin(key, fault, self.station.now_ns, detail)
        if body is not None:
            self._take([self.station.note(body)])

    def _fault_ends(self, key: str) -> None:
        body = self._incidents.end(key)
        if body is not None:
            self._take([self.station.note(body)])

    # ------------------------------------------------------------------------------------------ the stream

    def _take_blocks(self) -> None:
        for block, readings in self._merge.ready():
            if block.count == 0:
                continue
            self._tick_before(block)
            source = self._feed.name
            stretch = Stretch(source, block.first_sample, self._time_ns(block.first_sample), block.count, block.cause)
            envelopes = self.station.measured(stretch, readings)
            self._take(envelopes)
            self._sample_came_ns = block.arrived_ns
            self._samples += block.count
            if self._company.observer is not None:
                self._company.observer(block.arrived_ns, envelopes)

    def _take(self, envelopes: list[Envelope]) -> None:
        self._keeper.take(envelopes)

    def _time_ns(self, sample: int) -> int:
        source = self.station.source(self._feed.name)
        return sample_time_ns(source.start_ns, sample, source.rate_hz)

    def _tick_before(self, block: MeasuredBlock) -> None:
        """Give the ticks that are still due before a block that comes after a gap."""
        position = self.station.position(self._feed.name)
        if block.first_sample > position:
            self._tick_until(self._time_ns(block.first_sample), block.cause, is_open=True)
        self._ticks = None

    def _tick_while_silent(self) -> None:
        """Give a tick for each second in which, as is known, nothing comes and nothing waits to be measured."""
        cause, tied = self._why_silent(), self._ring.tied
        if self._reason is not None or cause is None or tied is None:
            return
        index = tied.at(instant_ns(), self._ring.shape.rate_hz)
        self._tick_until(self._time_ns(index) - TICK_LAG_NS, cause, is_open=False)

    def _why_silent(self) -> Fault | None:
        """Return why nothing comes that could be measured; None: something does, or may."""
        if self._merge.merged != self._merged[0]:
            self._merged = (self._merge.merged, time.monotonic())
        if self._merge.merged < self._ring.published:  # the workers are late, or at their end
            return Fault.PROCESS if time.monotonic() - self._merged[1] > STALL_S else None
        if self._ring.filled > self._ring.published:  # samples are there, only their place is not known yet
            return None
        if self._ring.silent is None and self._feed.known is None and self._capture.child is None:
            return Fault.PROCESS
        return self._ring.silent

    def _tick_until(self, until_ns: int, cause: Fault, *, is_open: bool) -> None:
        """Give the ticks up to a stream time; with `is_open` not the one just then."""
        if self._ticks is None:
            self._ticks = tick_times(self._time_ns(self.station.position(self._feed.name)))
            self._next_tick = next(self._ticks)
        while self._next_tick < until_ns or (not is_open and self._next_tick == until_ns):
            self._take(self.station.feed(Tick(self._next_tick, cause)))
            self._next_tick = next(self._ticks)

    # ------------------------------------------------------------------------------------------ what is due

    def _wait(self) -> None:
        """Wait until a child says something, or for a moment."""
        children = [self._capture, *self._trackers, *([self._recorder] if self._recorder else [])]
        connections = [one.child.connection for one in children if one.child is not None]
        if connections:
            connection.wait(connections, LOOK_S)
        else:
            time.sleep(LOOK_S)

    def _housekeeping(self, now: float) -> None:
        """Commit what is due; every second give a sign of life and take a step of what can wait."""
        self._keeper.flush_due(now)
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
        )

    # ------------------------------------------------------------------------------------------ the end

    def _begin_end(self, reason: str, now: float) -> None:
        self._company.ending()
        self._reason = reason
        self._end_by = now + END_S
        self._capture.dismiss()
        self._capture.tell(Enough())
        if self._capture.child is None:
            self._ring.end()

    def _is_over(self) -> bool:
        if len(self._finished) == len(self._trackers) and self._ring.ended:
            return True
        if time.monotonic() > self._end_by:
            self._company.told("Not everything could be measured before the end: the workers were too late", True)
            return True
        return False

    def _end_children(self, seconds: float) -> None:
        """See every child to its end."""
        until = time.monotonic() + seconds
        if self._recorder is not None:
            self._recorder.tell(Enough())
        for one in (self._capture, *self._trackers, *([self._recorder] if self._recorder else [])):
            one.end(until - time.monotonic())


def _shares(config: Configuration, source: str, workers: int) -> list[tuple[str, ...]]:
    """Return the names of the channels that each worker measures: in file order, with about as many modes each."""
    channels = [channel.name for channel in measured_channels(config, source, only=True)]
    weights = [sum(mode.channel == name for mode in config.mode) for name in channels]
    count = min(workers, len(channels))
    shares: list[list[str]] = [[] for _ in range(count)]
    total, done = sum(weights), 0
    for place, (name, weight) in enumerate(zip(channels, weights, strict=True)):
        by_weight = int((done + weight / 2) * count / total)
        least = max(0, count - (len(channels) - place))  # the last ones need a channel each, too
        filled = next((index for index, share in enumerate(shares) if not share), count)
        shares[max(least, min(by_weight, filled))].append(name)
        done += weight
    return [tuple(share) for share in shares]
