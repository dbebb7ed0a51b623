"""Channels may be shared out among processes in any way, and one that died may begin again a little way back."""

from __future__ import annotations

import itertools
from dataclasses import dataclass, replace

import numpy as np
import pytest
from driftwatch.config import loads
from driftwatch.pipeline.channel import zoom_of
from driftwatch.pipeline.group import ChannelGroup, measured_channels
from driftwatch.pipeline.reading import Reading
from driftwatch.pipeline.station import RunHeader, Station
from driftwatch.pipeline.ticks import with_ticks
from driftwatch.records import (
    NS,
    Block,
    Envelope,
    Fault,
    Health,
    Measurement,
    Method,
    Origin,
    Stretch,
    TimeQuality,
    sample_time_ns,
)
from driftwatch.stream.resonator import free_decay, resonator_response
from hypothesis import given, settings
from hypothesis import strategies as st

RATE_HZ = 4_096
START_NS = 1_772_344_800 * NS

CONFIG = loads("""
schema = 1
[station]
name = "test rig"
[[channel]]
name = "near"
input = 1
[[channel]]
name = "idle"
input = 3
[[channel]]
name = "far"
input = 2
quantity = "velocity"
[[channel]]
name = "top"
input = 3
[[mode]]
name = "rocking"
channel = "near"
search_hz = [560.0, 680.0]
methods = ["ambient", "ringdown"]
window_s = 1.0
step_s = 0.25
[[mode]]
name = "rocking"
channel = "far"
search_hz = [560.0, 680.0]
methods = ["ringdown"]
window_s = 0.75
[[mode]]
name = "bending"
channel = "near"
search_hz = [1200.0, 1300.0]
window_s = 0.5
[[mode]]
name = "bending"
channel = "top"
search_hz = [1200.0, 1300.0]
methods = ["ambient", "ringdown"]
window_s = 0.6
""")
CHANNELS = ["near", "far", "top"]  # "idle" has no modes
SHARES = [[CHANNELS], [["near"], ["far", "top"]], [["near", "far"], ["top"]], [["near"], ["far"], ["top"]]]


@dataclass(frozen=True)
class Held:
    """What is known of a source whose samples the test holds."""

    name: str = "held"
    rate_hz: int = RATE_HZ
    inputs: int = 3
    start_ns: int = START_NS
    first_sample: int = 0
    time_quality: TimeQuality = TimeQuality.ASSUMED
    sources: tuple[str, ...] = ("memory",)
    assumed: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()
    length: int | None = None


def _samples(seconds: float) -> np.ndarray:
    """Two resonances under random force, struck now and then."""
    rng = np.random.default_rng(3)
    n = round(seconds * RATE_HZ)
    low = resonator_response(rng, n, RATE_HZ, 620.0, 50.0, 0.02, "acceleration")
    high = resonator_response(rng, n, RATE_HZ, 1250.0, 90.0, 0.02, "acceleration")
    for at in (1.7, 3.9, 4.2, 6.6):
        low += free_decay(n, RATE_HZ, 620.0, 50.0, 1.0, 0.3, at * RATE_HZ)
        high += free_decay(n, RATE_HZ, 1250.0, 90.0, 1.0, 0.7, at * RATE_HZ)
    noise = rng.standard_normal((n, 3)) * 0.003
    return (np.stack([low + high, low, high], axis=1) + noise).astype(np.float32)


SAMPLES = _samples(8.5)
SOURCE = Held()

Holes = list[tuple[int, int, str]]
"""First sample, length, and "missing" or "nan" on the first input."""

_HOLE = st.one_of(
    st.tuples(st.integers(1, len(SAMPLES) - 2), st.integers(1, 9_000), st.just("missing")),
    st.tuples(st.integers(1, len(SAMPLES) - 2), st.integers(1, 4_000), st.just("nan")),
)
HOLES = st.lists(_HOLE, max_size=3)


def blocks_of(holes: Holes, size: int) -> list[Block]:
    """Return the samples cut into blocks of a size, without those in the holes."""
    samples = SAMPLES.copy()
    missing = np.zeros(len(samples), dtype=bool)
    for first, count, kind in holes:
        if kind == "nan":
            samples[first : first + count, 0] = np.nan
        else:
            missing[first : first + count] = True
    missing[0] = False
    edges = [0, *(np.flatnonzero(np.diff(missing)) + 1).tolist(), len(samples)]
    return [
        Block("held", first, sample_time_ns(START_NS, first, RATE_HZ), samples[first : min(first + size, end)])
        for begin, end in itertools.pairwise(edges)
        if not missing[begin]
        for first in range(begin, end, size)
    ]


def station() -> Station:
    header = RunHeader("test rig", "00000000-0000-4000-8000-000000000000", Origin.REPLAY, SOURCE.time_quality)
    return Station(CONFIG, header, [SOURCE])


def whole(blocks: list[Block]) -> list[Envelope]:
    """Return the records of one station that measures by itself."""
    one = station()
    records = one.begin()
    for item in with_ticks(blocks, RATE_HZ):
        records += one.feed(item)
    return records + one.finish("end")


def shared(blocks: list[Block], shares: list[list[str]]) -> list[Envelope]:
    """Return the records of a station whose channels are measured by several groups."""
    groups = [ChannelGroup(CONFIG, SOURCE, share) for share in shares]
    one = station()
    records = one.begin()
    for item in with_ticks(blocks, RATE_HZ):
        if isinstance(item, Block):
            readings = [reading for group in groups for reading in group.push(item)]
            stretch = Stretch(item.source, item.first_sample, item.time_ns, item.count, item.cause)
            records += one.measured(stretch, readings)
        else:
            records += one.feed(item)
    return records + one.finish("end", [reading for group in groups for reading in group.finish()])


def test_the_rig_gives_every_kind_of_reading_that_is_tried_here() -> None:
    measured = [one.body for one in whole(blocks_of([], 1_000)) if isinstance(one.body, Measurement)]
    usable = {(body.channel, body.mode, body.method) for body in measured if body.usable}
    assert usable == {
        ("near", "rocking", Method.AMBIENT),
        ("near", "rocking", Method.RINGDOWN),
        ("near", "bending", Method.AMBIENT),
        ("far", "rocking", Method.RINGDOWN),
        ("top", "bending", Method.AMBIENT),
        ("top", "bending", Method.RINGDOWN),
    }
    assert any("impact" in body.reasons for body in measured)


def test_a_channel_without_modes_is_measured_by_nobody() -> None:
    assert [channel.name for channel in measured_channels(CONFIG, "held", only=True)] == CHANNELS
    assert measured_channels(CONFIG, "held", only=False) == []  # the channels name no source


@given(st.sampled_from(SHARES), HOLES, st.integers(700, 20_000))
@settings(max_examples=3, deadline=None)
def test_the_records_do_not_depend_on_how_many_measure(shares: list[list[str]], holes: Holes, size: int) -> None:
    """One, two or three groups against a station that measures by itself: bit for bit, gaps and all."""
    blocks = blocks_of(holes, size)
    assert shared(blocks, shares) == whole(blocks)


# ---------------------------------------------------------------------------------------------- beginning again


def readings_of(blocks: list[Block], channels: list[str], first_sample: int | None = None) -> list[list[Reading]]:
    """Return what each block makes known, and the end after the last."""
    group = ChannelGroup(CONFIG, SOURCE, channels, first_sample)
    return [group.push(block) for block in blocks] + [group.finish()]


def again(blocks: list[Block], channels: list[str], dead: int) -> list[list[Reading]]:
    """Return what a group makes known that begins again where one died before block number `dead`, 1 or more."""
    wanted = blocks[dead - 1].first_sample + blocks[dead - 1].count
    wanted -= ChannelGroup(CONFIG, SOURCE, channels).memory
    begin = max((index for index, block in enumerate(blocks[:dead]) if block.first_sample <= wanted), default=0)
    return readings_of(blocks[begin:], channels, blocks[begin].first_sample)[dead - begin :]


@given(st.data(), HOLES, st.integers(200, 3_000), st.sampled_from([["near"], ["far"], ["top"]]))
@settings(max_examples=8, deadline=None)
def test_a_group_that_begins_again_within_its_memory_goes_on_as_if_it_had_not_died(
    data: st.DataObject, holes: Holes, size: int, channels: list[str]
) -> None:
    """Wherever it dies: in a decay, between two blows, before a gap, among samples that are no numbers.

    Those last shorter than the memory here: of what began before it, only the group that lived can tell the begin.
    """
    blocks = blocks_of(holes, size)
    dead = data.draw(st.integers(1, len(blocks)), label="dies before block")
    assert again(blocks, channels, dead) == readings_of(blocks, channels)[dead:]


def test_a_group_that_dies_just_before_a_gap_tells_the_windows_that_the_gap_cut() -> None:
    blocks = blocks_of([(16_000, 9_000, "missing")], 1_000)
    dead = next(index for index, block in enumerate(blocks) if block.first_sample == 25_000)
    lived = readings_of(blocks, CHANNELS)
    cut = [one.body for one in lived[dead] if isinstance(one.body, Measurement) and one.body.reasons == ("gap",)]
    assert len(cut) >= 4
    assert again(blocks, CHANNELS, dead) == lived[dead:]


def test_the_memory_is_no_longer_than_is_needed_to_say_so() -> None:
    """It is over the longest window and under five of them, so that a ring can hold it."""
    for channels, window_s in ((["near"], 1.0), (["far"], 0.75), (["top"], 0.6)):
        memory = ChannelGroup(CONFIG, SOURCE, channels).memory
        assert window_s * RATE_HZ < memory < 5 * window_s * RATE_HZ + RATE_HZ


@given(st.integers(1, len(SAMPLES) - RATE_HZ), st.integers(0, 4_000), st.integers(300, 3_000))
@settings(max_examples=4, deadline=None)
def test_where_the_history_is_gone_windows_are_lost_and_nothing_wrong_is_told(
    position: int, history: int, size: int
) -> None:
    """Every window that is told again is one that the group that lived told as well, with the same figures.

    A group that knows less of what was before may take quiet stretches or impacts for others; windows that an impact
    touches, and decays, are therefore held to their truth instead: five standard uncertainties, false alarm 6e-7 each.
    """
    first = max(0, position - history)
    blocks = [block for block in blocks_of([], size) if block.first_sample >= first]
    told = [one for readings in readings_of(blocks, CHANNELS, first) for one in readings if one.ready > position]
    known = {_window(one.body): one.body for one in _ALL if isinstance(one.body, Measurement)}
    assert not [one for one in told if isinstance(one.body, Health)]
    truth = {"rocking": (620.0, 50.0), "bending": (1250.0, 90.0)}
    for body in [one.body for one in told if isinstance(one.body, Measurement)]:
        assert body.first_sample >= min(block.first_sample for block in blocks)
        assert body.first_sample + body.samples <= len(SAMPLES)
        if body.usable and body != known.get(_window(body)):
            frequency_hz, q = truth[body.mode]
            assert body.frequency_hz is not None
            assert body.frequency_std_hz is not None
            assert body.q is not None
            assert body.q_std is not None
            assert abs(body.frequency_hz - frequency_hz) < 5 * body.frequency_std_hz
            assert abs(np.log(body.q / q)) < 5 * body.q_std / body.q


def _window(body: object) -> tuple[str, str, Method, int]:
    assert isinstance(body, Measurement)
    return body.channel, body.mode, body.method, body.first_sample


_ALL = [one for readings in readings_of(blocks_of([], len(SAMPLES)), CHANNELS) for one in readings]


def test_a_source_that_begins_late_in_its_stream_is_measured_from_there_on() -> None:
    """Windows lie on the grid of the whole stream; of those that begin before the first sample nothing is said."""
    first = 2 * RATE_HZ + 77
    late = replace(SOURCE, first_sample=first)
    group = ChannelGroup(CONFIG, late, CHANNELS)
    blocks = [block for block in blocks_of([], 1_000) if block.first_sample >= first]
    blocks.insert(0, Block("held", first, 0, SAMPLES[first : blocks[0].first_sample]))
    told = [one.body for block in blocks for one in group.push(block)]
    windows = [body for body in told if isinstance(body, Measurement) and body.method is Method.AMBIENT]
    assert windows
    assert min(body.first_sample for body in windows) >= first
    known = {_window(one.body): one.body for one in _ALL if isinstance(one.body, Measurement)}
    later = [body for body in windows if body.first_sample > first + 2 * RATE_HZ]
    assert later
    assert all(body == known[_window(body)] for body in later)


@pytest.mark.parametrize("cause", [Fault.DEVICE, Fault.SLOW_CONSUMER])
def test_why_samples_are_missing_changes_no_figure(cause: Fault) -> None:
    blocks = blocks_of([(16_000, 9_000, "missing")], 1_000)
    caused = [replace(block, cause=cause) for block in blocks]
    assert readings_of(caused, CHANNELS) == readings_of(blocks, CHANNELS)


TURNS = "\n".join(
    ['schema = 1\n[station]\nname = "test rig"']
    + [f'[[channel]]\nname = "c{number}"\ninput = {number}' for number in range(1, 9)]
    + ['[[mode]]\nname = "rocking"\nchannel = "c1"\nsearch_hz = [560.0, 680.0]\nwindow_s = 1.0']
)


def test_inputs_are_measured_in_turn_so_that_none_waits_for_all_others():
    """Of eight inputs with the same modes no two have their blocks of the zoom within a twentieth of a hop."""
    (mode,) = loads(TURNS).mode
    zooms = [zoom_of(channel, [mode], RATE_HZ) for channel in loads(TURNS).channel]
    begins = sorted(-zoom.lead % zoom.hop for zoom in zooms)
    apart = np.diff([*begins, begins[0] + zooms[0].hop])
    assert np.min(apart) >= zooms[0].hop / 20
