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
from multiprocessing import connection
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import pytest
from driftwatch.config import Configuration, SimulatedSourceConfig, loads
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
    Method,
    Origin,
    Phase,
    Run,
    Track,
)
from driftwatch.store.errors import CommitError
from driftwatch.stream.simulated import SimulatedSource
from driftwatch.stream.source import Source, SourceFailedError
from odd_source import RATE, START_NS, OddSource
from ordered import LONG_S, children, is_running, until

DUE_S = 0.2
"""How long a record may wait for its commit, seconds."""

RUN = "5f0e8f0e-1111-4222-8333-123456789abc"

CONFIG = """
schema = 1
[station]
name = "s"
[[channel]]
name = "a"
[[channel]]
name = "b"
input = 2
[[mode]]
name = "m"
channel = "a"
search_hz = [80.0, 160.0]
window_s = 1.0
step_s = 0.25
[[mode.band]]
name = "low"
low = 130.0
on_delay_s = 1.0
[[mode]]
name = "m"
channel = "b"
search_hz = [80.0, 160.0]
methods = ["ambient", "ringdown"]
window_s = 1.0
step_s = 0.5
[daemon]
workers = {workers}
queue_s = {queue_s}
"""


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


def configuration(workers: int = 1, queue_s: float = 20.0) -> Configuration:
    return loads(CONFIG.format(workers=workers, queue_s=queue_s))


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


@pytest.fixture(autouse=True)
def _importable(monkeypatch: pytest.MonkeyPatch) -> None:
    """Let the daemon's processes import `odd_source`."""
    monkeypatch.setenv("PYTHONPATH", str(Path(__file__).parent))


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


@pytest.mark.parametrize(("pace", "least_s", "most_s"), [(2.0, 1.5, 60.0), (0.0, 0.0, 60.0)])
def test_the_source_sets_the_pace(pace: float, least_s: float, most_s: float) -> None:
    """At no pace 90 s are read in less than 60; the other way no sample comes before its time."""
    source = OddSource(3.0 if pace else 90.0)
    trial = Trial(source, pace, configuration())
    began = time.monotonic()
    assert trial.run() == "the source ended"
    assert least_s - 0.1 / pace if pace else 0.0 <= time.monotonic() - began < most_s
    assert figures(trial.records) == figures(whole(source, configuration()))
    assert trial.bodies(Run)[-1].samples == round(source.seconds * RATE)


@pytest.fixture
def looks(monkeypatch: pytest.MonkeyPatch) -> SimpleNamespace:
    """Let the main process's clock move by the longest wait at each wait and not otherwise: the worst case."""
    clock = SimpleNamespace(now=100.0)

    def waited(*arguments: Any) -> Any:
        clock.now += LOOK_S
        return connection.wait(*arguments)

    def slept(seconds: float) -> None:
        clock.now += LOOK_S
        time.sleep(seconds)

    monkeypatch.setattr(crew, "connection", SimpleNamespace(wait=waited))
    stepped = SimpleNamespace(monotonic=lambda: clock.now, sleep=slept)
    for module in (crew, live):
        monkeypatch.setattr(module, "time", stepped)
    return clock


def test_a_record_is_committed_within_200_ms_of_when_it_was_made(
    looks: SimpleNamespace, monkeypatch: pytest.MonkeyPatch
) -> None:
    made: dict[int, float] = {}
    take = Keeper.take

    def noting(keeper: Keeper, envelopes: Sequence[Envelope]) -> None:
        made.update((envelope.sequence, looks.now) for envelope in envelopes)
        take(keeper, envelopes)

    monkeypatch.setattr(Keeper, "take", noting)
    trial = Trial(OddSource(6.0), 4.0, configuration())
    trial.run()
    assert len(trial.out) > 40
    assert max(now - made[one.sequence] for now, one in trial.out) <= DUE_S + 1e-9


def test_a_heartbeat_comes_every_second_also_while_no_samples_come(looks: SimpleNamespace) -> None:
    """A look every 50 ms finds a beat that late at most, and lateness does not add up."""
    trial = Trial(OddSource(3.0, gap_at_s=1.5), 1.0, configuration())
    trial.run()
    times = [now - 100.0 for now, _ in trial.beats]
    assert len(times) >= 7  # the gap is waited for as well
    first = times[0]
    assert all(index <= now - first < index + LOOK_S + 1e-6 for index, now in enumerate(times))


def test_heartbeats_tell_how_old_the_last_sample_is_and_how_full_the_queue() -> None:
    """Two seconds of queue, and a worker that is stopped: it fills, and the source waits with what it has."""
    stopped: list[int] = []

    def chore(trial: Trial, _: float) -> None:
        found = children(os.getpid(), "tracker")
        if trial.live.samples > 0 and not stopped and found:
            stopped.append(found[0])
            os.kill(found[0], signal.SIGSTOP)
        if stopped and trial.beats and trial.beats[-1][1].queue_fill == 1.0:
            os.kill(stopped[0], signal.SIGCONT)

    source = OddSource(12.0)
    trial = Trial(source, 1.0, configuration(1, 2.0), chore=chore)
    assert trial.run() == "the source ended"
    fills = [beat.queue_fill for _, beat in trial.beats]
    assert max(fills) == 1.0
    assert all(0.0 <= fill <= 1.0 for fill in fills)
    ages = [beat.sample_age_s for _, beat in trial.beats]
    assert ages[0] is None
    assert max(age for age in ages if age is not None) > 1.5  # while nothing was measured
    assert figures(trial.records) == figures(whole(source, configuration()))


def test_chores_are_done_once_a_second(looks: SimpleNamespace) -> None:
    done: list[float] = []
    Trial(OddSource(3.0), 1.0, configuration(1), chore=lambda _, now: done.append(now - 100.0)).run()
    assert len(done) >= 4
    assert all(index - 1e-6 <= now - done[0] < index + LOOK_S + 1e-6 for index, now in enumerate(done))


# ---------------------------------------------------------------------------------------------- the end


def test_the_stop_ends_the_run_with_everything_told() -> None:
    trial = Trial(
        OddSource(600.0), 1.0, configuration(), chore=lambda one, _: one.live.samples > 1500 and one.stop.set()
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


@pytest.mark.parametrize("workers", [1, 3])
def test_the_records_do_not_depend_on_how_many_workers_measure(workers: int) -> None:
    """There are two channels, so of three workers two work."""
    source = model(12.0)
    trial = Trial(source, 0.0, configuration(workers))
    trial.run()
    assert trial.records == whole(source, configuration())


def _killer(
    role: str, when: Callable[[Trial], bool], times: int = 1
) -> tuple[Callable[[Trial, float], None], list[int]]:
    """Return a chore that kills the first process of a role once something is so, and whom it has killed."""
    killed: list[int] = []

    def chore(trial: Trial, _: float) -> None:
        if len(killed) < times and when(trial):
            found = [pid for pid in children(os.getpid(), role) if pid not in killed]
            if found:
                os.kill(found[0], signal.SIGKILL)
                killed.append(found[0])

    return chore, killed


def test_a_killed_worker_changes_no_figure_and_is_one_incident_with_one_begin_and_one_end() -> None:
    source = model(18.0)
    chore, killed = _killer("tracker", lambda one: one.live.samples > 5 * RATE)
    trial = Trial(source, 4.0, configuration(2), chore=chore)
    trial.run()
    assert len(killed) == 1
    are_numbered(trial.records)
    assert figures(trial.records) == figures(whole(source, configuration()))
    begin, end = trial.bodies(Health)
    assert (begin.phase, end.phase, end.incident) == (Phase.BEGIN, Phase.END, begin.incident)
    assert begin.fault is end.fault is Fault.PROCESS
    assert begin.detail == (
        "the process that measures a died: it was ended by SIGKILL; it is started again a little way back"
    )
    assert 0.1 <= end.seconds < LONG_S
    assert end.lost_samples == 0


def test_a_killed_capture_of_a_source_that_waits_loses_nothing() -> None:
    source = model(18.0)
    chore, killed = _killer("capture", lambda one: one.live.samples > 5 * RATE)
    trial = Trial(source, 4.0, configuration(1, 4.0), chore=chore)  # it is at most 4 s ahead of what was measured
    trial.run()
    assert len(killed) == 1
    assert figures(trial.records) == figures(whole(source, configuration()))
    assert trial.bodies(Health) == []
    assert trial.bodies(Run)[-1].samples == 18 * RATE
    assert trial.lines == ["The process that reads the source died: it was ended by SIGKILL; it is started again"]


def test_whoever_dies_and_whenever_a_run_at_no_pace_gives_the_same_records() -> None:
    """A minute of stream; a thread kills a worker, and then the capture, within moments."""
    source = model(60.0)
    trial = Trial(source, 0.0, configuration(2))
    done = threading.Event()
    killed: list[int] = []

    def kill() -> None:
        for role in ("tracker", "capture"):
            before = trial.live.samples
            while not done.wait(0.005) and trial.live.samples <= before + 5 * RATE:
                pass
            for pid in children(os.getpid(), role)[:1]:
                os.kill(pid, signal.SIGKILL)
                killed.append(pid)

    thread = threading.Thread(target=kill)
    thread.start()
    try:
        trial.run()
    finally:
        done.set()
        thread.join()
    assert killed
    assert figures(trial.records) == figures(whole(source, configuration()))
    phases = [body.phase for body in trial.bodies(Health)]
    assert phases.count(Phase.BEGIN) == phases.count(Phase.END)


def test_a_stopped_worker_is_killed_and_changes_no_figure() -> None:
    """After half of what the queue holds, 7 s. The history is 5 s, more than windows of 1 s look back."""
    stopped: list[int] = []

    def chore(trial: Trial, _: float) -> None:
        if trial.live.samples > 2 * RATE and not stopped:
            stopped.extend(children(os.getpid(), "tracker")[1:])
            os.kill(stopped[0], signal.SIGSTOP)

    source = model(14.0)
    trial = Trial(source, 3.0, configuration(2, 14.0), chore=chore)
    trial.run()
    assert not is_running(stopped[0])
    assert figures(trial.records) == figures(whole(source, configuration()))
    begin, end = trial.bodies(Health)
    assert begin.detail.startswith("the process that measures b died: it did nothing for 7 s")
    assert (begin.phase, end.phase, end.incident) == (Phase.BEGIN, Phase.END, begin.incident)


def test_a_worker_that_dies_in_a_loop_is_told_as_such_and_the_run_goes_on_once_it_lives() -> None:
    """Killed as soon as it is seen, six times; then it is let be.

    The block at which it died three times is passed over, and then the next: windows that touch them are lost, and no
    other figure changes. They are told of later than 2 s before it died at most, and until it has seen enough again.
    """
    source = model(24.0)
    trial = Trial(source, 4.0, configuration(1))
    done = threading.Event()
    killed: set[int] = set()

    def kill() -> None:
        until(lambda: done.is_set() or trial.live.samples > 4 * RATE, "samples come")
        while len(killed) < 6 and not done.wait(0.01):
            for pid in set(children(os.getpid(), "tracker")) - killed:
                os.kill(pid, signal.SIGKILL)
                killed.add(pid)

    thread = threading.Thread(target=kill)
    thread.start()
    try:
        assert trial.run() == "the source ended"
    finally:
        done.set()
        thread.join()
    assert len(killed) == 6
    are_numbered(trial.records)
    assert trial.bodies(Run)[-1].samples == 24 * RATE
    told, expected = (_ambient(records) for records in (trial.records, whole(source, configuration())))
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


def _ambient(records: list[Envelope]) -> dict[tuple[str, int], Measurement]:
    """Return the measurements of ambient windows by channel and first sample."""
    measured = [one.body for one in records if isinstance(one.body, Measurement)]
    return {(body.channel, body.first_sample): body for body in measured if body.method is Method.AMBIENT}


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
