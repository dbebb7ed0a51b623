"""Readings: what is believed, for which moment it speaks, and what a window tells beyond the one before."""

import math
from dataclasses import replace

import pytest
from driftwatch.records import NS, REASONS, Method
from driftwatch.track.reading import Reading, agree, new_part, reading_of, share_no_sample, with_var_q

SEARCH = (800.0, 1000.0)
LN_F, LN_Q = math.log(900.0), math.log(40.0)


def window(end_s, ln_f=LN_F, ln_q=LN_Q, window_s=4.0):
    start_ns, end_ns = round((end_s - window_s) * NS), round(end_s * NS)
    return Reading(start_ns, end_ns, window_s / 2, ln_f, ln_q, 1e-6, 2e-5, 6.4e-3, decay=False)


def test_a_usable_measurement_becomes_logarithms_with_their_covariance(measurement):
    reading = reading_of(measurement(900.0, 40.0, std_f=1e-3, std_q=0.1, correlation=0.3), 10 * NS, SEARCH)
    assert isinstance(reading, Reading)
    assert reading.ln_f == math.log(900.0)
    assert reading.ln_q == math.log(40.0)
    # relative standard deviations go through a product and a quotient: a few roundings
    assert reading.var_f == pytest.approx(1e-6, rel=1e-14)
    assert reading.cov == pytest.approx(0.3 * 1e-3 * 0.1, rel=1e-14)
    assert reading.var_q == pytest.approx(1e-2, rel=1e-14)


def test_a_window_speaks_for_its_middle_and_a_decay_for_one_time_constant_after_its_onset(measurement):
    ambient = reading_of(measurement(900.0, 40.0, window_s=4.0), 10 * NS, SEARCH)
    tau_s = 400.0 / (math.pi * 900.0)
    ringdown = reading_of(measurement(900.0, 400.0, window_s=1.0, method=Method.RINGDOWN), 10 * NS, SEARCH)
    short = reading_of(measurement(900.0, 400.0, window_s=0.1, method=Method.RINGDOWN), 10 * NS, SEARCH)
    assert ambient.moment_ns == 8 * NS
    assert ringdown.moment_ns == 10 * NS - round((1.0 - tau_s) * NS)
    assert short.age_s == 0.05  # less than two time constants: the middle


@pytest.mark.parametrize(
    ("change", "word"),
    [
        ({"usable": False, "reasons": ("unexcited", "no_mode")}, "unexcited"),
        ({"usable": False, "reasons": ()}, "no_mode"),
        ({"q_std": None}, "not_converged"),
        ({"frequency_hz": math.nan}, "not_finite"),
        ({"q": math.inf}, "not_finite"),
        ({"q_std": 0.0}, "not_finite"),
        ({"frequency_hz": 1000.1}, "band_edge"),
    ],
)
def test_what_cannot_be_followed_is_refused_with_a_known_word(measurement, change, word):
    assert reading_of(replace(measurement(900.0, 40.0), **change), 10 * NS, SEARCH) == word
    assert word in REASONS


def test_a_perfect_correlation_is_kept_just_below_one(measurement):
    reading = reading_of(measurement(900.0, 40.0, correlation=-1.0), 10 * NS, SEARCH)
    assert reading.cov**2 < reading.var_f * reading.var_q


@pytest.mark.parametrize("steps", [2, 3, 4, 10, 60])
def test_the_new_part_of_a_window_is_what_a_straight_drift_would_show_there(steps):
    """Windows of m steps over a straight line, one step apart: the new part reads the line at the new step's middle."""
    slope, step_s = 1e-4, 1.0
    before = window(100.0, ln_f=slope * (100.0 - steps / 2), window_s=steps)
    newest = window(100.0 + step_s, ln_f=slope * (101.0 - steps / 2), window_s=steps)
    new = new_part(newest, before)
    assert new.moment_ns == round(100.5 * NS)
    assert new.ln_f == pytest.approx(slope * 100.5, rel=1e-12)  # rounding, times the lever of m/2
    assert new.var_f == pytest.approx(steps * newest.var_f, rel=1e-14)
    assert (new.start_ns, new.end_ns) == (before.end_ns, newest.end_ns)


def test_windows_that_overlap_carry_the_information_of_the_time_they_span():
    """4 s windows every 1 s: R, then 4/5 R, 4/6 R, 4/7 R, as one window of 5, 6, 7 s would."""
    information, before = 0.0, None
    for k in range(4):
        newest = window(4.0 + k)
        information += 1.0 / new_part(newest, before).var_f
        before = newest
        assert 1.0 / information == pytest.approx(newest.var_f * 4 / (4 + k), rel=1e-12)


def test_windows_that_do_not_overlap_and_decays_tell_all_they_have():
    newest = window(20.0)
    assert new_part(newest, None) is newest
    assert new_part(newest, window(16.0)) is newest
    decay = replace(newest, decay=True)
    assert new_part(decay, window(19.0)) is decay


def test_the_same_window_twice_and_an_older_one_tell_nothing_new():
    assert new_part(window(20.0), window(20.0)) is None
    assert new_part(window(19.0), window(20.0)) is None


def test_another_variance_of_ln_q_leaves_the_correlation_as_it_is():
    reading = window(10.0)
    changed = with_var_q(reading, 2.0 * reading.var_q)
    assert changed.var_q == 2.0 * reading.var_q
    correlation = reading.cov / math.sqrt(reading.var_f * reading.var_q)
    assert changed.cov / math.sqrt(changed.var_f * changed.var_q) == pytest.approx(correlation, rel=1e-12)


def test_readings_that_share_samples_do_not_vouch_for_each_other():
    assert share_no_sample(window(4.0), window(8.0))
    assert not share_no_sample(window(4.0), window(7.0))
    assert share_no_sample(replace(window(4.0), decay=True), window(4.0))


def test_readings_agree_within_a_half_power_width_or_four_standard_deviations():
    here = window(4.0)
    width = 1 / 40.0
    assert agree(here, window(8.0, ln_f=here.ln_f + 0.99 * width))
    assert not agree(here, window(8.0, ln_f=here.ln_f + 1.01 * width))
    reach_q = 4.0 * math.sqrt(2 * here.var_q)
    assert agree(here, window(8.0, ln_q=here.ln_q - 0.99 * reach_q))
    assert not agree(here, window(8.0, ln_q=here.ln_q - 1.01 * reach_q))
