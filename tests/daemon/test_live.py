"""The live run keeps the source's pace, commits within 200 ms, beats every second, and ends in good order.

Its children are real processes. What dies among them changes no figure: the records equal those of one station that
measured the same samples by itself.
"""

from __future__ import annotations

import dataclasses
import os
import signal
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from multiprocessing import connection
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import pytest
from driftwatch.config import Configuration, SimulatedSourceConfig
from driftwatch.daemon import crew, live
from driftwatch.daemon.crew import LOOK_S
from driftwatch.daemon.feed import PacedFeed
from driftwatch.daemon.keeper import Keeper
from driftwatch.daemon.live import Company, LiveRun
from driftwatch.daemon.stop import Stop
from driftwatch.pipeline.station import RunHeader, Station
from driftwatch.pipeline.ticks import with_ticks
from driftwatch.records import (
    Alert,
    Envelope,
    Fault,
    Health,
    Heartbeat,
    Measurement,
    Origin,
    Phase,
    Run,
    Track,
)
from driftwatch.store.errors import CommitError
from driftwatch.stream.simulated import SimulatedSource
from driftwatch.stream.source import Source, SourceFailedError
from odd_source import OddSource
from ordered import LONG_S, children, is_running, until
from two_channels import RATE, RUN, START_NS, ambient, configuration

DUE_S = 0.2
"""How long a record may wait for its commit, seconds."""


def model(seconds: float) -> SimulatedSource:
    """Return a source whose first input sees a mode under random force, whose second one that is struck."""
    first: dict[str, Any] = {"frequency_hz": 120.0, "q": 30.0, "level": 0.05}
    second: dict[str, Any] = {"input": 2, "frequency_hz": 110.0, "q": 40.0, "impact_every_s": 2.3, "impact_peak": 0.5}
    chosen = SimulatedSourceConfig.model_validate(
        {
            "name": "card", "rate_hz": RATE, "inputs": 2, "seed": 4, "noise": 0.002, "seconds": seconds,
            "resonator": [first, second],
        }
    )  # fmt: skip
    return SimulatedSource(chosen, START_NS)


def station_of(config: Configuration, source: Source) -> Station:
    header = RunHeader("s", RUN, Origin.LIVE, source.time_quality)
    return Station(config, header, [source])


class Trial:
    """A live run with all that it drives, and what came of it.

    `chore` is called once a second with this trial, `beats` holds each heartbeat with its monotonic time, `out` each
    committed record with the time of its commit, `lines` what was told for the log.
    """

    def __init__(self, source: Source, pace: float, config: Configuration, **options: Any) -> None:
        self.out: list[tuple[float, Envelope]] = []
        self.beats: list[tuple[float, Heartbeat]] = []
        self.lines: list[str] = []
        self.stop = Stop()
        self.clock = live.time.monotonic  # the tests' own clock where one is set
        chore: Callable[[Trial, float], None] = options.get("chore", lambda *_: None)
        company = Company(
            options.get("publisher"),
            lambda now: chore(self, now),
            lambda text, _: self.lines.append(text),
            lambda beat: self.beats.append((self.clock(), beat)),
        )
        self.source = source
        self.live = LiveRun(config, RUN, PacedFeed(source, pace, config.daemon.queue_s), company, Path("nowhere"))
        self.station = station_of(config, source)
        self.keeper = options.get("keeper") or Keeper(out=self._commit)

    def _commit(self, envelopes: Sequence[Envelope]) -> None:
        self.out += [(self.clock(), one) for one in envelopes]

    def run(self) -> str:
        with self.live:
            assert self.live.start(self.stop) is not None
            return self.live.until(self.stop, self.station, self.keeper)

    @property
    def records(self) -> list[Envelope]:
        return [one for _, one in self.out]

    def bodies(self, kind: type) -> list[Any]:
        return [one.body for one in self.records if isinstance(one.body, kind)]


pytestmark = pytest.mark.usefixtures("importable")  # `odd_source`


@pytest.fixture(autouse=True)
def _no_process_is_left() -> Iterator[None]:
    yield
    left = [pid for role in ("capture", "tracker", "recorder") for pid in children(os.getpid(), role)]
    assert left == []


def whole(source: Source, config: Configuration) -> list[Envelope]:
    """Return the records of one station that measures by itself."""
    station = station_of(config, source)
    records = station.begin()
    for item in with_ticks(source.blocks(700), source.rate_hz):
        records += station.feed(item)
    return records + station.finish("the source ended")


def figures(records: list[Envelope]) -> list[tuple[int, Any]]:
    """Return all that was measured, followed and judged, without numbers, which daemon's own records shift."""
    kept = [one for one in records if isinstance(one.body, Measurement | Track | Alert)]
    return [
        (one.time_ns, dataclasses.replace(one.body, because=()) if isinstance(one.body, Alert) else one.body)
        for one in kept
    ]


def are_numbered(records: list[Envelope]) -> None:
    assert [one.sequence for one in records] == list(range(1, len(records) + 1))


# ---------------------------------------------------------------------------------------------- pace and time


def test_no_sample_comes_before_its_time() -> None:
    """At twice the pace of real time 3 s last 1.5 s, less a block; at no pace see `test_whoever_dies_...`."""
    source = OddSource(3.0)
    trial = Trial(source, 2.0, configuration())
    began = time.monotonic()
    assert trial.run() == "the source ended"
    assert time.monotonic() - began > 1.5 - 0.1 / 2.0
    assert figures(trial.records) == figures(whole(source, configuration()))
    assert trial.bodies(Run)[-1].samples == 3 * RATE


@dataclass
class Looked:
    """A run whose main process's clock moved by the longest wait at each wait and not otherwise: the worst case."""

    trial: Trial
    made: dict[int, float]  # when each record was made, by its number
    chores: list[float]


@pytest.fixture(scope="module")
def looked() -> Iterator[Looked]:
    """Run through a gap of 5 s at four times the pace of real time, until six chores were done and it is over."""
    clock = SimpleNamespace(now=100.0)

    def waited(*arguments: Any) -> Any:
        clock.now += LOOK_S
        return connection.wait(*arguments)

    def slept(seconds: float) -> None:
        clock.now += LOOK_S
        time.sleep(seconds)

    made: dict[int, float] = {}
    chores: list[float] = []
    take = Keeper.take

    def noting(keeper: Keeper, envelopes: Sequence[Envelope]) -> None:
        made.update((envelope.sequence, clock.now) for envelope in envelopes)
        take(keeper, envelopes)

    def chore(trial: Trial, now: float) -> None:
        chores.append(now)
        if len(chores) >= 6 and trial.live.samples > 4 * RATE:
            trial.stop.set()

    stepped = SimpleNamespace(monotonic=lambda: clock.now, sleep=slept)
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("PYTHONPATH", str(Path(__file__).parent))
        patch.setattr(crew, "connection", SimpleNamespace(wait=waited))
        patch.setattr(Keeper, "take", noting)
        for module in (crew, live):
            patch.setattr(module, "time", stepped)
        trial = Trial(OddSource(600.0, gap_at_s=3.0), 4.0, configuration(), chore=chore)
        trial.run()
        yield Looked(trial, made, chores)


def test_a_record_is_committed_within_200_ms_of_when_it_was_made(looked: Looked) -> None:
    assert len(looked.trial.out) > 20
    assert max(now - looked.made[one.sequence] for now, one in looked.trial.out) <= DUE_S + 1e-9


def test_heartbeats_and_chores_come_every_second_also_while_no_samples_come(looked: Looked) -> None:
    """A look every 50 ms finds each that late at most, and lateness does not add up. A gap is waited for as well."""
    for times in ([now for now, _ in looked.trial.beats], looked.chores):
        assert len(times) >= 6
        assert all(index - 1e-6 <= now - times[0] < index + LOOK_S + 1e-6 for index, now in enumerate(times))


# ---------------------------------------------------------------------------------------------- the end


def test_the_stop_ends_the_run_with_everything_told() -> None:
    trial = Trial(
        OddSource(600.0), 2.0, configuration(), chore=lambda one, _: one.live.samples > 1500 and one.stop.set()
    )
    assert trial.run() == "stopped"
    are_numbered(trial.records)
    last = trial.records[-1].body
    assert isinstance(last, Run)
    assert last.reason == "stopped"
    assert last.samples > 1500
    assert figures(trial.records) == figures(whole(OddSource(last.samples / RATE), configuration()))


def test_a_stop_before_the_start_starts_nothing() -> None:
    trial = Trial(OddSource(3.0), 1.0, configuration())
    trial.stop.set()
    with trial.live:
        assert trial.live.start(trial.stop) is None
        with pytest.raises(ValueError, match="was not started"):
            trial.live.until(trial.stop, trial.station, trial.keeper)


def test_a_source_that_fails_ends_the_run_with_what_it_gave_stored_first() -> None:
    trial = Trial(OddSource(3.0, fails=True), 0.0, configuration())
    with pytest.raises(SourceFailedError, match="pulled out"):
        trial.run()
    last = trial.records[-1].body
    assert isinstance(last, Run)
    assert (last.reason, last.samples) == ("failed: the card was pulled out", 3 * RATE)
    assert figures(trial.records) == figures(whole(OddSource(3.0), configuration()))


def test_a_store_that_fails_ends_the_run_and_nothing_of_the_group_is_told() -> None:
    heard: list[int] = []

    class Full:
        """A store that is full after some records."""

        def write(self, group: Sequence[Envelope]) -> None:
            if group[-1].sequence > 10:
                raise CommitError("the disk is full")

    keeper = Keeper(Full(), None, lambda group: heard.extend(one.sequence for one in group))  # type: ignore[arg-type]
    trial = Trial(OddSource(20.0), 2.0, configuration(), keeper=keeper)
    with pytest.raises(CommitError, match="the disk is full"):
        trial.run()
    assert heard == list(range(1, len(heard) + 1))
    assert len(heard) <= 10


def test_a_gap_of_the_source_is_told_as_a_replay_tells_it() -> None:
    source = OddSource(4.0, gap_at_s=1.6)
    trial = Trial(source, 0.0, configuration())
    trial.run()
    expected = whole(source, configuration())
    assert trial.records == expected
    begin, end = trial.bodies(Health)
    assert (begin.fault, begin.phase, end.phase, end.lost_samples) == (Fault.OVERFLOW, Phase.BEGIN, Phase.END, 5 * RATE)


# ---------------------------------------------------------------------------------------------- what dies


def test_the_records_do_not_depend_on_how_many_workers_measure() -> None:
    """There are two channels, so of three workers two work; of one worker a gap, above, tells the same."""
    source = model(10.0)
    trial = Trial(source, 0.0, configuration(3))
    trial.run()
    assert trial.records == whole(source, configuration())


@contextmanager
def struck(trial: Trial, number: signal.Signals, *blows: tuple[str, float]) -> Iterator[list[int]]:
    """Send a signal to the newest process of a role, for each (role, seconds of stream), once so much was measured.

    Gives the list of those it was sent to, which fills; one process is struck once.
    """
    done = threading.Event()
    hit: list[int] = []

    def strike() -> None:
        for role, seconds in blows:
            while not done.wait(0.005):
                if trial.live.samples < seconds * RATE:
                    continue
                fresh = [pid for pid in children(os.getpid(), role) if pid not in hit]
                if fresh:
                    os.kill(fresh[-1], number)
                    hit.append(fresh[-1])
                    break

    thread = threading.Thread(target=strike)
    thread.start()
    try:
        yield hit
    finally:
        done.set()
        thread.join()


def test_a_killed_worker_and_a_killed_capture_change_no_figure_and_the_source_waits() -> None:
    """Of the worker there is one incident with one begin and one end; the capture loses nothing, so there is none.

    The source is at most 10 s ahead of what was measured, and 5 s of before are kept: more than what windows of 1 s and
    decays look back.
    """
    source = model(12.0)
    trial = Trial(source, 4.0, configuration(2, 10.0))
    with struck(trial, signal.SIGKILL, ("capture", 2.0), ("tracker", 4.0)) as killed:
        trial.run()
    assert len(killed) == 2
    are_numbered(trial.records)
    assert figures(trial.records) == figures(whole(source, configuration()))
    assert trial.bodies(Run)[-1].samples == 12 * RATE
    assert trial.lines == ["The process that reads the source died: it was ended by SIGKILL; it is started again"]
    begin, end = trial.bodies(Health)
    assert (begin.phase, end.phase, end.incident) == (Phase.BEGIN, Phase.END, begin.incident)
    assert begin.fault is end.fault is Fault.PROCESS
    assert begin.detail == (
        "the process that measures b died: it was ended by SIGKILL; it is started again a little way back"
    )
    assert 0.1 <= end.seconds < LONG_S
    assert end.lost_samples == 0


def test_whoever_dies_and_whenever_a_run_at_no_pace_gives_the_same_records() -> None:
    """40 s of stream, read in less time; a worker is killed, and then the capture, within moments."""
    source = model(40.0)
    trial = Trial(source, 0.0, configuration(2))
    began = time.monotonic()
    with struck(trial, signal.SIGKILL, ("tracker", 3.0), ("capture", 6.0)) as killed:
        trial.run()
    assert time.monotonic() - began < 40.0
    assert killed
    assert figures(trial.records) == figures(whole(source, configuration()))
    phases = [body.phase for body in trial.bodies(Health)]
    assert phases.count(Phase.BEGIN) == phases.count(Phase.END)


def test_a_stopped_worker_is_killed_and_changes_no_figure_and_heartbeats_tell_how_full_the_queue_is() -> None:
    """A queue of 10 s fills, and the source waits with what it has, until after 5 s the worker is known to hang."""
    source = model(16.0)
    trial = Trial(source, 4.0, configuration(2, 10.0))
    with struck(trial, signal.SIGSTOP, ("tracker", 2.0)) as stopped:
        assert trial.run() == "the source ended"
    assert not is_running(stopped[0])
    assert figures(trial.records) == figures(whole(source, configuration()))
    begin, end = trial.bodies(Health)
    assert begin.detail.startswith("the process that measures b died: it did nothing for 5 s")
    assert (begin.phase, end.phase, end.incident) == (Phase.BEGIN, Phase.END, begin.incident)
    fills = [beat.queue_fill for _, beat in trial.beats]
    assert max(fills) == 1.0
    assert all(0.0 <= fill <= 1.0 for fill in fills)
    ages = [beat.sample_age_s for _, beat in trial.beats]
    assert ages[0] is None
    assert max(age for age in ages if age is not None) > 1.5  # while nothing was measured


def test_a_worker_that_dies_in_a_loop_is_told_as_such_and_the_run_goes_on_once_it_lives() -> None:
    """Killed as soon as it is seen, six times; then it is let be.

    The block at which it died three times is passed over, and then the next: windows that touch them are lost, and no
    other figure changes. They are told of later than 2 s before it died at most, and until it has seen enough again.
    """
    source = model(18.0)
    trial = Trial(source, 4.0, configuration(1))
    with struck(trial, signal.SIGKILL, *[("tracker", 4.0)] * 6) as killed:
        assert trial.run() == "the source ended"
    assert len(killed) == 6
    are_numbered(trial.records)
    assert trial.bodies(Run)[-1].samples == 18 * RATE
    told, expected = (
        ambient(one.body for one in records) for records in (trial.records, whole(source, configuration()))
    )
    assert set(told) <= set(expected)
    lost = sorted(first for _, first in set(expected) - set(told))
    changed = sorted(about[1] for about in told if told[about] != expected[about])
    assert lost
    assert lost[-1] - lost[0] < 4 * RATE
    assert all(lost[0] <= first < lost[-1] + 2 * RATE for first in changed)
    assert len([first for _, first in told if first > lost[-1] + 2 * RATE]) > 10
    bodies = [body for body in trial.bodies(Health) if body.detail.startswith("the process that measures")]
    assert [body.phase for body in bodies] == [Phase.BEGIN, Phase.CONTINUE, Phase.END]
    assert len({body.incident for body in bodies}) == 1
    assert "again and again" not in bodies[0].detail
    assert bodies[1].detail == (
        "the process that measures a, b died, again and again: it was ended by SIGKILL; "
        "it is started again a little way back"
    )
    passed = [body for body in trial.bodies(Health) if body not in bodies]
    assert [body.phase for body in passed] == [Phase.BEGIN, Phase.CONTINUE, Phase.END]
    assert {body.fault for body in passed} == {Fault.PROCESS}
    assert all("so a, b pass over it: its windows are missing" in body.detail for body in passed)


def test_nothing_of_the_children_is_left_when_the_keeper_fails() -> None:
    """The fixture above looks at who is left; here the run is left by an error in its midst."""

    def chore(trial: Trial, _: float) -> None:
        if trial.live.samples > 0:
            raise RuntimeError("in the midst")

    with pytest.raises(RuntimeError, match="in the midst"):
        Trial(OddSource(60.0), 1.0, configuration(), chore=chore).run()


def test_the_process_that_captures_loads_no_more_than_it_needs() -> None:
    """Of scipy's compiled parts none is in its memory, while it reads; in that of a worker they are."""
    feed = PacedFeed(OddSource(60.0), 1.0, 20.0)
    with LiveRun(configuration(1), RUN, feed, Company(), Path("nowhere")) as run:
        assert run.start(Stop()) is not None
        (capture,), (worker,) = (children(os.getpid(), role) for role in ("capture", "tracker"))
        until(lambda: run._ring.published > 0, "samples come")
        until(lambda: "/scipy/" in Path(f"/proc/{worker}/maps").read_text(), "the worker has loaded what it needs")
        assert "/scipy/" not in Path(f"/proc/{capture}/maps").read_text()
