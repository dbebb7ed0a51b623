"""All alerts of a station: what is recorded, when, with which figures and which records behind it."""

import math
import uuid
from dataclasses import replace

import numpy as np
import pytest
from driftwatch.alert.book import AlertBook, AlertSettings, ConditionSettings, WatchedMode
from driftwatch.alert.watch import NO_OCCURRENCE
from driftwatch.records import NS, AlertState, Condition, Priority, TrackStatus
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

START_NS = 1_767_225_600 * NS  # 2026-01-01T00:00:00Z
NORMAL, ACTIVE, RETURNED = (
    AlertState.NORMAL,
    AlertState.UNACKNOWLEDGED,
    AlertState.RETURNED_UNACKNOWLEDGED,
)
SEARCHING, TRACKING, HELD, LOST = TrackStatus


class Station:
    """A book fed once a second; the track record of second s has sequence 2 s + 2, its measurement 2 s + 1."""

    def __init__(self, bands, settings=None):
        self.book = AlertBook("line 3", [WatchedMode("drive end", "rocking", tuple(bands))], settings)
        self.records = []

    def track(self, second, point):
        time_ns = START_NS + round(second * NS)
        new = self.book.on_track(point, 2 * second + 2, time_ns, 2 * second + 1)
        self.records += new
        return new

    def band_records(self):
        return [record for record in self.records if record.condition is Condition.BAND]

    def moves(self):
        return [
            (record.previous_state, record.state) for record in self.records if record.state != record.previous_state
        ]


@pytest.fixture
def station(band):
    return lambda *bands, **how: Station(bands or [band()], **how)


def seconds(record):
    return (record.since_ns - START_NS) / NS


# ------------------------------------------------------------------------------------------------ bands


def test_a_band_fires_with_all_that_a_reader_needs(station, track):
    line = station()
    line.track(0, track())
    for second in range(1, 12):
        new = line.track(second, track(888.2, 0.3))
    (fired,) = new
    assert fired.alert == "drive end/rocking/warning"
    assert (fired.condition, fired.channel, fired.mode) == (Condition.BAND, "drive end", "rocking")
    assert (fired.quantity, fired.basis, fired.unit) == ("frequency", "absolute", "Hz")
    assert (fired.value, fired.value_std, fired.low, fired.high) == (888.2, 0.3, 890.0, 915.0)
    assert fired.confidence == 0.95
    assert fired.probability == pytest.approx(stats.norm.cdf(890.0, 888.2, 0.3), rel=1e-12)
    assert fired.determinate
    assert (fired.previous_state, fired.state) == (NORMAL, ACTIVE)
    assert fired.priority is Priority.MEDIUM
    assert seconds(fired) == 11.0
    assert fired.because == (3, 4, 23, 24)  # measurement and track that began it, and those that completed it
    assert fired.reason == "frequency 888.20 ± 0.30 Hz below 890 Hz for 10 s, probability over 0.99"
    assert (fired.by, fired.baseline, fired.shelved_until_ns, fired.evidence) == (None, None, None, ())


def test_a_q_band_is_in_ones_and_says_so(station, band, track):
    line = station(band(quantity="q", low=30.0, high=None, on_delay_s=0.0))
    (fired,) = line.track(0, track(q=20.0, q_std=1.0))
    assert (fired.quantity, fired.unit, fired.value, fired.low, fired.high) == ("q", "1", 20.0, 30.0, None)
    assert fired.reason == "Q 20.0 ± 1.0 below 30, probability over 0.99"


def test_one_occurrence_lasts_from_leaving_normal_through_every_return(station, band, track):
    line = station(band(on_delay_s=2.0, off_delay_s=3.0))
    for second in range(40):
        line.track(second, track(888.0 if second % 10 >= 5 else 900.0))
    assert line.moves()[:3] == [(NORMAL, ACTIVE), (ACTIVE, RETURNED), (RETURNED, ACTIVE)]
    moved = [record for record in line.records if record.state != record.previous_state]
    assert len({record.occurrence for record in moved}) == 1
    assert {seconds(record) for record in moved} == {7.0}
    assert moved[1].reason == "frequency 900.00 ± 0.30 Hz within 890..915 Hz by 0.5 Hz for 3 s, probability over 0.99"


def test_the_occurrence_is_a_uuid_that_a_replay_gives_again(station, track):
    def fire():
        line = station()
        for second in range(12):
            line.track(second, track(880.0))
        return line.band_records()[-1].occurrence

    assert fire() == fire()
    assert uuid.UUID(fire()).version == 5


def test_different_stations_alerts_and_times_have_different_occurrences(band, track):
    found = set()
    for name in ("line 3", "line 4"):
        book = AlertBook(name, [WatchedMode("drive end", "rocking", (band(), band(name="alarm")))])
        for second in range(12):
            records = book.on_track(track(880.0), second, START_NS + second * NS)
            found |= {record.occurrence for record in records if record.state is ACTIVE}
    assert len(found) == 4


def test_a_value_too_near_to_the_limit_neither_fires_nor_returns(station, band, track):
    line = station(band(on_delay_s=0.0, off_delay_s=0.0))
    line.track(0, track(889.9, 0.3))
    assert line.moves() == []
    line.track(1, track(880.0, 0.3))
    line.track(2, track(890.6, 0.3))
    assert line.moves() == [(NORMAL, ACTIVE)]


@pytest.mark.parametrize("status", [SEARCHING, HELD, LOST])
def test_what_cannot_be_told_is_a_record_of_its_own_and_changes_no_state(station, track, status):
    line = station()
    line.track(0, track())
    (record,) = line.track(1, track(880.0, status=status, reason="unexcited"))
    assert not record.determinate
    assert record.state == record.previous_state == NORMAL
    assert (record.value, record.probability) == (None, None)
    assert record.reason == f"cannot tell: {status}, unexcited"
    assert record.because == (3, 4)
    assert record.occurrence == NO_OCCURRENCE
    assert [line.track(second, track(880.0, status=status)) for second in range(2, 50)] == [[]] * 48
    (again,) = line.track(50, track())
    assert again.determinate
    assert again.state is NORMAL


def test_the_on_delay_holds_while_the_mode_is_held(station, track):
    """6 s below, 20 s held, then below again: it fires 4 s into the second spell, not 10."""
    line = station()
    for second in range(7):
        line.track(second, track(880.0))
    for second in range(7, 27):
        line.track(second, track(880.0, status=HELD, reason="impact"))
    for second in range(27, 31):
        line.track(second, track(880.0))
        assert line.moves() == []
    line.track(31, track(880.0))
    assert line.moves() == [(NORMAL, ACTIVE)]


@pytest.mark.parametrize("bad", [None, math.nan, math.inf])
def test_no_alert_from_what_is_no_number(station, track, bad):
    line = station()
    for second in range(60):
        line.track(second, track(bad))
    assert line.moves() == []
    assert line.band_records() == []


def test_a_point_without_a_measurement_behind_it_names_its_own_sequence_only(band, track):
    book = AlertBook("line 3", [WatchedMode("drive end", "rocking", (band(on_delay_s=0.0),))])
    (fired,) = book.on_track(track(880.0), 7, START_NS)
    assert fired.because == (7,)


def test_a_mode_that_the_book_does_not_know_is_an_error(station, track):
    with pytest.raises(KeyError):
        station().track(0, track(mode="unknown"))


# ------------------------------------------------------------------------------------------------ lost


def test_a_mode_that_cannot_be_told_for_a_minute_is_an_alert(station, track):
    line = station()
    line.track(0, track())
    for second in range(1, 62):
        new = line.track(second, track(status=HELD, reason="unexcited"))
    (fired,) = new
    assert (fired.alert, fired.condition) == ("drive end/rocking/lost", Condition.LOST)
    assert (fired.previous_state, fired.state, fired.determinate) == (NORMAL, ACTIVE, True)
    assert fired.reason == "the mode could not be told for 60 s: held, unexcited"
    assert fired.because == (3, 4, 123, 124)
    returned = line.track(62, track())[-1]
    assert (returned.alert, returned.state) == ("drive end/rocking/lost", RETURNED)
    assert returned.reason == "tracked again"
    assert returned.occurrence == fired.occurrence


def test_a_mode_that_was_never_found_is_lost_as_well(station, track):
    line = station()
    for second in range(100):
        line.track(second, track(None, None, status=SEARCHING))
    assert line.moves() == [(NORMAL, ACTIVE)]


def test_a_mode_of_which_nothing_ever_comes_is_lost_as_well(station):
    book = station().book
    records = [record for second in range(100) for record in book.on_samples(START_NS + second * NS)]
    assert [(record.alert, record.state) for record in records] == [("drive end/rocking/lost", ACTIVE)]
    assert records[0].because == ()


def test_short_spells_without_a_figure_are_no_alert(station, track):
    line = station()
    for second in range(600):
        line.track(second, track(status=HELD if second % 60 else TRACKING, reason="impact"))
    assert line.moves() == []


# ------------------------------------------------------------------------------------------------ no data


def ticks(book, first, last):
    return [record for second in range(first, last) for record in book.on_tick(START_NS + second * NS)]


def no_data(records):
    return [record for record in records if record.condition is Condition.NO_DATA]


def test_no_samples_for_half_a_minute_is_an_alert_that_returns_with_them(station):
    book = station().book
    book.on_samples(START_NS)
    assert no_data(ticks(book, 1, 30)) == []
    (fired,) = no_data(ticks(book, 30, 31))
    assert (fired.alert, fired.channel, fired.mode) == ("no data", None, None)
    assert (fired.state, fired.priority, fired.determinate) == (ACTIVE, Priority.HIGH, True)
    assert fired.reason == "no samples for 30 s"
    assert no_data(ticks(book, 31, 500)) == []
    (returned,) = no_data(book.on_samples(START_NS + 500 * NS))
    assert (returned.state, returned.occurrence) == (RETURNED, fired.occurrence)
    assert returned.reason == "samples come again"


def test_samples_that_never_came_are_missing_since_the_first_tick(station):
    book = station().book
    assert no_data(ticks(book, 0, 30)) == []
    assert len(no_data(ticks(book, 30, 31))) == 1


def test_a_block_of_samples_begins_the_delay_anew(station):
    book = station().book
    for second in range(0, 600, 29):
        assert no_data(book.on_samples(START_NS + second * NS)) == []
        assert no_data(ticks(book, second + 1, second + 29)) == []


def test_name_delay_and_priority_of_a_condition_can_be_set(station):
    settings = AlertSettings(no_data=ConditionSettings("silence", 5.0, priority=Priority.URGENT))
    book = station(settings=settings).book
    (fired,) = no_data(ticks(book, 0, 6))
    assert (fired.alert, fired.priority) == ("silence", Priority.URGENT)


# ------------------------------------------------------------------------------------------------ what stands


def test_what_stands_is_listed_worst_first(band, track):
    bands = (band(name="a", priority=Priority.LOW, on_delay_s=0.0), band(name="b", priority=Priority.URGENT))
    book = AlertBook("line 3", [WatchedMode("drive end", "rocking", bands)])
    assert book.standing().worst is None
    assert {each.alert for each in book.standing().cannot_tell} == {"drive end/rocking/a", "drive end/rocking/b"}
    book.on_track(track(880.0), 1, START_NS)
    assert book.standing().worst is Priority.LOW
    assert book.standing().cannot_tell == ()
    book.on_track(track(880.0), 2, START_NS + 10 * NS)
    standing = book.standing()
    assert standing.worst is Priority.URGENT
    assert [(each.alert, each.state) for each in standing.alerts] == [
        ("drive end/rocking/b", ACTIVE),
        ("drive end/rocking/a", ACTIVE),
    ]
    book.on_track(replace(track(), status=HELD), 3, START_NS + 11 * NS)
    assert len(book.standing().cannot_tell) == 2
    assert book.standing().worst is Priority.URGENT


# ------------------------------------------------------------------------------------------------ properties


POINTS = st.tuples(
    st.integers(0, 20),
    st.floats(880.0, 925.0) | st.sampled_from([math.nan, math.inf]) | st.none(),
    st.floats(0.0, 5.0) | st.none(),
    st.sampled_from(list(TrackStatus)),
)


@given(st.lists(POINTS, max_size=60))
def test_every_record_is_a_change_with_its_cause(band, track, walk):
    """Any walk: a record changes a state or what can be told; a band moves only on a figure that is probable enough;
    the states of one alert follow one another without a gap."""
    line, now, last = Station([band(on_delay_s=5.0, off_delay_s=5.0)]), 0, {}
    for wait, value, std, status in walk:
        now += wait
        for record in line.track(now, track(value, std, status=status)):
            known = last.get(record.alert)
            assert record.previous_state == (known.state if known else NORMAL)
            assert record.state != record.previous_state or known is None or record.determinate != known.determinate
            if record.condition is Condition.BAND and record.state != record.previous_state:
                assert math.isfinite(record.value)
                assert (record.probability >= 0.95) == (record.state is ACTIVE)
            assert (record.occurrence == NO_OCCURRENCE) == (record.state is NORMAL)
            last[record.alert] = record


def test_a_truth_on_the_limit_fires_no_more_often_than_its_confidence_says(band, track):
    """A true value on the limit, an estimate with the stated scatter: judged once, 5 % of 4000 are called violations
    (binomial, false alarm 1e-6), for one-sided confidence is the same as one-sided error."""
    fired, runs, plain = 0, 4000, band(high=None, on_delay_s=0.0)
    for seed in range(runs):
        book = AlertBook("line 3", [WatchedMode("drive end", "rocking", (plain,))])
        estimate = 890.0 + 0.3 * np.random.default_rng(seed).standard_normal()
        fired += any(record.state is ACTIVE for record in book.on_track(track(estimate), 1, START_NS))
    assert stats.binom.ppf(5e-7, runs, 0.05) <= fired <= stats.binom.isf(5e-7, runs, 0.05)


def test_a_truth_four_deviations_inside_gives_no_false_alert(band, track):
    """A violation needs an estimate 5.6 deviations off (1e-8): none in 20 runs of 500 judgements (probability 1e-4
    without the delay, less with it)."""
    for seed in range(20):
        line = Station([band(on_delay_s=0.0)])
        errors = np.random.default_rng(seed).standard_normal(500)
        for second, error in enumerate(errors):
            line.track(second, track(890.0 + 0.3 * (4.0 + error)))
        assert line.moves() == []


# ------------------------------------------------------------------------------------------------ reload


def reloaded(line, *bands, settings=None):
    """Let a line's book take over other bands; return the records of it."""
    return line.book.reload([WatchedMode("drive end", "rocking", bands)], settings or AlertSettings())


@pytest.fixture
def below(station, track):
    """Return a maker of a line whose frequency has been 888 Hz for 12 s, below the usual limit of 890 Hz."""

    def of(*bands):
        line = station(*bands)
        line.track(0, track())
        for second in range(1, 13):
            line.track(second, track(888.0, 0.3))
        return line

    return of


def test_a_reload_of_the_same_settings_changes_nothing(station, band, track, below):
    line, other = below(), below()
    assert reloaded(line, band()) == []
    for second in range(13, 80):
        point = track(900.0 if second < 60 else 888.0, 0.3)
        assert line.track(second, point) == other.track(second, point)
    assert len(line.moves()) == 3


def test_an_alert_goes_on_where_it_stood_by_the_new_limits(below, band, track):
    """It returns without a new measurement being any different, and it is the same occurrence."""
    line = below()
    stood = line.band_records()[-1]
    assert reloaded(line, band(low=880.0, off_delay_s=5.0, priority=Priority.URGENT)) == []
    (standing,) = line.book.standing().alerts
    assert (standing.state, standing.priority) == (ACTIVE, Priority.URGENT)
    assert seconds(standing) == seconds(stood)
    for second in range(13, 20):
        line.track(second, track(888.0, 0.3))
    last = line.band_records()[-1]
    assert (last.previous_state, last.state, last.occurrence) == (ACTIVE, RETURNED, stood.occurrence)
    assert (last.low, last.priority) == (880.0, Priority.URGENT)


def test_a_timer_goes_on_through_a_reload_and_is_held_to_the_new_delay(station, band, track):
    """Six seconds below the limit; then 8 s are asked for instead of 10: it fires two seconds later, not eight."""
    line = station()
    line.track(0, track())
    for second in range(1, 8):
        line.track(second, track(888.0, 0.3))
    assert reloaded(line, band(on_delay_s=8.0)) == []
    line.track(8, track(888.0, 0.3))
    assert line.moves() == []
    line.track(9, track(888.0, 0.3))
    record = line.band_records()[-1]
    assert record.state is ACTIVE
    assert "for 8 s" in record.reason


def test_a_band_that_is_taken_out_while_it_stands_ends_with_a_record(below, band, track):
    line = below()
    stood = line.band_records()[-1]
    (end,) = reloaded(line)
    assert (end.alert, end.occurrence, end.since_ns) == (stood.alert, stood.occurrence, stood.since_ns)
    assert (end.previous_state, end.state, end.determinate) == (ACTIVE, NORMAL, True)
    assert end.reason == "no longer watched: the configuration was reloaded"
    assert line.book.standing().worst is None
    assert line.track(13, track(888.0, 0.3)) == []
    assert reloaded(line, band()) == []  # it comes back as a new one, which must wait anew
    for second in range(14, 24):
        line.track(second, track(888.0, 0.3))
    assert len(line.moves()) == 1
    (again,) = line.track(24, track(888.0, 0.3))
    assert again.occurrence != stood.occurrence


def test_a_band_that_is_taken_out_while_nothing_stands_ends_without_a_word(station, band, track):
    line = station(band(), band(name="quiet", low=700.0))
    line.track(0, track())
    assert reloaded(line, band()) == []


def test_a_band_of_the_same_name_for_another_quantity_is_another_alert(below, band):
    line = below()
    (end,) = reloaded(line, band(quantity="q", low=10.0, high=100.0))
    assert (end.quantity, end.state) == ("frequency", NORMAL)
    assert line.book.standing().alerts == ()


def test_bands_that_change_places_keep_each_its_own_life(below, band):
    first, second = band(name="first"), band(name="second", low=700.0)
    line = below(first, second)
    assert reloaded(line, second, first) == []
    assert [one.alert for one in line.book.standing().alerts] == ["drive end/rocking/first"]


def test_no_data_that_is_told_goes_on_through_a_reload_and_ends_where_its_name_does(station, band):
    line = station()
    line.book.on_samples(START_NS)
    ticks(line.book, 1, 40)
    (standing,) = line.book.standing().alerts[:1]
    assert standing.condition is Condition.NO_DATA
    same = AlertSettings(no_data=ConditionSettings("no data", on_delay_s=10.0, priority=Priority.URGENT))
    assert [one for one in reloaded(line, band(), settings=same) if one.condition is Condition.NO_DATA] == []
    assert line.book.standing().worst is Priority.URGENT
    renamed = AlertSettings(no_data=ConditionSettings("silence", on_delay_s=10.0))
    (end,) = (one for one in reloaded(line, band(), settings=renamed) if one.condition is Condition.NO_DATA)
    assert (end.alert, end.state, end.since_ns) == ("no data", NORMAL, standing.since_ns)


def test_a_reload_with_other_modes_is_an_error_and_changes_nothing(below):
    line = below()
    with pytest.raises(ValueError, match="other modes"):
        line.book.reload([WatchedMode("drive end", "bending")], AlertSettings())
    assert len(line.book.standing().alerts) == 1
