"""How probable it is that the true value lies beyond a limit."""

import math
from dataclasses import replace

import pytest
from driftwatch.alert.band import Figure, figure_of, judge, probability_below
from driftwatch.records import TrackStatus
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats


@given(st.floats(800.0, 1000.0), st.floats(0.01, 30.0), st.floats(800.0, 1000.0))
def test_the_frequency_is_gaussian(value, std, limit):
    expected = stats.norm.cdf(limit, value, std)
    assert probability_below(Figure(value, std), limit, "frequency") == pytest.approx(expected, rel=1e-9, abs=1e-300)


@given(st.floats(5.0, 500.0), st.floats(0.01, 1.0), st.floats(5.0, 500.0))
def test_the_logarithm_of_q_is_gaussian(value, relative, limit):
    expected = stats.lognorm.cdf(limit, relative, scale=value)
    found = probability_below(Figure(value, relative * value), limit, "q")
    assert found == pytest.approx(expected, rel=1e-9, abs=1e-300)


def test_an_exact_value_is_on_one_side_or_the_other():
    assert probability_below(Figure(900.0, 0.0), 901.0, "frequency") == 1.0
    assert probability_below(Figure(900.0, 0.0), 899.0, "frequency") == 0.0


def test_no_q_is_below_zero():
    assert probability_below(Figure(40.0, 1.0), 0.0, "q") == 0.0
    assert probability_below(Figure(40.0, 1.0), -1.0, "q") == 0.0


@given(st.floats(870.0, 935.0), st.floats(0.01, 30.0))
def test_beyond_and_inside_leave_room_for_the_deadband(band, value, std):
    """Beyond, inside by the deadband and what is between add up to one."""
    judged = judge(Figure(value, std), band())
    between = [
        stats.norm.cdf(upper, value, std) - stats.norm.cdf(lower, value, std)
        for lower, upper in ((890.0, 890.5), (914.5, 915.0))
    ]
    assert judged.beyond + judged.inside + sum(between) == pytest.approx(1.0, abs=1e-12)


def test_a_band_open_on_one_side_has_one_limit(band):
    low_only, high_only = band(high=None), band(low=None)
    assert judge(Figure(2000.0, 1.0), low_only).inside == 1.0
    assert judge(Figure(100.0, 1.0), high_only).inside == 1.0
    assert judge(Figure(889.0, 0.1), low_only).beyond == pytest.approx(1.0, abs=1e-12)
    assert judge(Figure(916.0, 0.1), high_only).beyond == pytest.approx(1.0, abs=1e-12)


def test_the_side_is_the_likelier_one(band):
    assert judge(Figure(889.0, 1.0), band()).side == "below"
    assert judge(Figure(916.0, 1.0), band()).side == "above"


def test_a_deadband_wider_than_the_band_lets_nothing_return(band):
    assert judge(Figure(902.5, 0.1), band(deadband=13.0)).inside == 0.0


@pytest.mark.parametrize("status", [TrackStatus.SEARCHING, TrackStatus.HELD, TrackStatus.LOST])
def test_only_a_tracked_mode_has_a_figure(track, status):
    assert figure_of(track(), "frequency") == Figure(900.0, 0.3)
    assert figure_of(track(), "q") == Figure(40.0, 1.0)
    assert figure_of(track(status=status), "frequency") is None


@pytest.mark.parametrize("bad", [None, math.nan, math.inf, -1.0, 0.0])
def test_what_is_no_number_is_no_figure(track, bad):
    assert figure_of(replace(track(), q=bad), "q") is None
    assert figure_of(replace(track(), frequency_hz=bad), "frequency") is None


@pytest.mark.parametrize("bad", [None, math.nan, math.inf, -1.0])
def test_what_has_no_uncertainty_is_no_figure(track, bad):
    assert figure_of(replace(track(), q_std=bad), "q") is None
    assert figure_of(replace(track(), frequency_std_hz=bad), "frequency") is None
