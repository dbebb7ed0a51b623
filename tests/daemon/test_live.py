"""The live run keeps the source's pace, commits within 200 ms, beats every second, and ends in good order."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
from driftwatch.config import Configuration, loads
from driftwatch.daemon.keeper import Keeper
from driftwatch.daemon.live import Clock, LiveRun
from driftwatch.daemon.stop import Stop
from driftwatch.pipeline.station import RunHeader, Station
from driftwatch.records import NS, Block, Envelope, Heartbeat, Measurement, Origin, Run, TimeQuality, sample_time_ns
from driftwatch.stream.source import SourceFailedError

RATE = 1000
START_NS = 1_767_225_600 * NS
DUE_S = 0.2
"""How long a record may wait for its commit, seconds."""


@dataclass
class Stepped:
    """A clock that moves only when it is waited for."""

    now: float = 100.0

    def wait(self, stop: Stop, seconds: float) -> bool:
        self.now += seconds
        return stop.is_set()

    @property
    def clock(self) -> Clock:
        return Clock(lambda: self.now, self.wait)


@dataclass
class Source:
    """Noise of so many seconds, after which it ends or fails."""

    seconds: float = 3.0
    gap_at_s: float | None = None  # from where on 5 s are missing
    fails: bool = False
    name: str = "card"
    rate_hz: int = RATE
    inputs: int = 1
    start_ns: int = START_NS
    time_quality: TimeQuality = TimeQuality.FREE
    sources: tuple[str, ...] = ("card",)
    assumed: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()
    length: int | None = None
    first_sample: int = 0

    def blocks(self, frames: int) -> Iterator[Block]:
        rng = np.random.default_rng(0)
        for first in range(0, round(self.seconds * RATE), frames):
            missing = 5 * RATE if self.gap_at_s is not None and first >= self.gap_at_s * RATE else 0
            samples = rng.standard_normal((frames, 1)).astype(np.float32)
            yield Block(self.name, first + missing, sample_time_ns(START_NS, first + missing, RATE), samples)
        if self.fails:
            raise SourceFailedError("the card was pulled out")


class Beats:
    """Stands in for the publisher."""

    def __init__(self, clock: Stepped) -> None:
        self._clock = clock
        self.beats: list[tuple[float, Heartbeat]] = []

    def heartbeat(self, heartbeat: Heartbeat) -> None:
        self.beats.append((self._clock.now, heartbeat))


@pytest.fixture(scope="module")
def config() -> Configuration:
    return loads(
        'schema = 1\n[station]\nname = "s"\n[[channel]]\nname = "a"\n[[mode]]\nname = "m"\nchannel = "a"\n'
        "search_hz = [80.0, 160.0]\nwindow_s = 1.0\nstep_s = 0.25\n"
    )


Parts = tuple[Stepped, LiveRun, Beats, list[tuple[float, Envelope]]]
Make = Callable[..., Parts]


@pytest.fixture
def make(config: Configuration) -> Make:
    """Return a maker of a live run with all that it drives: clock, run, heartbeats, committed records with times."""

    def of(source: Source, **options: Any) -> Parts:
        stepped = Stepped()
        header = RunHeader("s", "5f0e8f0e-1111-4222-8333-123456789abc", Origin.LIVE, source.time_quality)
        station = Station(config, header, [source])
        out: list[tuple[float, Envelope]] = []

        def told(envelopes: Sequence[Envelope]) -> None:
            out.extend((stepped.now, envelope) for envelope in envelopes)

        beats = Beats(stepped)
        run = LiveRun(source, station, Keeper(out=told), publisher=beats, clock=stepped.clock, **options)  # type: ignore[arg-type]
        return stepped, run, beats, out

    return of


@pytest.mark.parametrize(("pace", "took"), [(1.0, 3.0), (2.0, 1.5), (0.0, 0.0)])
def test_the_source_sets_the_pace(make: Make, pace: float, took: float) -> None:
    clock, run, _, out = make(Source(3.0), pace=pace)
    assert run.until(Stop()) == "the source ended"
    assert clock.now - 100.0 == pytest.approx(took)
    assert sum(isinstance(envelope.body, Measurement) for _, envelope in out) == 9


def test_a_record_is_committed_within_200_ms_of_when_it_was_made(make: Make, monkeypatch: pytest.MonkeyPatch) -> None:
    made: dict[int, float] = {}
    clock, run, _, out = make(Source(3.0))
    take = Keeper.take

    def noting(keeper: Keeper, envelopes: Sequence[Envelope]) -> None:
        made.update((envelope.sequence, clock.now) for envelope in envelopes)
        take(keeper, envelopes)

    monkeypatch.setattr(Keeper, "take", noting)
    run.until(Stop())
    waited = [now - made[envelope.sequence] for now, envelope in out]
    assert len(waited) == 20  # nine measurements with their track points, begin and end
    assert max(waited) <= DUE_S + 1e-9


def test_a_heartbeat_comes_every_second_also_while_no_samples_come(make: Make) -> None:
    _, run, beats, _ = make(Source(3.0, gap_at_s=1.5))
    run.until(Stop())
    times = [round(now - 100.0, 6) for now, _ in beats.beats]
    assert len(times) == 9
    # A look every 50 ms finds a beat that late at most; lateness does not add up.
    assert all(0.0 <= time - index < 0.05 + 1e-6 for index, time in enumerate(times[1:], 1))
    ages = [beat.sample_age_s for _, beat in beats.beats]
    assert ages[1] == pytest.approx(0.05, abs=0.051)
    assert max(age for age in ages if age is not None) > 3.0


def test_the_stop_ends_the_run_with_everything_told(make: Make) -> None:
    stop = Stop()
    _, run, _, out = make(Source(60.0), chore=lambda now: stop.set() if now >= 102.0 else None)
    assert run.until(stop) == "stopped"
    bodies = [envelope.body for _, envelope in out]
    assert isinstance(bodies[-1], Run)
    assert bodies[-1].reason == "stopped"
    assert bodies[-1].samples == pytest.approx(2 * RATE, abs=0.1 * RATE)
    assert [envelope.sequence for _, envelope in out] == list(range(1, len(out) + 1))


def test_a_source_that_fails_ends_the_run_with_what_it_gave(make: Make) -> None:
    _, run, _, out = make(Source(3.0, fails=True))
    with pytest.raises(SourceFailedError, match="pulled out"):
        run.until(Stop())
    last = out[-1][1].body
    assert isinstance(last, Run)
    assert last.reason == "failed: the card was pulled out"
    assert last.samples == 3 * RATE


def test_chores_are_done_about_once_a_second(make: Make) -> None:
    done: list[float] = []
    _, run, _, _ = make(Source(4.0), chore=done.append)
    run.until(Stop())
    assert [round(now - 100.0) for now in done] == [0, 1, 2, 3, 4]
