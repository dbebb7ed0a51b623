"""The pipeline as a whole: samples in any cut give the same records."""

from __future__ import annotations

import itertools
from dataclasses import dataclass, replace

import numpy as np
import pytest
from driftwatch.config import Configuration, loads
from driftwatch.pipeline.channel import zoom_of
from driftwatch.pipeline.station import RunHeader, Station
from driftwatch.pipeline.ticks import with_ticks
from driftwatch.records import (
    NS,
    Alert,
    AlertState,
    Block,
    Command,
    Condition,
    Covariate,
    Envelope,
    Fault,
    Health,
    Measurement,
    Method,
    Note,
    Origin,
    Phase,
    Run,
    Tick,
    TimeQuality,
    Track,
    TrackStatus,
    sample_time_ns,
)
from driftwatch.stream.resonator import free_decay, resonator_response
from hypothesis import example, given, settings
from hypothesis import strategies as st

RATE_HZ = 4_096
START_NS = 1_772_344_800 * NS

CONFIG = """
schema = 1
[station]
name = "test rig"
[[channel]]
name = "near"
input = 1
[[channel]]
name = "far"
input = 2
quantity = "velocity"
[[mode]]
name = "rocking"
channel = "near"
search_hz = [560.0, 680.0]
methods = ["ambient", "ringdown"]
window_s = 2.0
step_s = 0.5
[[mode.band]]
name = "warning"
low = 630.0
on_delay_s = 2.0
[[mode]]
name = "bending"
channel = "near"
search_hz = [1200.0, 1300.0]
window_s = 1.5
[[mode]]
name = "rocking"
channel = "far"
search_hz = [560.0, 680.0]
window_s = 2.0
"""


@dataclass(frozen=True)
class Held:
    """A source that holds its samples in memory."""

    samples: np.ndarray
    name: str = "held"
    rate_hz: int = RATE_HZ
    first_sample: int = 0
    start_ns: int = START_NS
    time_quality: TimeQuality = TimeQuality.ASSUMED
    sources: tuple[str, ...] = ("memory",)
    assumed: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()

    @property
    def inputs(self) -> int:
        return self.samples.shape[1]

    @property
    def length(self) -> int:
        return len(self.samples)

    def block(self, first: int, end: int) -> Block:
        return Block(self.name, first, sample_time_ns(START_NS, first, RATE_HZ), self.samples[first:end])

    def blocks(self, frames: int):
        for first in range(0, len(self.samples), frames):
            yield self.block(first, min(first + frames, len(self.samples)))


def rig(seconds: float, impact_at: float | None = None, seed: int = 0) -> Held:
    """Two inputs that see a resonance at 620 Hz, the first also one at 1250 Hz."""
    rng = np.random.default_rng(seed)
    n = round(seconds * RATE_HZ)
    first = resonator_response(rng, n, RATE_HZ, 620.0, 50.0, 0.05, "acceleration")
    second = resonator_response(rng, n, RATE_HZ, 1250.0, 90.0, 0.05, "acceleration")
    far = resonator_response(rng, n, RATE_HZ, 620.0, 50.0, 0.05, "velocity")
    if impact_at is not None:
        first = first + free_decay(n, RATE_HZ, 620.0, 50.0, 2.0, 0.3, impact_at * RATE_HZ)
    noise = rng.standard_normal((n, 2)) * 0.005
    return Held((np.stack([first + second, far], axis=1) + noise).astype(np.float32))


def station_for(source: Held, text: str = CONFIG) -> Station:
    config: Configuration = loads(text)
    header = RunHeader("test rig", "00000000-0000-4000-8000-000000000000", Origin.REPLAY, source.time_quality)
    return Station(config, header, [source])


def records_of(source: Held, edges: list[int], text: str = CONFIG) -> list[Envelope]:
    """Feed a source cut at `edges`; None between two edges of a pair is a gap."""
    station = station_for(source, text)
    records = station.begin()
    marks = [0, *edges, source.length]
    blocks = [source.block(a, b) for a, b in itertools.pairwise(marks) if b > a]
    for item in with_ticks(blocks, RATE_HZ):
        records += station.feed(item)
    return records + station.finish("the end")


def bodies(records: list[Envelope], kind: type) -> list:
    return [record.body for record in records if isinstance(record.body, kind)]


SOURCE = rig(9.0, impact_at=5.3)
WHOLE = records_of(SOURCE, [])


def test_the_rig_gives_every_kind_of_record_that_the_cuts_are_tried_on():
    methods = {body.method for body in bodies(WHOLE, Measurement)}
    assert methods == {Method.AMBIENT, Method.RINGDOWN}
    assert {body.status for body in bodies(WHOLE, Track)} >= {TrackStatus.SEARCHING, TrackStatus.TRACKING}
    assert any("impact" in body.reasons for body in bodies(WHOLE, Measurement))
    assert any(body.state is AlertState.UNACKNOWLEDGED for body in bodies(WHOLE, Alert))


@given(st.lists(st.integers(1, SOURCE.length - 1), max_size=12, unique=True).map(sorted))
@settings(max_examples=25, deadline=None)
def test_the_same_samples_in_blocks_of_any_sizes_give_bit_identical_records(edges):
    assert records_of(SOURCE, edges) == WHOLE


@pytest.mark.parametrize("size", [1_023, 409, 6_000])
def test_the_same_samples_in_many_small_blocks_give_bit_identical_records(size):
    assert records_of(SOURCE, list(range(size, SOURCE.length, size))) == WHOLE


@given(
    gaps=st.lists(
        st.tuples(st.integers(1, SOURCE.length - 2), st.integers(1, 30_000), st.sampled_from(["missing", "nan"])),
        min_size=1,
        max_size=3,
    ),
    sizes=st.integers(300, 20_000),
)
@example(gaps=[(1, 24_599, "missing")], sizes=300)
@example(gaps=[(1, 24_506, "nan")], sizes=300)
@settings(max_examples=25, deadline=None)
def test_gaps_and_samples_that_are_no_numbers_do_not_depend_on_the_cut_either(gaps, sizes):
    """Once as long runs, once cut into blocks of one size."""
    whole, cut = _with_holes(gaps, SOURCE.length), _with_holes(gaps, sizes)
    assert whole == cut


@pytest.mark.parametrize("kind", ["missing", "nan"])
def test_a_fault_that_begins_just_when_a_window_is_known_has_its_place_after_it_in_any_cut(kind):
    """Known is a window at the end of a block of the zoom; a cut there parts it from the fault."""
    config = loads(CONFIG)
    zoom = zoom_of(config.channel[0], [mode for mode in config.mode if mode.channel == "near"], RATE_HZ)
    known = [zoom.first_of(number) + zoom.edge for number in range(1, zoom.block_of(SOURCE.length))]
    assert len(known) >= 4
    for first in known:
        assert _with_holes([(first, 50, kind)], first) == _with_holes([(first, 50, kind)], SOURCE.length)


def _with_holes(gaps: list[tuple[int, int, str]], size: int) -> list[Envelope]:
    samples = SOURCE.samples.copy()
    missing = np.zeros(SOURCE.length, dtype=bool)
    for first, count, kind in gaps:
        if kind == "nan":
            samples[first : first + count, 0] = np.nan
        else:
            missing[first : first + count] = True
    missing[0] = False
    source = replace(SOURCE, samples=samples)
    present = np.flatnonzero(~missing)
    runs = np.split(present, np.flatnonzero(np.diff(present) > 1) + 1)
    station = station_for(source)
    records = station.begin()
    blocks = [
        source.block(int(run[i]), int(run[min(i + size, len(run)) - 1]) + 1)
        for run in runs
        for i in range(0, len(run), size)
    ]
    for item in with_ticks(blocks, RATE_HZ):
        records += station.feed(item)
    return records + station.finish()


def test_records_are_numbered_without_holes_and_point_back_on_their_topic():
    assert [record.sequence for record in WHOLE] == list(range(1, len(WHOLE) + 1))
    last: dict[str, int] = {}
    from driftwatch.records import topic_of

    for record in WHOLE:
        assert record.previous == last.get(topic_of(record.body))
        last[topic_of(record.body)] = record.sequence


def test_a_run_is_framed_by_its_own_records():
    assert isinstance(WHOLE[0].body, Run)
    assert WHOLE[0].body.phase is Phase.BEGIN
    assert isinstance(WHOLE[-1].body, Run)
    assert WHOLE[-1].body.phase is Phase.END
    assert WHOLE[-1].body.samples == SOURCE.length
    assert WHOLE[-1].body.reason == "the end"


def test_windows_lie_on_the_grid_and_end_where_their_time_says():
    for record in WHOLE:
        body = record.body
        if isinstance(body, Measurement) and body.method is Method.AMBIENT and "impact" not in body.reasons:
            step = 1_024 if body.mode == "rocking" and body.channel == "near" else None
            assert step is None or body.first_sample % step == 0
            assert record.time_ns == sample_time_ns(START_NS, body.first_sample + body.samples, RATE_HZ)


def test_true_values_lie_within_five_standard_uncertainties():
    """False-alarm probability 6e-7 a figure, some 80 figures."""
    truth = {("near", "rocking"): (620.0, 50.0), ("near", "bending"): (1250.0, 90.0), ("far", "rocking"): (620.0, 50.0)}
    usable = [body for body in bodies(WHOLE, Measurement) if body.usable]
    assert len(usable) > 25
    for body in usable:
        frequency_hz, q = truth[body.channel, body.mode]
        assert abs(body.frequency_hz - frequency_hz) < 5 * body.frequency_std_hz
        assert abs(np.log(body.q / q)) < 5 * body.q_std / body.q


def test_a_gap_is_one_incident_and_spoils_only_the_windows_that_touch_it():
    gap = (4 * RATE_HZ, 5 * RATE_HZ)
    records = _with_holes([(gap[0], gap[1] - gap[0], "missing")], SOURCE.length)
    begin, end = (body for body in bodies(records, Health) if body.fault is Fault.GAP)
    assert (begin.phase, end.phase) == (Phase.BEGIN, Phase.END)
    assert begin.incident == end.incident
    assert end.lost_samples == gap[1] - gap[0]
    for body in bodies(records, Measurement):
        if body.method is Method.AMBIENT and "impact" not in body.reasons:
            touches = body.first_sample < gap[1] and body.first_sample + body.samples > gap[0]
            assert (body.reasons == ("gap",)) == touches


@pytest.mark.parametrize("size", [1.1e18, 3e38])
def test_samples_too_large_to_transform_are_no_numbers_in_any_cut(size):
    samples = SOURCE.samples.copy()
    samples[20_000, 0] = size
    samples[20_005, 0] = -size
    source = replace(SOURCE, samples=samples)
    whole = records_of(source, [])
    assert whole == records_of(source, [19_990, 20_000, 20_001, 20_006, 30_000])
    begin, end = (body for body in bodies(whole, Health) if body.fault is Fault.NOT_FINITE)
    assert (begin.first_sample, end.lost_samples) == (20_000, 2)
    assert any(body.usable for body in bodies(whole, Measurement) if body.first_sample > 20_005)


def test_incidents_of_one_place_at_two_times_are_two():
    """A run of tomorrow that misses the same samples of its own has an incident of its own."""
    found = []
    for start_ns in (START_NS, START_NS + 86_400 * NS):
        samples = SOURCE.samples.copy()
        samples[5_000:5_010, 0] = np.nan
        source = replace(SOURCE, samples=samples, start_ns=start_ns)
        station = station_for(source)
        blocks = (source.block(0, 20_000), source.block(26_000, source.length))
        moved = (replace(block, time_ns=sample_time_ns(start_ns, block.first_sample, RATE_HZ)) for block in blocks)
        records = [record for block in moved for record in station.feed(block)]
        found += [body.incident for body in bodies(records, Health)]
    assert len(found) == 8
    assert len(set(found)) == 4


def test_samples_that_are_no_numbers_touch_only_their_own_channel():
    records = _with_holes([(4 * RATE_HZ, 10, "nan")], SOURCE.length)
    begin, end = (body for body in bodies(records, Health) if body.fault is Fault.NOT_FINITE)
    assert (begin.channel, end.lost_samples) == ("near", 10)
    spoilt = [body for body in bodies(records, Measurement) if "not_finite" in body.reasons]
    assert {body.channel for body in spoilt} == {"near"}
    assert not any(body.usable for body in spoilt)


def test_a_long_silence_raises_one_alert_of_no_data_and_one_of_a_lost_mode_each():
    source = rig(6.0)
    station = station_for(source)
    records = [*station.begin(), *station.feed(source.block(0, source.length))]
    end_ns = sample_time_ns(START_NS, source.length, RATE_HZ)
    for second in range(1, 200):
        records += station.feed(Tick(end_ns + second * NS))
    raised = [body for body in bodies(records, Alert) if body.state is AlertState.UNACKNOWLEDGED]
    raised = [
        body for body in raised if body.previous_state is AlertState.NORMAL and body.condition is not Condition.BAND
    ]
    assert sorted(body.condition for body in raised) == [Condition.LOST] * 3 + [Condition.NO_DATA]


def test_an_impact_in_an_ambient_window_is_named_and_does_not_spoil_it():
    """With and without the impact the other figures agree within five standard uncertainties."""
    touched = [
        body
        for body in bodies(WHOLE, Measurement)
        if body.method is Method.AMBIENT and body.mode == "rocking" and body.channel == "near" and body.usable
        and "impact" in body.reasons
    ]  # fmt: skip
    assert touched
    for body in touched:
        assert abs(body.frequency_hz - 620.0) < 5 * body.frequency_std_hz
        assert abs(np.log(body.q / 50.0)) < 5 * body.q_std / body.q


def test_commands_and_covariates_have_their_place_in_the_order():
    source = rig(1.0)
    station = station_for(source)
    station.begin()
    command, note = station.feed(Command(START_NS, "r1", "ann", "note", None, "trying"))
    (covariate,) = station.feed(Covariate(START_NS, "temperature", 21.5, "degC"))
    assert [(one.kind, one.sequence) for one in (command, note, covariate)] == [
        ("command", 2),
        ("note", 3),
        ("covariate", 4),
    ]
    assert note.body == Note("ann", "trying", handover=False)


def test_a_command_that_nothing_comes_of_is_written_down_with_the_reason():
    source = rig(1.0)
    station = station_for(source)
    station.begin()
    (unknown,) = station.feed(Command(START_NS, "r1", "ann", "acknowledge", "near/rocking/none", None))
    (quiet,) = station.feed(Command(START_NS, "r2", "ann", "acknowledge", "no data", None))
    (never,) = station.feed(Command(START_NS, "r3", "ann", "dance", None, None))
    assert unknown.body.outcome == "refused: no alert is called 'near/rocking/none'"
    assert quiet.body.outcome == "nothing to acknowledge: no data does not ask for it"
    assert never.body.outcome == "refused: dance is nothing that the pipeline does"


def test_an_alert_that_is_acknowledged_tells_by_whom_and_because_of_which_command():
    source = rig(1.0)
    station = station_for(source)
    station.begin()
    records = [one for second in range(1, 40) for one in station.feed(Tick(START_NS + second * NS))]
    (fired,) = (one for one in records if one.kind == "alert" and one.body.alert == "no data")
    assert fired.body.state is AlertState.UNACKNOWLEDGED
    at_ns = START_NS + 40 * NS
    command, alert = station.feed(Command(at_ns, "r1", "ann", "acknowledge", "No Data", "cable is being changed"))
    assert command.body.outcome == "done"
    assert (alert.body.state, alert.body.previous_state) == (AlertState.ACKNOWLEDGED, AlertState.UNACKNOWLEDGED)
    assert (alert.body.by, alert.body.because) == ("ann", (command.sequence,))
    assert alert.body.reason == "acknowledged by ann: cable is being changed"
    assert (alert.body.occurrence, alert.body.since_ns) == (fired.body.occurrence, fired.body.since_ns)
    again = station.feed(Command(at_ns, "r2", "ann", "acknowledge", "no data", None))
    assert [one.kind for one in again] == ["command"]


def test_blocks_out_of_order_or_of_an_unknown_source_are_refused():
    source = rig(1.0)
    station = station_for(source)
    station.feed(source.block(0, 2_000))
    with pytest.raises(ValueError, match="expected blocks in order"):
        station.feed(source.block(1_000, 3_000))
    with pytest.raises(ValueError, match="known are held"):
        station.feed(replace(source.block(2_000, 3_000), source="other"))


def struck(gap_s: float, count: int) -> tuple[Held, list[Block]]:
    """Pieces of 3 s that each begin with a blow, with a pause before each but the first."""
    length, apart = 3 * RATE_HZ, round((3 + gap_s) * RATE_HZ)
    decay = free_decay(length, RATE_HZ, 620.0, 50.0, 0.5, 0.3, 0.0)
    rng = np.random.default_rng(0)
    pieces = [(decay + 1e-4 * rng.standard_normal(length)).astype(np.float32) for _ in range(count)]
    both = [np.stack([piece, piece], axis=1) for piece in pieces]
    source = Held(both[0])
    blocks = [
        Block("held", number * apart, sample_time_ns(START_NS, number * apart, RATE_HZ), piece)
        for number, piece in enumerate(both)
    ]
    return source, blocks


@pytest.mark.parametrize("gap_s", [3.0, 10.0, 30.0, 118.0])
def test_blows_in_pieces_with_pauses_are_each_measured_and_together_followed(gap_s):
    """As an analyst has them: one blow a recording. After the last one the mode is tracked."""
    source, blocks = struck(gap_s, 4)
    station = station_for(source, CONFIG.replace('["ambient", "ringdown"]', '["ringdown"]'))
    records = station.begin()
    for item in with_ticks(blocks, RATE_HZ):
        records += station.feed(item)
    records += station.finish()
    decays = [body for body in bodies(records, Measurement) if body.method is Method.RINGDOWN and body.usable]
    assert len(decays) == 4
    for body in decays:
        assert abs(body.frequency_hz - 620.0) < 5 * body.frequency_std_hz
    last = [body for body in bodies(records, Track) if (body.channel, body.mode) == ("near", "rocking")][-1]
    assert last.status is TrackStatus.TRACKING


def test_what_was_measured_before_a_silence_does_not_wake_a_track_after_it():
    """Ten seconds of random response, a minute of silence, and the first second after it."""
    source = rig(11.0)
    gap = 60 * RATE_HZ
    whole = source.block(0, 10 * RATE_HZ)
    rest = Block("held", 10 * RATE_HZ + gap, START_NS + 70 * NS, source.samples[10 * RATE_HZ :])
    station = station_for(source)
    station.begin()
    records = []
    for item in with_ticks([whole, rest], RATE_HZ):
        records += station.feed(item)
    late = [record for record in records if isinstance(record.body, Track) and record.time_ns >= START_NS + 15 * NS]
    assert late
    assert not any(record.body.status is TrackStatus.TRACKING for record in late)


def test_a_blow_at_the_begin_is_no_random_response():
    """The first window of a piece that begins with a blow is not measured as ambient."""
    source, blocks = struck(3.0, 1)
    station = station_for(source)
    records = [record for block in blocks for record in station.feed(block)] + station.finish()
    first = next(
        body for body in bodies(records, Measurement) if body.method is Method.AMBIENT and body.channel == "near"
    )
    assert (first.first_sample, first.usable, first.reasons) == (0, False, ("impact",))
