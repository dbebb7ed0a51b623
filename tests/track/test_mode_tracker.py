"""A mode's life: found, followed, held, lost, found again; outliers and steps."""

import dataclasses
import math

import numpy as np
import pytest
from driftwatch.records import NS, REASONS, Method, Track, TrackStatus
from driftwatch.track.mode_tracker import ModeTracker
from hypothesis import given
from hypothesis import strategies as st

SEARCHING, TRACKING, HELD, LOST = TrackStatus
FIGURES = [
    "frequency_hz",
    "frequency_std_hz",
    "q",
    "q_std",
    "q_low",
    "q_high",
    "frequency_q_correlation",
    "drift_per_day",
    "drift_std_per_day",
]
NOT_YET = [
    "frequency_compensated_hz",
    "frequency_compensated_std_hz",
    "q_compensated",
    "q_compensated_std",
    "clock_std_ppm",
    "q_drift_per_day",
    "q_drift_std_per_day",
    "baseline",
]


class Follower:
    """A tracker fed every `step_s`, from one window after zero on."""

    def __init__(self, make, step_s=1.0, window_s=4.0, **how):
        self.make, self.step_s, self.window_s = make, step_s, window_s
        self.tracker = ModeTracker("a", "m", (800.0, 1000.0), window_s, step_s, **how)
        self.now_ns = round((window_s - step_s) * NS)

    def feed(self, count, f=900.0, q=40.0, **how):
        """Feed equal measurements and return the last track point."""
        point = None
        for _ in range(count):
            self.now_ns += round(self.step_s * NS)
            point = self.tracker.update(self.make(f, q, window_s=self.window_s, **how), self.now_ns)
        return point

    def miss(self, count, reason):
        return self.feed(count, None, None, reasons=(reason,))


@pytest.fixture
def follower(measurement):
    return lambda **how: Follower(measurement, **how)


# ------------------------------------------------------------------------------------------------ start


def test_two_readings_that_share_no_sample_make_a_track(follower):
    mode = follower()
    first = mode.feed(4)
    assert first.status is SEARCHING
    assert all(getattr(first, name) is None for name in FIGURES)
    assert first.last_measurement_ns is None
    point = mode.feed(1)
    assert point.status is TRACKING
    assert point.reason is None
    assert all(getattr(point, name) is not None for name in FIGURES)
    assert all(getattr(point, name) is None for name in NOT_YET)
    assert point.last_measurement_ns == mode.now_ns


def test_a_mode_is_found_within_three_windows_even_if_one_of_them_misses_it(follower):
    mode = follower(step_s=4.0)
    mode.feed(1)
    mode.miss(1, "no_mode")
    assert mode.feed(1).status is TRACKING


def test_readings_that_contradict_each_other_make_no_track(follower):
    mode = follower(step_s=4.0)
    for f in (820.0, 860.0, 900.0, 940.0, 980.0):
        assert mode.feed(1, f).status is SEARCHING


def test_a_detection_that_nothing_confirms_within_three_windows_is_forgotten(follower):
    mode = follower(step_s=4.0)
    mode.feed(1)
    mode.miss(3, "no_mode")
    assert mode.feed(1).status is SEARCHING


def test_a_mode_outside_its_search_band_is_not_followed(follower):
    point = follower().feed(20, f=1001.0)
    assert point.status is SEARCHING
    assert point.reason == "band_edge"


def test_two_decays_hours_apart_make_a_track(follower):
    mode = follower(step_s=7200.0)
    mode.feed(1, method=Method.RINGDOWN)
    assert mode.feed(1, method=Method.RINGDOWN).status is TRACKING


# ------------------------------------------------------------------------------------------------ outliers and steps


def test_one_outlier_moves_nothing(follower):
    mode = follower()
    mode.feed(50)
    point = mode.feed(1, f=950.0)
    assert point.status is TRACKING
    assert point.frequency_hz == pytest.approx(900.0, rel=1e-9)  # no scatter was fed: only rounding
    assert point.last_measurement_ns == mode.now_ns - NS
    assert mode.feed(4).frequency_hz == pytest.approx(900.0, rel=1e-9)


def test_an_outlier_in_all_windows_that_saw_it_moves_nothing(follower):
    """An event of one instant is in four windows of 4 s, 1 s apart: they agree, but share its samples."""
    mode = follower()
    mode.feed(50)
    assert mode.feed(4, f=950.0).frequency_hz == pytest.approx(900.0, rel=1e-9)
    assert mode.feed(4).frequency_hz == pytest.approx(900.0, rel=1e-9)


@pytest.mark.parametrize("step_s", [1.0, 4.0])
@pytest.mark.parametrize(("f", "q"), [(950.0, 40.0), (850.0, 40.0), (900.0, 80.0), (900.0, 20.0)])
def test_a_step_is_followed_within_three_windows(follower, step_s, f, q):
    mode = follower(step_s=step_s)
    mode.feed(60)
    point = mode.feed(round(12.0 / step_s), f, q)
    assert point.status is TRACKING
    assert abs(point.frequency_hz - f) < 2.0 * point.frequency_std_hz
    assert abs(math.log(point.q / q)) < 2.0 * point.q_std / point.q


def test_two_outliers_with_a_good_reading_between_are_no_step(follower):
    mode = follower(step_s=4.0)
    mode.feed(20)
    mode.feed(1, f=950.0)
    mode.feed(1)
    assert mode.feed(1, f=950.0).frequency_hz == pytest.approx(900.0, rel=1e-9)


@pytest.mark.parametrize(("f", "q"), [(902.5, 40.0), (897.5, 40.0), (900.0, 50.0), (900.0, 32.0)])
def test_a_step_too_small_for_the_gate_is_followed_in_a_fraction_of_the_memory(follower, f, q):
    """2.8 standard deviations of a window: taken in within 30 s, where the memory alone would need over 100 s."""
    mode = follower()
    mode.feed(200)
    point = mode.feed(30, f, q)
    assert abs(point.frequency_hz - f) < 0.4
    assert abs(math.log(point.q / q)) < 0.04


def test_a_window_that_a_step_cut_in_two_is_not_taken_for_a_drift(follower):
    """First a reading half-way, then the new value: at every point the new value lies within 4 stated deviations."""
    mode = follower()
    mode.feed(60)
    mode.feed(1, f=886.0)
    mode.miss(3, "misfit")
    for _ in range(20):
        point = mode.feed(1, f=872.0)
        moved_on = point.frequency_hz < 899.0
        assert not moved_on or abs(point.frequency_hz - 872.0) < 4.0 * point.frequency_std_hz
    assert moved_on


def test_decays_that_scatter_more_than_they_state_are_still_followed(measurement):
    """A mode whose frequency depends on how hard it is hit: 3e-4 from hit to hit, stated 1e-5."""
    tracker = ModeTracker("a", "m", (800.0, 1000.0), 1.0, 1.0)
    scatter = np.random.default_rng(0).standard_normal(60)
    points = [
        tracker.update(measurement(900.0 * (1 + 3e-4 * x), 400.0, std_f=1e-5, method=Method.RINGDOWN), 5 * k * NS)
        for k, x in enumerate(scatter)
    ]
    assert all(point.status in (TRACKING, HELD) for point in points[1:])
    assert all(abs(point.frequency_hz - 900.0) < 900.0 * 3e-4 * 5 for point in points[1:])


def test_figures_that_jump_about_without_agreeing_are_held_as_misfit_and_then_lost(follower):
    mode = follower(step_s=4.0)
    mode.feed(20)
    statuses = [mode.feed(1, f) for f in [820.0, 860.0, 940.0, 980.0] * 3]
    assert statuses[0].status is TRACKING
    assert statuses[4].status is HELD
    assert statuses[4].reason == "misfit"
    assert statuses[-1].status is LOST


# ------------------------------------------------------------------------------------------------ held and lost


@pytest.mark.parametrize("reason", ["unexcited", "impact", "gap", "not_finite", "short", "not_resolved"])
def test_where_nothing_can_be_learned_the_mode_is_held_for_as_long_as_it_takes(follower, reason):
    mode = follower()
    tracked = mode.feed(50)
    held = mode.miss(4, reason)
    assert (held.status, held.reason) == (HELD, reason)
    later = mode.miss(3600, reason)
    assert (later.status, later.reason) == (HELD, reason)
    assert later.frequency_hz == pytest.approx(tracked.frequency_hz, rel=1e-9)
    assert tracked.frequency_std_hz < held.frequency_std_hz < later.frequency_std_hz
    assert tracked.q_std < held.q_std < later.q_std
    assert later.last_measurement_ns == tracked.last_measurement_ns


def test_a_held_state_stays_sober_over_a_night(follower):
    """After 10 h without excitation the frequency is still known to 1 %: a few hundred windows' drift, no more."""
    mode = follower(step_s=4.0)
    mode.feed(100)
    point = mode.miss(9000, "unexcited")
    assert point.frequency_std_hz < 9.0


def test_a_mode_missed_in_less_than_a_window_is_still_tracked(follower):
    mode = follower()
    mode.feed(50)
    assert mode.miss(3, "no_mode").status is TRACKING
    assert mode.miss(1, "no_mode").status is HELD


def test_one_reading_ends_held(follower):
    mode = follower()
    mode.feed(50)
    mode.miss(600, "unexcited")
    point = mode.feed(1, f=900.5)
    assert (point.status, point.reason) == (TRACKING, None)
    assert point.last_measurement_ns == mode.now_ns


@pytest.mark.parametrize("reason", ["no_mode", "misfit", "band_edge", "too_wide", "not_converged"])
def test_a_mode_that_is_not_found_though_it_should_be_is_lost_after_five_windows(follower, reason):
    mode = follower(step_s=4.0)
    mode.feed(20)
    assert mode.miss(5, reason).status is HELD
    point = mode.miss(1, reason)
    assert (point.status, point.reason) == (LOST, reason)
    assert point.frequency_hz is not None


def test_a_mode_found_now_and_then_is_not_lost(follower):
    mode = follower(step_s=4.0)
    mode.feed(20)
    for _ in range(10):
        assert mode.miss(4, "no_mode").status is HELD
        assert mode.feed(1).status is TRACKING


def test_a_state_lost_too_long_ago_vouches_for_nothing(follower):
    """A month after it was lost the frequency is no surer than the mode is wide: it takes two readings again."""
    mode = follower(step_s=4.0)
    mode.feed(50)
    mode.miss(10, "no_mode")
    mode.now_ns += 30 * 86_400 * NS
    assert mode.feed(1).status is LOST
    assert mode.feed(1).status is TRACKING


@pytest.mark.parametrize("step_s", [1.0, 4.0])
@pytest.mark.parametrize("f", [900.0, 930.0])
def test_a_lost_mode_is_found_again_within_three_windows_wherever_it_is(follower, step_s, f):
    mode = follower(step_s=step_s)
    mode.feed(40)
    assert mode.miss(round(200 / step_s), "no_mode").status is LOST
    point = mode.feed(round(12.0 / step_s), f)
    assert point.status is TRACKING
    assert abs(point.frequency_hz - f) < 2.0 * point.frequency_std_hz


def test_a_single_false_detection_elsewhere_does_not_end_lost(follower):
    mode = follower()
    mode.feed(50)
    mode.miss(100, "no_mode")
    assert mode.feed(4, f=850.0).status is LOST


def test_a_mode_followed_by_decays_is_lost_after_five_that_do_not_show_it(follower):
    mode = follower(step_s=30.0, window_s=1.0)
    mode.feed(5, method=Method.RINGDOWN)
    assert mode.feed(4, None, None, reasons=("no_mode",), method=Method.RINGDOWN).status is TRACKING
    assert mode.feed(1, None, None, reasons=("no_mode",), method=Method.RINGDOWN).status is LOST


def test_a_decay_that_told_nothing_does_not_disturb_a_mode_followed_by_windows(follower):
    mode = follower()
    mode.feed(50)
    assert mode.feed(20, None, None, reasons=("short",), method=Method.RINGDOWN).status is TRACKING


# ------------------------------------------------------------------------------------------------ ticks


def test_ticks_hold_a_mode_for_want_of_samples_and_lose_it_after_a_minute(follower):
    mode = follower()
    end_ns = (mode.feed(50), mode.now_ns)[1]
    points = {k: mode.tracker.tick(end_ns + k * NS) for k in range(1, 200)}
    changes = {k: point for k, point in points.items() if point is not None}
    assert [(k, point.status, point.reason) for k, point in changes.items()] == [(4, HELD, "gap"), (61, LOST, "gap")]


def test_ticks_before_anything_was_found_change_nothing(follower):
    mode = follower()
    assert [mode.tracker.tick(k * NS) for k in range(100)] == [None] * 100
    assert mode.tracker.status is SEARCHING


def test_a_mode_goes_on_where_it_was_after_a_gap(follower):
    mode = follower()
    end_ns = (mode.feed(50), mode.now_ns)[1]
    for k in range(1, 31):
        mode.tracker.tick(end_ns + k * NS)
    mode.now_ns = end_ns + 33 * NS
    assert mode.feed(1).status is TRACKING


# ------------------------------------------------------------------------------------------------ figures


def test_a_decay_among_windows_is_used_with_all_its_weight(follower):
    mode = follower()
    before = mode.feed(100)
    point = mode.feed(1, f=900.05, std_f=1e-5, std_q=0.005, method=Method.RINGDOWN)
    assert point.frequency_std_hz < 0.1 * before.frequency_std_hz
    assert abs(point.frequency_hz - 900.05) < point.frequency_std_hz
    assert point.q_std < 0.005 * 40.0 < before.q_std


def test_a_window_that_is_really_worse_weighs_less(follower):
    """Three times the usual deviation is no chance: such a reading moves the state by a ninth of a usual one's pull."""
    pulls = []
    for std_q in (0.08, 0.24):
        mode = follower(step_s=4.0)
        before = mode.feed(100)
        pulls.append(mode.feed(1, q=44.0, std_q=std_q).q - before.q)
    assert pulls[0] / pulls[1] == pytest.approx(9.0, rel=0.05)  # up to the gain itself, about a twenty-fifth


def test_decays_among_windows_do_not_set_how_fast_a_mode_may_change(follower):
    """Held for 200 s, ln q has walked by what the windows' scatter allows, 0.08^2 * 4 s / (25 * 4 s)^2 a second."""
    mode = follower()
    mode.feed(20)
    for _ in range(50):
        mode.feed(1)
        before = mode.feed(1, std_f=1e-5, std_q=0.005, method=Method.RINGDOWN)
    point = mode.miss(200, "unexcited")
    walked = (point.q_std / point.q) ** 2 - (before.q_std / before.q) ** 2
    assert walked == pytest.approx(200.0 * 0.08**2 * 4.0 / 100.0**2, rel=0.1)


def test_the_interval_of_q_is_that_of_its_logarithm(follower):
    point = follower().feed(30)
    ratio = math.exp(1.959964 * point.q_std / point.q)
    assert point.q_low == pytest.approx(point.q / ratio, rel=1e-6)
    assert point.q_high == pytest.approx(point.q * ratio, rel=1e-6)


def test_a_steady_drift_shows_as_a_rate_per_day_without_lag(measurement):
    """A rise of 1e-5 a second, without scatter: rate 0.864 a day, and the frequency of now, not of mid-window."""
    tracker = ModeTracker("a", "m", (800.0, 1000.0), 4.0, 1.0)
    for k in range(4, 1000):
        f = 900.0 * math.exp(1e-5 * (k - 2.0))
        point = tracker.update(measurement(f, 40.0), k * NS)
    assert point.drift_per_day == pytest.approx(0.864, rel=1e-3)  # what is left of the start after 40 memories' time
    assert point.frequency_hz == pytest.approx(900.0 * math.exp(1e-5 * 999.0), rel=1e-6)
    assert point.drift_std_per_day > 0.0


def test_the_regime_of_the_measurement_goes_with_the_track_point(measurement):
    tracker = ModeTracker("a", "m", (800.0, 1000.0), 4.0, 1.0)
    running = dataclasses.replace(measurement(900.0, 40.0), regime="running")
    assert tracker.update(running, 4 * NS).regime == "running"


EVENTS = st.one_of(
    st.tuples(st.just("found"), st.floats(780.0, 1020.0), st.floats(5.0, 500.0), st.sampled_from(list(Method))),
    st.tuples(st.just("missed"), st.sampled_from(sorted(REASONS)), st.sampled_from(list(Method))),
    st.tuples(st.just("tick")),
)


@given(st.lists(st.tuples(st.floats(0.0, 30.0), EVENTS), max_size=120))
def test_whatever_comes_a_point_is_sound_and_says_why(measurement, walk):
    """Any walk: figures exist exactly where something was found, are finite, and every status but tracking has a word
    of the list (searching may have none before anything came); the same walk gives the same points."""

    def points():
        tracker, now_ns = ModeTracker("a", "m", (800.0, 1000.0), 4.0, 1.0), 0
        for wait_s, (event, *what) in walk:
            now_ns += round(wait_s * NS)
            if event == "found":
                yield tracker.update(measurement(what[0], what[1], method=what[2]), now_ns)
            elif event == "missed":
                yield tracker.update(measurement(None, None, reasons=(what[0],), method=what[1]), now_ns)
            else:
                yield tracker.tick(now_ns)

    every = list(points())
    for point in every:
        if point is not None:
            assert_sound(point)
    assert list(points()) == every


def assert_sound(point: Track) -> None:
    found = point.status is not SEARCHING
    for name in FIGURES:
        value = getattr(point, name)
        assert (value is not None) == found
        assert value is None or math.isfinite(value)
    assert point.reason is None or point.reason in REASONS
    assert (point.reason is None) == (point.status is TRACKING) or point.status is SEARCHING
    assert found == (point.last_measurement_ns is not None)
    if found:
        assert point.frequency_std_hz > 0.0
        assert point.q_low < point.q < point.q_high
        assert abs(point.frequency_q_correlation) <= 1.0


def test_an_error_that_all_readings_share_is_part_of_the_uncertainty_however_many_there_are(follower):
    """The averaged part shrinks, the shared one stays: 0.3 of a reading's 0.07 of ln q."""
    plain, sharing = follower(), follower(shared_q=0.3)
    for count in (20, 300):
        alone, together = plain.feed(count, std_q=0.07), sharing.feed(count, std_q=0.07)
        assert together.q_std / together.q == pytest.approx(math.hypot(alone.q_std / alone.q, 0.3 * 0.07), rel=1e-6)
        assert together.frequency_std_hz == alone.frequency_std_hz


def test_a_reading_outside_the_gate_is_covered_until_it_is_taken_or_contradicted(follower):
    line = follower()
    before = line.feed(40)
    doubted = line.feed(1, f=930.0)
    assert doubted.frequency_hz == pytest.approx(before.frequency_hz, rel=1e-4)
    assert doubted.frequency_hz * (1 + 1.96 * doubted.frequency_std_hz / doubted.frequency_hz) >= 929.0
    assert line.feed(8).frequency_std_hz < 2 * before.frequency_std_hz
