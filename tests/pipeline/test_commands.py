"""Commands enter the stream where they came, and a replay gives them again at the same place."""

from __future__ import annotations

import itertools
from dataclasses import dataclass, replace

import numpy as np
import pytest
from driftwatch.config import loads
from driftwatch.pipeline.commands import again, with_commands
from driftwatch.pipeline.station import RunHeader, Station
from driftwatch.pipeline.ticks import with_ticks
from driftwatch.records import NS, AlertState, Block, Command, Envelope, Fault, Origin, TimeQuality, sample_time_ns
from driftwatch.stream.resonator import resonator_response
from hypothesis import given, settings
from hypothesis import strategies as st

RATE_HZ = 4_410  # a second is no whole number of its blocks, a sample no whole number of nanoseconds
START_NS = 1_772_344_800 * NS + 1
LENGTH = 30 * RATE_HZ
GAP = (9 * RATE_HZ + 77, 20 * RATE_HZ + 5)  # samples that never came

CONFIG = loads("""
schema = 1
[station]
name = "test rig"
[[channel]]
name = "near"
quantity = "velocity"
[[mode]]
name = "rocking"
channel = "near"
search_hz = [560.0, 680.0]
window_s = 1.0
step_s = 0.25
[[mode.band]]
name = "warning"
high = 600.0
on_delay_s = 2.0
[[alert]]
name = "no data"
condition = "no_data"
on_delay_s = 5.0
""")


@dataclass(frozen=True)
class Facts:
    name: str = "card"
    rate_hz: int = RATE_HZ
    inputs: int = 1
    start_ns: int = START_NS
    first_sample: int = 0
    length: int = LENGTH
    time_quality: TimeQuality = TimeQuality.FREE
    sources: tuple[str, ...] = ()
    assumed: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()


SAMPLES = resonator_response(np.random.default_rng(0), LENGTH, RATE_HZ, 620.0, 50.0, 1.0, "velocity").astype(np.float32)


def blocks(size: int) -> list[Block]:
    """The stream in blocks of one size, without what never came."""
    cuts = sorted({*range(0, LENGTH, size), *GAP, LENGTH})
    return [
        Block("card", first, sample_time_ns(START_NS, first, RATE_HZ), SAMPLES[first:end, None], Fault.DEVICE)
        for first, end in itertools.pairwise(cuts)
        if not GAP[0] <= first < GAP[1]
    ]


def station() -> Station:
    return Station(CONFIG, RunHeader("test rig", "run", Origin.LIVE, TimeQuality.FREE), [Facts()])


def live(size: int, asked: dict[int, Command]) -> list[Envelope]:
    """As a daemon does it: after so many items a command comes in, at the stream time reached."""
    one, number = station(), 0
    records = one.begin()
    for number, item in enumerate(with_ticks(blocks(size), RATE_HZ)):
        records += one.feed(item)
        if number in asked:
            records += one.feed(replace(asked[number], time_ns=one.now_ns))
    return records + one.finish("over")


def replayed(size: int, commands: list[Command]) -> list[Envelope]:
    one = station()
    records = one.begin()
    for item in with_commands(with_ticks(blocks(size), RATE_HZ), commands, RATE_HZ):
        records += one.feed(item)
    return records + one.finish("over")


ASKS = [
    Command(0, "r1", "ann", "acknowledge", "near/rocking/warning", "seen"),
    Command(0, "r2", "ann", "acknowledge", "no data", None),
    Command(0, "r3", "ben", "note", "handover", "belt tensioned"),
    Command(0, "r4", "plc", "covariate", "temperature", None, 21.5, "degC"),
    Command(0, "r5", "ben", "reload", None, None, outcome="done: taken over"),
]


@given(
    sizes=st.tuples(st.integers(300, 3_000), st.sampled_from([70, 999, 5_000, LENGTH])),
    places=st.lists(st.integers(0, 40), min_size=len(ASKS), max_size=len(ASKS), unique=True),
)
@settings(max_examples=12, deadline=None)
def test_a_replay_with_the_commands_gives_the_records_of_the_run_whatever_the_cut(sizes, places):
    run = live(sizes[0], dict(zip(places, ASKS, strict=True)))
    assert replayed(sizes[1], again(run)) == run


def test_what_was_acknowledged_live_is_acknowledged_in_the_replay():
    """The alert of the band stands from about the fourth second on, and stays above its limit."""
    run = live(RATE_HZ, {7: ASKS[0]})
    walk = [one.body.state for one in run if one.kind == "alert" and one.body.alert == "near/rocking/warning"]
    assert AlertState.ACKNOWLEDGED in walk
    assert replayed(LENGTH, again(run)) == run
    without = [one for one in replayed(LENGTH, []) if one.kind == "alert"]
    assert all(one.body.state is not AlertState.ACKNOWLEDGED for one in without)


@pytest.mark.parametrize("size", [1, 500, 5_000])
def test_a_command_before_the_first_sample_or_after_the_last_is_given_all_the_same(size):
    few = blocks(5_000)[:1]
    early, late = replace(ASKS[2], time_ns=START_NS), replace(ASKS[3], time_ns=START_NS + 3600 * NS)
    cut = [replace(few[0], first_sample=n, time_ns=sample_time_ns(START_NS, n, RATE_HZ), samples=few[0].samples[n : n + size]) for n in range(0, 5_000, size)]  # fmt: skip  # noqa: E501
    items = list(with_commands(cut, [early, late], RATE_HZ))
    assert (items[0], items[-1]) == (early, late)
    assert sum(item.count for item in items[1:-1]) == 5_000
