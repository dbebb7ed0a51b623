"""The filter in closed form against the textbook's matrices, and what must hold whatever comes."""

import math
from dataclasses import replace

import numpy as np
import pytest
from driftwatch.records import NS
from driftwatch.track import filter as kalman
from driftwatch.track.reading import Reading
from hypothesis import given
from hypothesis import strategies as st

NOISE = kalman.Noise(acceleration=3e-14, walk=2e-6)
STATE = kalman.State(10 * NS, math.log(900.0), 2e-6, math.log(40.0), 1e-6, 3e-9, 4e-6, 5e-11, 6e-9, 2e-3)


def reading(end_s, ln_f, ln_q, age_s=2.0, std_f=1e-3, std_q=0.08, correlation=0.0, decay=False):
    start_ns, end_ns = round((end_s - 2 * age_s) * NS), round(end_s * NS)
    return Reading(start_ns, end_ns, age_s, ln_f, ln_q, std_f**2, correlation * std_f * std_q, std_q**2, decay)


def mean(x):
    return np.array([x.ln_f, x.rate, x.ln_q])


def covariance(x):
    return np.array([[x.p_ff, x.p_fr, x.p_fq], [x.p_fr, x.p_rr, x.p_rq], [x.p_fq, x.p_rq, x.p_qq]])


def assert_same(x, m, P):
    """Equal to what double precision leaves after a handful of products, each entry on its own scale."""
    scale = np.sqrt(np.diag(P))
    np.testing.assert_allclose(mean(x), m, rtol=1e-13, atol=1e-12 * scale.min())
    np.testing.assert_allclose(covariance(x) / np.outer(scale, scale), P / np.outer(scale, scale), rtol=0, atol=1e-12)


def test_prediction_is_the_matrix_formula():
    dt, a = 1.7, NOISE.acceleration
    F = np.array([[1.0, dt, 0.0], [0.0, 1.0, 0.0], [0.0, 0.0, 1.0]])
    Q = np.array([[a * dt**3 / 3, a * dt**2 / 2, 0.0], [a * dt**2 / 2, a * dt, 0.0], [0.0, 0.0, NOISE.walk * dt]])
    x = kalman.predict(STATE, STATE.time_ns + round(dt * NS), NOISE)
    assert_same(x, F @ mean(STATE), F @ covariance(STATE) @ F.T + Q)


@pytest.mark.parametrize("correlation", [0.0, 0.6, -0.95])
def test_update_is_the_joint_matrix_formula(correlation):
    new = reading(10.0, math.log(901.0), math.log(44.0), correlation=correlation)
    H = np.array([[1.0, -2.0, 0.0], [0.0, 0.0, 1.0]])
    R = np.array([[new.var_f, new.cov], [new.cov, new.var_q]])
    P = covariance(STATE)
    S = H @ P @ H.T + R
    K = P @ H.T @ np.linalg.inv(S)
    y = np.array([new.ln_f, new.ln_q]) - H @ mean(STATE)
    assert_same(kalman.update(STATE, new), mean(STATE) + K @ y, P - K @ S @ K.T)
    seen = kalman.innovation(STATE, new)
    assert seen.distance == pytest.approx(float(y @ np.linalg.inv(S) @ y), rel=1e-9)  # condition of S about 1e4


def test_a_late_reading_is_weighed_at_its_own_moment():
    """A decay that ended 3 s ago and speaks for 1 s before that is compared with ln fn of 4 s ago."""
    late = reading(7.0, STATE.ln_f - 4.0 * STATE.rate, STATE.ln_q, age_s=1.0)
    assert kalman.innovation(STATE, late).f == pytest.approx(0.0, abs=1e-15)  # one rounding of ln fn


def test_equal_independent_readings_average_like_a_mean():
    """Without process noise, with the rate known to be zero, n readings leave 1/n of the variance."""
    still = kalman.Noise(0.0, 0.0)
    x = replace(STATE, rate=0.0, p_ff=1e-6, p_fr=0.0, p_fq=0.0, p_rr=0.0, p_rq=0.0, p_qq=6.4e-3)
    for k in range(1, 50):
        x = kalman.update(kalman.predict(x, STATE.time_ns + k * NS, still), reading(10.0 + k, x.ln_f, x.ln_q))
        assert x.p_ff == pytest.approx(1e-6 / (k + 1), rel=1e-12)
        assert x.p_qq == pytest.approx(6.4e-3 / (k + 1), rel=1e-12)


def test_the_filter_settles_at_the_variance_that_its_memory_promises():
    """sqrt(2) R / memory for ln fn, R / memory for ln q: continuous-time limits, met within 5 % at a memory of 25."""
    one = reading(0.0, 0.0, 0.0, age_s=0.0)
    noise = kalman.noise_for(one, 4.0, 25.0)
    x = replace(STATE, p_fq=0.0, p_rq=0.0)
    for k in range(1, 1000):
        now = 10.0 + 4.0 * k
        x = kalman.predict(x, round(now * NS), noise)
        x = kalman.update(x, reading(now, x.ln_f, x.ln_q, age_s=0.0))
    assert x.p_ff == pytest.approx(math.sqrt(2.0) * one.var_f / 25.0, rel=0.05)
    assert x.p_qq == pytest.approx(one.var_q / 25.0, rel=0.05)


def test_two_readings_start_a_state_that_lies_between_them_and_knows_of_their_drift():
    noise = kalman.noise_for(reading(4.0, 0.0, 0.0), 4.0, 25.0)
    x = kalman.start(reading(4.0, 0.0, 3.7), reading(8.0, 0.006, 3.7), noise)
    assert x.time_ns == 8 * NS
    assert 0.0 < x.rate < 0.006 / 4.0  # the readings' own scatter explains part of the difference
    assert abs(x.ln_f - 2.0 * x.rate - 0.006) < 0.001  # at the newest reading's middle, within its deviation
    assert np.linalg.eigvalsh(covariance(x)).min() > 0.0


def test_without_readings_the_figures_stay_and_their_uncertainty_only_grows():
    x = replace(STATE, rate=1.5e-3)
    previous = x
    for seconds in (1, 5, 8, 9, 30, 200, 3600, 36_000):
        now = kalman.carry(x, x.time_ns + seconds * NS, NOISE, coast_s=8.0, memory_s=100.0)
        assert now.p_ff > previous.p_ff
        assert now.p_qq > previous.p_qq
        assert now.time_ns == x.time_ns + seconds * NS
        previous = now
    assert previous.ln_f == pytest.approx(x.ln_f + 8.0 * x.rate, rel=1e-15)  # followed while it coasted, then held
    assert previous.ln_q == x.ln_q


def test_the_uncertainty_of_a_held_state_does_not_jump():
    """Just before and just after coasting, and the end of the memory, the variances agree to 1e-6."""
    for edge_s in (8.0, 108.0):
        before = kalman.carry(STATE, STATE.time_ns + round((edge_s - 1e-6) * NS), NOISE, 8.0, 100.0)
        after = kalman.carry(STATE, STATE.time_ns + round((edge_s + 1e-6) * NS), NOISE, 8.0, 100.0)
        assert after.p_ff == pytest.approx(before.p_ff, rel=1e-6)


STEPS = st.tuples(
    st.floats(0.01, 100.0),  # seconds between
    st.floats(-0.1, 0.1),  # off in ln fn
    st.floats(-1.0, 1.0),  # off in ln q
    st.floats(-7.0, -2.0),  # log10 of the deviation of ln fn
    st.floats(-3.0, 0.0),  # of ln q
    st.floats(-0.999, 0.999),  # correlation
    st.floats(0.0, 50.0),  # age
)


@given(st.lists(STEPS, min_size=1, max_size=60))
def test_the_covariance_stays_positive_whatever_comes(steps):
    x = STATE
    for dt, off_f, off_q, log_f, log_q, correlation, age in steps:
        noise = kalman.Noise(1e-14, 1e-6)
        x = kalman.carry(x, x.time_ns + round(dt * NS), noise, 8.0, 100.0)
        new = reading(x.time_ns / NS, x.ln_f + off_f, x.ln_q + off_q, age, 10**log_f, 10**log_q, correlation)
        x = kalman.update(x, new)
        P = covariance(x)
        assert np.all(np.isfinite(mean(x)))
        assert np.all(np.diag(P) > 0.0)
        scale = np.sqrt(np.diag(P))
        assert np.linalg.eigvalsh(P / np.outer(scale, scale)).min() > -1e-9  # rounding of an almost singular one
