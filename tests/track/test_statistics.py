"""What a track point states holds: coverage on constant and drifting truths, bias, false starts.

Each cell looks at one moment of independent runs with seeds 0 to n-1; its false-alarm probability is `ALPHA`, the
family-wise 1e-6 of the regular run shared by some 40 cells.
"""

import math

import numpy as np
import pytest
from driftwatch.records import NS, TrackStatus
from driftwatch.track.mode_tracker import ModeTracker
from scipy import stats

from benchmarks.bars import FAMILY_REGULAR, bias_ok, coverage_ok

ALPHA = FAMILY_REGULAR / 40
RUNS = 160


def constant_f(_t):
    return 900.0


def constant_q(_t):
    return 40.0


def demo_ramp(t):
    """3 % down in 20 s, from 100 s on."""
    return 930.0 * math.exp(-0.0015 * min(max(t - 100.0, 0.0), 20.0))


def last_errors(windows, count, frequency=constant_f, q=constant_q, runs=RUNS, **how):
    """Return the normalised errors of ln fn and ln q at the last of `count` windows, shape (runs, 2)."""
    step_s, window_s = how.get("step_s", 1.0), how.get("window_steps", 4) * how.get("step_s", 1.0)
    errors = np.empty((runs, 2))
    for seed in range(runs):
        tracker = ModeTracker("a", "m", (800.0, 1000.0), window_s, step_s)
        for time_ns, found in windows(seed, count, frequency, q, **how):
            point = tracker.update(found, time_ns)
        t = time_ns / NS
        assert point.status is TrackStatus.TRACKING
        errors[seed, 0] = math.log(point.frequency_hz / frequency(t)) * point.frequency_hz / point.frequency_std_hz
        errors[seed, 1] = math.log(point.q / q(t)) * point.q / point.q_std
    return errors


def hits(errors):
    return int(np.count_nonzero(np.abs(errors) < 1.96))


@pytest.mark.parametrize("how", [{}, {"window_steps": 1, "step_s": 4.0}, {"correlation": 0.5}], ids=str)
@pytest.mark.parametrize("count", [6, 30, 150])
def test_intervals_cover_a_constant_truth_and_are_not_idle(windows, count, how):
    """95 % intervals cover 94 to 99.5 %: a truth that never moves uses less than the drift that is allowed for."""
    errors = last_errors(windows, count, **how)
    for column in (0, 1):
        assert coverage_ok(hits(errors[:, column]), RUNS, 0.94, 0.995, ALPHA)
    assert np.all(np.std(errors, axis=0) > 0.6)


@pytest.mark.parametrize("per_hour", [0.001, 0.05])
def test_intervals_cover_a_slow_drift(windows, per_hour):
    """Drifts of 0.1 % and 5 % an hour are followed without bias: coverage as of a constant truth."""
    errors = last_errors(windows, 300, frequency=lambda t: 900.0 * math.exp(-per_hour * t / 3600.0), runs=100)
    assert coverage_ok(hits(errors[:, 0]), 100, 0.94, 0.995, ALPHA)


@pytest.mark.parametrize("std_f", [1e-3, 3e-4])
def test_intervals_cover_a_fast_ramp_once_it_was_recognised(windows, std_f):
    """16 s after a ramp of 3 % in 20 s began, 95 % intervals cover at least 88 %, and the ramp's rate is known."""
    errors = last_errors(windows, 113, frequency=demo_ramp, std_f=std_f)
    assert coverage_ok(hits(errors[:, 0]), RUNS, 0.88, 0.995, ALPHA)


@pytest.mark.parametrize("shift", [0.01, 0.05])
def test_intervals_cover_again_three_windows_after_a_step(windows, shift):
    """Steps of 10 and 50 standard deviations of a window: at least 85 % coverage 12 s later, 93 % after 40 s."""
    soon = last_errors(windows, 57, frequency=lambda t: 930.0 * (1.0 if t < 48.0 else 1.0 - shift))
    later = last_errors(windows, 85, frequency=lambda t: 930.0 * (1.0 if t < 48.0 else 1.0 - shift))
    assert coverage_ok(hits(soon[:, 0]), RUNS, 0.85, 1.0, ALPHA)
    assert coverage_ok(hits(later[:, 0]), RUNS, 0.93, 1.0, ALPHA)


def test_readings_that_are_low_by_chance_weigh_no_more(windows):
    """Ln q is biased by less than a fifth of its stated deviation although each reading's variance grows with its q.

    Weighed by their own variances, readings of 25 % would pull the mean by 6 %: 1.2 stated deviations.
    """
    errors = last_errors(windows, 150, std_q=0.25)
    assert bias_ok(errors[:, 1], 0.2, ALPHA)
    assert bias_ok(errors[:, 0], 0.2, ALPHA)


def test_a_constant_truth_is_averaged_over_tens_of_windows(windows):
    """After 200 windows without overlap the stated deviations are below a third and a quarter of a window's."""
    tracker = ModeTracker("a", "m", (800.0, 1000.0), 4.0, 4.0)
    for time_ns, found in windows(0, 200, constant_f, constant_q, window_steps=1, step_s=4.0):
        point = tracker.update(found, time_ns)
    assert point.frequency_std_hz / point.frequency_hz < 1e-3 / 3.0
    assert point.q_std / point.q < 0.08 / 4.0


def test_false_detections_start_a_track_no_more_often_than_stated(measurement):
    """At most 3 p^2 a window: p = 0.05 of 20 windows look like a mode at one place, in 2000 runs."""
    p, count, runs = 0.05, 20, 2000
    started = 0
    for seed in range(runs):
        tracker = ModeTracker("a", "m", (800.0, 1000.0), 4.0, 4.0)
        false = np.random.default_rng(seed).random(count) < p
        for k, looks_like_a_mode in enumerate(false):
            found = measurement(900.0, 40.0) if looks_like_a_mode else measurement(None, None, reasons=("no_mode",))
            tracker.update(found, (k + 1) * 4 * NS)
        started += tracker.status is not TrackStatus.SEARCHING
    stated = 3.0 * p * p * count
    assert 0 < started <= stats.binom.isf(ALPHA, runs, stated)
