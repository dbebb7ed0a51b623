"""Whatever comes of it, missing samples are one incident with one begin and one end, of exact length."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest
from driftwatch.config import loads
from driftwatch.pipeline.gaps import WORDS, Gaps
from driftwatch.pipeline.station import RunHeader, Station
from driftwatch.pipeline.ticks import with_ticks
from driftwatch.records import NS, Block, Fault, Health, Origin, Phase, Tick, TimeQuality, sample_time_ns
from hypothesis import given
from hypothesis import strategies as st

RATE_HZ = 1_000
START_NS = 1_772_344_800 * NS
CAUSES = (Fault.GAP, Fault.OVERFLOW, Fault.SLOW_CONSUMER, Fault.DEVICE, Fault.PROCESS)


@dataclass(frozen=True)
class Held:
    """What is known of a source without samples."""

    name: str = "card"
    rate_hz: int = RATE_HZ
    inputs: int = 1
    start_ns: int = START_NS
    first_sample: int = 0
    time_quality: TimeQuality = TimeQuality.ASSUMED
    sources: tuple[str, ...] = ("memory",)
    assumed: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()
    length: int | None = None


def gaps_of(first_sample: int = 0) -> Gaps:
    return Gaps("rig", Held(first_sample=first_sample))


def test_a_short_gap_begins_and_ends_with_the_block_behind_it() -> None:
    gaps = gaps_of()
    assert gaps.block(0, 100, Fault.GAP) == []
    begin, end = gaps.block(350, 450, Fault.OVERFLOW)
    assert (begin.phase, end.phase) == (Phase.BEGIN, Phase.END)
    assert begin.incident == end.incident
    assert (begin.first_sample, begin.lost_samples, end.lost_samples) == (100, 0, 250)
    assert (end.first_sample, end.seconds, end.since_ns) == (100, 0.25, START_NS + 100_000_000)
    assert begin.fault is end.fault is Fault.OVERFLOW
    assert gaps.block(450, 550, Fault.OVERFLOW) == []
    assert gaps.position == 550


def test_a_long_gap_begins_with_its_first_tick_and_ends_with_the_block_behind_it() -> None:
    gaps = gaps_of()
    gaps.block(0, 100, Fault.GAP)
    begin = gaps.tick(Fault.DEVICE)
    assert begin is not None
    assert [gaps.tick(Fault.DEVICE) for _ in range(5)] == [None] * 5
    (end,) = gaps.block(6_500, 6_600, Fault.DEVICE)
    assert (begin.phase, end.phase, end.incident) == (Phase.BEGIN, Phase.END, begin.incident)
    assert (end.lost_samples, end.seconds) == (6_400, 6.4)


def test_a_gap_keeps_the_cause_that_it_began_with() -> None:
    """What a block says later is of the time since then: the incident is one."""
    gaps = gaps_of()
    gaps.block(0, 100, Fault.GAP)
    begin = gaps.tick(Fault.DEVICE)
    (end,) = gaps.block(5_000, 5_100, Fault.GAP)
    assert begin is not None
    assert begin.fault is end.fault is Fault.DEVICE


def test_late_samples_that_leave_nothing_out_end_a_gap_that_was_none() -> None:
    """Ticks came, and then the very samples that were taken for lost: not one of them was."""
    gaps = gaps_of()
    gaps.block(0, 100, Fault.GAP)
    begin = gaps.tick(Fault.DEVICE)
    (end,) = gaps.block(100, 200, Fault.DEVICE)
    assert begin is not None
    assert (end.phase, end.incident, end.lost_samples, end.seconds) == (Phase.END, begin.incident, 0, 0.0)
    assert gaps.block(200, 300, Fault.GAP) == []


def test_a_stream_that_ends_in_a_gap_ends_the_gap() -> None:
    gaps = gaps_of()
    gaps.block(0, 100, Fault.GAP)
    assert gaps.finish(START_NS + 100_000_000) is None
    gaps.tick(Fault.DEVICE)
    end = gaps.finish(START_NS + 100_000_000 + 7 * NS)
    assert end is not None
    assert (end.phase, end.fault, end.lost_samples, end.seconds) == (Phase.END, Fault.DEVICE, 7_000, 7.0)
    assert gaps.finish(START_NS + 20 * NS) is None


def test_what_lies_before_the_first_sample_of_a_source_is_not_missing() -> None:
    gaps = gaps_of(first_sample=5_000)
    assert gaps.position_ns == START_NS + 5 * NS
    assert gaps.block(5_000, 5_100, Fault.GAP) == []
    assert [body.lost_samples for body in gaps.block(5_200, 5_300, Fault.GAP)] == [0, 100]


def test_a_device_that_is_not_there_at_the_start_is_a_gap_from_the_first_sample_on() -> None:
    gaps = gaps_of()
    begin = gaps.tick(Fault.DEVICE)
    (end,) = gaps.block(60_000, 60_100, Fault.DEVICE)
    assert begin is not None
    assert (begin.since_ns, begin.first_sample, end.lost_samples) == (START_NS, 0, 60_000)


@pytest.mark.parametrize("cause", CAUSES)
def test_each_cause_says_in_words_of_its_own_what_happened_and_to_whom(cause: Fault) -> None:
    gaps = gaps_of()
    gaps.block(0, 100, Fault.GAP)
    details = {body.detail for body in gaps.block(200, 300, cause)}
    assert details == {f"source card: {WORDS[cause]}; windows that touch them are not used"}
    assert len(set(WORDS.values())) == len(WORDS) == len(CAUSES)


def test_any_other_word_for_a_cause_is_kept_too() -> None:
    gaps = gaps_of()
    bodies = gaps.block(200, 300, Fault.CLOCK_STEP)
    assert [body.fault for body in bodies] == [Fault.CLOCK_STEP] * 2


@given(st.lists(st.tuples(st.integers(0, 3_000), st.integers(0, 4), st.integers(1, 500), st.sampled_from(CAUSES))))
def test_begins_and_ends_alternate_and_the_lost_samples_add_up(steps: list[tuple[int, int, int, Fault]]) -> None:
    """Of each step: how many samples are lost, how many ticks tell of it before the samples come, and how many come."""
    gaps, found, position, lost_in_all, came = gaps_of(), [], 0, 0, 0
    for lost, ticks, count, cause in steps:
        found += [body for _ in range(ticks) if (body := gaps.tick(cause)) is not None]
        position += lost
        found += gaps.block(position, position + count, cause)
        position, lost_in_all, came = position + count, lost_in_all + lost, came + count
    assert [body.phase for body in found] == [Phase.BEGIN, Phase.END] * (len(found) // 2)
    begins, ends = found[::2], found[1::2]
    assert [body.incident for body in begins] == [body.incident for body in ends]
    assert len({body.incident for body in begins}) == len(begins)
    assert len(begins) == sum(lost > 0 or ticks > 0 for lost, ticks, _, _ in steps)
    assert sum(body.lost_samples for body in ends) == lost_in_all == position - came
    assert [body.fault for body in ends] == [cause for lost, ticks, _, cause in steps if lost > 0 or ticks > 0]


# ---------------------------------------------------------------------------------------------- in the station

CONFIG = loads(
    'schema = 1\n[station]\nname = "rig"\n[[channel]]\nname = "a"\n[[mode]]\nname = "m"\nchannel = "a"\n'
    "search_hz = [80.0, 160.0]\nwindow_s = 1.0\n"
)


def health_of(items: list[Block | Tick], end: bool = False) -> list[tuple[int, Health]]:
    """Return what a station tells of gaps, each with the place in the items at which it did."""
    header = RunHeader("rig", "00000000-0000-4000-8000-000000000000", Origin.LIVE, TimeQuality.FREE)
    station = Station(CONFIG, header, [Held()])
    found = [(place, one.body) for place, item in enumerate(items) for one in station.feed(item)]
    found += [(len(items), one.body) for one in (station.finish() if end else [])]
    return [(place, body) for place, body in found if isinstance(body, Health)]


def block(first: int, count: int = 500, cause: Fault = Fault.GAP) -> Block:
    samples = np.random.default_rng(first).standard_normal((count, 1)).astype(np.float32)
    return Block("card", first, sample_time_ns(START_NS, first, RATE_HZ), samples, cause)


@pytest.mark.parametrize("cause", CAUSES)
@pytest.mark.parametrize("lost", [1, 700, 1_000, 5_300])
def test_the_station_tells_a_gap_once_with_its_cause_and_length_with_ticks_and_without(lost: int, cause: Fault) -> None:
    blocks = [block(0), block(500 + lost, cause=cause)]
    with_them, without = health_of(list(with_ticks(blocks, RATE_HZ))), health_of(list(blocks))
    assert [body for _, body in with_them] == [body for _, body in without]
    begin, end = (body for _, body in with_them)
    assert (begin.phase, end.phase, begin.incident) == (Phase.BEGIN, Phase.END, end.incident)
    assert begin.fault is end.fault is cause
    assert (end.lost_samples, end.seconds) == (lost, lost / RATE_HZ)
    assert with_them[0][0] == 1  # known with the first item behind the last samples, be that a tick


def test_two_gaps_are_two_incidents_with_one_begin_and_one_end_each() -> None:
    blocks = [block(0), block(600), block(4_000, cause=Fault.OVERFLOW), block(4_500)]
    bodies = [body for _, body in health_of(list(with_ticks(blocks, RATE_HZ)))]
    assert [body.phase for body in bodies] == [Phase.BEGIN, Phase.END] * 2
    assert [body.lost_samples for body in bodies] == [0, 100, 0, 2_900]
    assert [body.fault for body in bodies] == [Fault.GAP] * 2 + [Fault.OVERFLOW] * 2
    assert bodies[0].incident == bodies[1].incident != bodies[2].incident == bodies[3].incident


def test_the_station_ends_a_gap_that_late_samples_disprove() -> None:
    ticks: list[Block | Tick] = [Tick(START_NS + 500_000_000 + second * NS, Fault.DEVICE) for second in (1, 2, 3)]
    (begun, begin), (ended, end) = health_of([block(0), *ticks, block(500)])
    assert (begun, ended) == (1, 4)
    assert (begin.fault, end.lost_samples, end.phase) == (Fault.DEVICE, 0, Phase.END)
    assert begin.incident == end.incident


def test_the_station_ends_at_its_end_the_gap_that_lasts_until_then() -> None:
    ticks: list[Block | Tick] = [Tick(START_NS + 500_000_000 + second * NS, Fault.DEVICE) for second in (1, 2, 3)]
    (_, begin), (place, end) = health_of([block(0), *ticks], end=True)
    assert place == 4
    assert replace(end, phase=Phase.BEGIN, lost_samples=0, seconds=0.0) == begin
    assert (end.lost_samples, end.seconds) == (3_000, 3.0)
