"""The processes of a live run: started, heard, started again when they die, killed when they hang, ended in order."""

from __future__ import annotations

import time
from dataclasses import dataclass
from multiprocessing import connection
from typing import TYPE_CHECKING, Any

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
from driftwatch.daemon.shares import shares_of
from driftwatch.daemon.supervised import Supervised
from driftwatch.records import Fault
from driftwatch.stream.source import SourceRefusedError

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from driftwatch.config import Configuration
    from driftwatch.daemon.feed import Feed
    from driftwatch.daemon.stop import Stop
    from driftwatch.pipeline.reading import Reading

LOOK_S = 0.05
"""Longest wait between two looks at what is due, seconds: so often the keeper wants to be asked."""

CAPTURE_PATIENCE_S = 5.0
"""Time without a sign of life after which a capturing process hangs, seconds: longer than it waits for the library."""

LEAST_PATIENCE_S = 5.0
"""Least time without progress after which a worker hangs, seconds; it is half of what the queue holds, if longer."""

STUMBLES = 3
"""So many deaths at the same block, and the worker begins behind it."""

GIVE_UP_AFTER = 3
"""A source that died so often before its first sample is refused."""


@dataclass(frozen=True, slots=True)
class FaultBegins:
    """A fault of the daemon begins, or goes on in other words."""

    key: str  # the same for begin and end
    fault: Fault
    detail: str


@dataclass(frozen=True, slots=True)
class FaultEnds:
    """A fault of the daemon, if it stands, is over."""

    key: str


News = FaultBegins | FaultEnds | ClockSeen | ClockStepped


class Crew:
    """One process that captures, some that measure, and one that records if that is asked for.

    Parameters
    ----------
    config
        The configuration; it has one source.
    run
        UUID of the run.
    feed
        What the source is and how it is read.
    recordings
        Where raw samples are kept, if they are.
    told
        Called with what is worth a line in the log, and whether that is of a fault.

    Raises
    ------
    SourceRefusedError
        When there is not enough memory.
    """

    def __init__(
        self, config: Configuration, run: str, feed: Feed, recordings: Path, told: Callable[[str, bool], None]
    ) -> None:
        self._config = config
        self._run = run
        self._feed = feed
        self._recordings = recordings
        self._told = told
        self.ring = feed.make_ring()
        self._shares = shares_of(config, feed.name, config.daemon.workers)
        self.merge = Merge(len(self._shares))
        self.source: LiveSource | None = None  # None: not started
        self.failure: str | None = None  # why reading stopped before its time
        self._capture = Supervised("capture", self.ring.descriptor, self._capture_order, CAPTURE_PATIENCE_S)
        self._trackers = [self._tracker(worker) for worker in range(len(self._shares))]
        self._recorder: Supervised | None = None
        self._finished: dict[int, list[Reading]] = {}
        self._trips: dict[int, tuple[int, int]] = {}  # of each worker: the block at which it died, and how often
        self._oldest: dict[int, int] = {}  # of each worker: the block before which it must not look back
        self._ending = False
        self._news: list[News] = []
        for worker in range(len(self._shares)):
            self.ring.keep_for(worker, 0)

    # ------------------------------------------------------------------------------------------ the start

    def start(self, stop: Stop) -> LiveSource | None:
        """Start to capture; return what is known of the source once it is; None: the stop came before.

        Raises
        ------
        SourceRefusedError
            When the source cannot be read.
        """
        while not stop.is_set():
            now = time.monotonic()
            self.source = self.source or self._feed.known
            for one in (self._capture, *self._trackers):
                one.start_if_due(now)
            why = self._hear_capture(now) if self.source is None else None
            if self.source is not None:
                return self.source
            if why is not None and self._capture.restarts.deaths >= GIVE_UP_AFTER:
                raise SourceRefusedError([f"source {self._feed.name} cannot be read: {why}"])
            self.wait()
        return None

    def start_recording(self, source: LiveSource) -> None:
        """Start to record, if that is asked for."""
        if self._config.record.keep_hours > 0:
            order = Record(self._config, source, self._run, str(self._recordings))
            self._recorder = Supervised("recorder", self.ring.descriptor, lambda: order, None)

    def _capture_order(self) -> Any:
        return self._feed.order(self.source, self.ring.silent or Fault.PROCESS)

    def _tracker(self, worker: int) -> Supervised:
        def order() -> Measure | None:
            if self.source is None:
                return None
            number, position = self.merge.next_of(worker), self.merge.position_of(worker)
            oldest = self._oldest.get(worker, 0)
            return Measure(self._config, self.source, self._shares[worker], worker, number, position, oldest)

        patience = max(LEAST_PATIENCE_S, self._config.daemon.queue_s / 2)
        return Supervised("tracker", self.ring.descriptor, order, patience)

    # ------------------------------------------------------------------------------------------ in the midst

    @property
    def _children(self) -> list[Supervised]:
        return [self._capture, *self._trackers, *([self._recorder] if self._recorder else [])]

    def wait(self) -> None:
        """Wait until a child says something, or for a moment."""
        connections = [one.child.connection for one in self._children if one.child is not None]
        if connections:
            connection.wait(connections, LOOK_S)
        else:
            time.sleep(LOOK_S)

    def supervise(self, now: float) -> list[News]:
        """Hear every child, start again what died, kill what hangs; return what there is to tell of it."""
        self._supervise_capture(now)
        for worker, tracker in enumerate(self._trackers):
            self._supervise_tracker(worker, tracker, now)
        if self._recorder is not None:
            self._supervise_recorder(self._recorder, now)
        news, self._news = self._news, []
        return news

    @property
    def has_no_source(self) -> bool:
        """Whether the process that reads the source is dead, and another one not started yet."""
        return self._capture.child is None

    # ------------------------------------------------------------------------------------------ capture

    def _hear_capture(self, now: float) -> str | None:
        """Take in what the capturing process said; return why it died, if it did."""
        said, why = self._capture.heard(now)
        for message in said:
            self._take_in(message)
        return why or self._capture.hangs(now, self.ring.beat_ns, is_idle=self.ring.ended)

    def _take_in(self, message: Any) -> None:
        match message:
            case Opened():
                self.source = message.source
                if message.waiting_for is not None:
                    self._told(f"Waiting for the device: {message.waiting_for}", True)
            case Refused():
                raise SourceRefusedError(message.problems)
            case Told():
                self._told(message.text, message.fault)
            case ClockSeen() | ClockStepped():
                self._news.append(message)
                if isinstance(message, ClockSeen) and self._recorder is not None:
                    self._recorder.tell(message)
            case Failed():
                self.failure = message.text

    def _supervise_capture(self, now: float) -> None:
        if self.ring.ended:
            self._capture.dismiss()
        self._capture.start_if_due(now)
        why = self._hear_capture(now)
        if why is None:
            return
        if self.ring.ended:
            self._capture.dismiss()
        elif self._ending:
            self.ring.end()  # it was to end anyway
        else:
            again = ", again and again" if self._capture.is_looping(now) else ""
            self._told(f"The process that reads the source died{again}: {why}; it is started again", True)

    # ------------------------------------------------------------------------------------------ trackers

    def _supervise_tracker(self, worker: int, tracker: Supervised, now: float) -> None:
        tracker.start_if_due(now)
        said, why = tracker.heard(now)
        for message in said:
            self._hear_tracker(worker, message)
        place = self.ring.place_of(worker)
        why = why or tracker.hangs(now, place, is_idle=place >= self.ring.published)
        if why is None or worker in self._finished:
            return
        again = ", again and again" if tracker.is_looping(now) else ""
        channels = ", ".join(self._shares[worker])
        detail = f"the process that measures {channels} died{again}: {why}; it is started again a little way back"
        self._news.append(FaultBegins(f"worker {worker}", Fault.PROCESS, detail))
        self._pass_stumbling_block(worker)

    def _hear_tracker(self, worker: int, message: Any) -> None:
        match message:
            case MeasuredBlocks():
                self.merge.add(worker, message.blocks)
                self._news += [FaultEnds(f"worker {worker}"), FaultEnds(f"blocks {worker}")]
            case Finished():
                self._finished[worker] = message.readings
                self._trackers[worker].dismiss()

    def _pass_stumbling_block(self, worker: int) -> None:
        """Let a worker that dies at the same block again and again begin behind it: the others wait for it."""
        number = self.merge.next_of(worker)
        before, times = self._trips.get(worker, (number, 0))
        self._trips[worker] = (number, times + 1 if before == number else 1)
        if self._trips[worker][1] < STUMBLES:
            return
        seen = self.ring.seen(number) if number < self.ring.published else None
        if seen is None:
            return
        passed = MeasuredBlock(number, seen.first_sample, len(seen.samples), seen.cause, seen.arrived_ns, [])
        self.merge.add(worker, [passed])
        self.ring.keep_for(worker, number + 1)
        self._oldest[worker] = number + 1
        channels = ", ".join(self._shares[worker])
        detail = (
            f"a worker died {STUMBLES} times at block {number}, so {channels} pass over it: its windows are missing"
        )
        self._news.append(FaultBegins(f"blocks {worker}", Fault.PROCESS, detail))

    # ------------------------------------------------------------------------------------------ recorder

    def _supervise_recorder(self, recorder: Supervised, now: float) -> None:
        recorder.start_if_due(now)
        said, why = recorder.heard(now)
        for message in said:
            if isinstance(message, Recorded):
                self._stands("disk", Fault.DISK, message.error)
        if self.ring.ended:
            if why is not None:
                recorder.dismiss()
        elif why is not None:
            detail = f"the process that records died: {why}; it is started again"
            self._news.append(FaultBegins("recorder", Fault.PROCESS, detail))
        elif recorder.child is not None and not recorder.is_looping(now):
            self._news.append(FaultEnds("recorder"))
        is_late = self.ring.published - self.ring.recorded > self.ring.shape.most_waiting
        late = "the recorder is late by more than the queue holds, and samples are not recorded: see to its disk"
        self._stands("late recorder", Fault.DISK, late if is_late else None)

    def _stands(self, key: str, fault: Fault, detail: str | None) -> None:
        """Tell that a fault stands, or that it does not."""
        self._news.append(FaultEnds(key) if detail is None else FaultBegins(key, fault, detail))

    # ------------------------------------------------------------------------------------------ the end

    def begin_end(self) -> None:
        """Let the source be read no more; what came is still measured."""
        self._ending = True
        self._capture.dismiss()
        self._capture.tell(Enough())
        if self._capture.child is None:
            self.ring.end()

    @property
    def has_finished(self) -> bool:
        """Whether all that came was measured and told."""
        return self.ring.ended and len(self._finished) == len(self._trackers)

    @property
    def last_readings(self) -> list[Reading]:
        """What the last samples made known at the end, in the order of the workers."""
        return [one for worker in sorted(self._finished) for one in self._finished[worker]]

    def end(self, seconds: float) -> None:
        """See every child to its end; kill those that take longer than so many seconds together."""
        until = time.monotonic() + seconds
        if self._recorder is not None:
            self._recorder.tell(Enough())
        for one in self._children:
            one.end(until - time.monotonic())

    def close(self) -> None:
        """Leave no process behind, and let go of the memory."""
        self.end(0.0)
        self.ring.close()
