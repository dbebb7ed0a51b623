"""The simulated resonator against closed forms and an independent discretisation."""

from __future__ import annotations

import math

import numpy as np
import pytest
from driftwatch.resonance import Pole
from driftwatch.stream.course import Course
from driftwatch.stream.resonator import (
    SEGMENT,
    TAPS,
    Motion,
    Resonator,
    Step,
    differentiator,
    free_decay,
    resonator_response,
    step_of,
)
from numpy.typing import NDArray
from scipy import linalg, stats

RATE = 48000
MODES = [(900.0, 40.0), (2400.0, 150.0), (180.0, 25.0), (5000.0, 2000.0), (30.0, 0.8), (15000.0, 300.0)]
QUANTITIES = ["displacement", "velocity", "acceleration"]


def flat(value: float) -> Course:
    return Course.of([(0.0, value)])


def covariance(root: tuple[float, float, float]) -> NDArray[np.float64]:
    lower = np.array([[root[0], 0.0], [root[1], root[2]]])
    return np.asarray(lower @ lower.T)


# ---------------------------------------------------------------------------------------------- one step


@pytest.mark.parametrize(("frequency_hz", "q"), MODES)
def test_a_step_is_the_matrix_exponential_with_its_process_noise(frequency_hz: float, q: float) -> None:
    """Van Loan 1978: exp([[-A, G G'], [0, A']] dt) holds both; compared in units of the sample period."""
    pole = Pole.from_q(frequency_hz, q)
    wn, g, wd = pole.angular_frequency_rad_s / RATE, pole.decay_rate / RATE, pole.s.imag / RATE
    a = np.array([[0.0, 1.0], [-(wn**2), -2 * g]])
    force = np.array([[0.0, 0.0], [0.0, 4 * g]])
    big = linalg.expm(np.block([[-a, force], [np.zeros((2, 2)), a.T]]))
    transition = big[2:, 2:].T
    noise = transition @ big[:2, 2:]
    modal = np.array([[g, 1.0], [wd, 0.0]])  # (Re y, Im y) from (x, v)
    step = step_of(frequency_hz, q, RATE)
    turn = np.array([[step.factor.real, -step.factor.imag], [step.factor.imag, step.factor.real]])
    # both sides cancel to (wn dt)^3, so the last digits go
    rounding = 1e-14 / wn**2
    np.testing.assert_allclose(turn @ modal, modal @ transition, rtol=0, atol=1e-14)
    expected = modal @ noise @ modal.T
    np.testing.assert_allclose(covariance(step.noise), expected, rtol=rounding, atol=rounding * expected[0, 0] * wn**2)


@pytest.mark.parametrize(("frequency_hz", "q"), MODES)
def test_the_stationary_state_has_velocity_and_scaled_displacement_of_rms_one(frequency_hz: float, q: float) -> None:
    step = step_of(frequency_hz, q, RATE)
    state = covariance(step.start)
    for row in (step.displacement, step.velocity):
        real = np.array([row.real, -row.imag])
        assert real @ state @ real == pytest.approx(1.0, rel=1e-12)


@pytest.mark.parametrize(("frequency_hz", "q"), MODES)
def test_one_step_leaves_the_stationary_state_stationary(frequency_hz: float, q: float) -> None:
    step = step_of(frequency_hz, q, RATE)
    turn = np.array([[step.factor.real, -step.factor.imag], [step.factor.imag, step.factor.real]])
    state = covariance(step.start)
    np.testing.assert_allclose(turn @ state @ turn.T + covariance(step.noise), state, rtol=0, atol=1e-14)


def spectrum(step: Step, quantity: str, radians: NDArray[np.float64]) -> NDArray[np.float64]:
    """One-sided density, per radian a sample and so that its integral over 2 pi is the variance, of what is sensed."""
    turn = np.array([[step.factor.real, -step.factor.imag], [step.factor.imag, step.factor.real]])
    row = step.displacement if quantity == "displacement" else step.velocity
    sense = np.array([row.real, -row.imag])
    out = np.empty(len(radians))
    for k, w in enumerate(radians):
        path = np.linalg.solve((np.exp(1j * w) * np.eye(2) - turn).T, sense)
        out[k] = 2 * np.real(path @ covariance(step.noise) @ path.conj())
    if quantity == "acceleration":
        taps = np.exp(1j * np.outer(radians, np.arange(TAPS))) @ differentiator()
        out *= np.abs(taps) ** 2 / step.wn_dt**2
    return out


@pytest.mark.parametrize("quantity", QUANTITIES)
@pytest.mark.parametrize(("frequency_hz", "q"), [mode for mode in MODES if mode[1] > 1])
def test_the_spectrum_around_fn_is_the_closed_form_within_1e_3(frequency_hz: float, q: float, quantity: str) -> None:
    """Two half-power widths to either side; what remains is the folding of a sampled resonator's skirts."""
    pole = Pole.from_q(frequency_hz, q)
    f = frequency_hz * (1 + np.linspace(-2, 2, 81) / q)
    wn = pole.angular_frequency_rad_s
    response = {
        "displacement": wn * pole.receptance(f, mass=1.0),
        "velocity": pole.mobility(f, mass=1.0),
        "acceleration": pole.accelerance(f, mass=1.0) / wn,
    }[quantity]
    expected = 2 * 4 * pole.decay_rate * np.abs(response) ** 2  # one-sided, 1/Hz
    found = spectrum(step_of(frequency_hz, q, RATE), quantity, 2 * np.pi * f / RATE) / RATE
    np.testing.assert_allclose(found, expected, rtol=1e-3)


def test_the_differentiator_is_a_derivative_within_1_2e_4_up_to_nine_tenths_of_half_the_rate() -> None:
    radians = np.linspace(1e-4, 0.9 * np.pi, 5001)
    place = np.arange(TAPS) - (TAPS - 1) / 2
    response = np.exp(1j * np.outer(radians, place)) @ differentiator()
    np.testing.assert_allclose(response / (1j * radians), 1.0, atol=1.2e-4)


# ---------------------------------------------------------------------------------------------- samples


@pytest.mark.parametrize("quantity", QUANTITIES)
def test_the_samples_have_the_closed_forms_spectrum(quantity: str) -> None:
    """The sum of I/E over K Hann bins 4 apart is a gamma variable; false-alarm probability 1e-6 in all, seeds 0 to 7.

    The window smooths the peak (half-power width 90 bins) by about 1e-4 of itself, which the bar does not feel.
    """
    n, frequency_hz, q, level = 4 * RATE, 900.0, 40.0, 0.3
    f = np.fft.rfftfreq(n, 1 / RATE)
    near = np.flatnonzero(np.abs(f / frequency_hz - 1) < 2 / q)[::4]
    pole = Pole.from_q(frequency_hz, q)
    density = 8 * pole.decay_rate * np.abs(pole.mobility(f[near], mass=1.0)) ** 2 * level**2
    wn = pole.angular_frequency_rad_s
    order = {"displacement": -1, "velocity": 0, "acceleration": 1}[quantity]
    density *= (2 * np.pi * f[near] / wn) ** (2 * order)
    window = np.hanning(n)
    total = 0.0
    for seed in range(8):
        x = resonator_response(np.random.default_rng(seed), n, RATE, frequency_hz, q, level, quantity)
        periodogram = 2 * np.abs(np.fft.rfft(x * window)[near]) ** 2 / (RATE * np.sum(window**2))
        total += float(np.sum(periodogram / density))
    tail = 1e-6 / 3 / 2
    shape = 8 * len(near)
    assert stats.gamma.ppf(tail, shape) < total < stats.gamma.isf(tail, shape)


def test_acceleration_is_the_derivative_of_the_same_force_s_velocity_stretch_after_stretch() -> None:
    """Over wn, so that its level is the velocity's: the velocity of the run-in and of every stretch, differentiated."""
    stretches = [256, 512, 256, 1024]
    motions = [Motion(flat(900.0), flat(40.0), flat(0.3), quantity) for quantity in ("velocity", "acceleration")]
    velocity, acceleration = (Resonator(np.random.default_rng(0), RATE, motion) for motion in motions)
    v = np.concatenate([velocity.take(n) for n in (TAPS - 1, *stretches)])
    a = np.concatenate([acceleration.take(n) for n in stretches])
    wn = Pole.from_q(900.0, 40.0).angular_frequency_rad_s
    np.testing.assert_allclose(a, np.correlate(v, differentiator(), "valid") * RATE / wn, rtol=0, atol=1e-12)


@pytest.mark.parametrize("quantity", ["displacement", "velocity"])
def test_the_start_is_stationary(quantity: str) -> None:
    """First samples over 2000 seeds: a chi-square variable, false-alarm probability 1e-6 in all."""
    first = [resonator_response(np.random.default_rng(k), 1, RATE, 180.0, 500.0, 2.0, quantity)[0] for k in range(2000)]
    total = float(np.sum(np.square(first))) / 4
    assert stats.chi2.ppf(2.5e-7, 2000) < total < stats.chi2.isf(2.5e-7, 2000)


@pytest.mark.parametrize("quantity", ["displacement", "velocity"])
def test_frequency_and_q_may_change_manifold_and_the_level_stays(quantity: str) -> None:
    """500 to 2000 Hz, Q 100 to 10 within 60 s: the variance of the last 30 s within six standard deviations.

    That of a variance over T is 1/sqrt(g T) of it for a light resonator, and g is over 71 1/s there: 2.2 %.
    """
    rate = 8000
    motion = Motion(Course.of([(0, 500), (60, 2000)]), Course.of([(0, 100), (60, 10)]), flat(0.5), quantity)
    x = Resonator(np.random.default_rng(0), rate, motion).take(60 * rate)[30 * rate :]
    assert np.var(x) == pytest.approx(0.25, rel=6 / math.sqrt(71 * 30))


def test_a_level_that_falls_to_nothing_leaves_a_free_decay() -> None:
    """Past the last forced segment every sample follows from the two before it, to rounding."""
    motion = Motion(flat(900.0), flat(400.0), Course.of([(0, 1.0), (0.5, 1.0), (0.5001, 0.0)]), "velocity")
    x = Resonator(np.random.default_rng(0), RATE, motion).take(RATE)
    after = x[RATE // 2 + 2 * SEGMENT :]
    z = Pole.from_q(900.0, 400.0).discrete(RATE)
    assert np.max(np.abs(after)) > 0.1
    np.testing.assert_allclose(after[2:], 2 * z.real * after[1:-1] - abs(z) ** 2 * after[:-2], rtol=0, atol=1e-13)


def test_what_has_decayed_becomes_silence() -> None:
    motion = Motion(flat(900.0), flat(5.0), Course.of([(0, 1.0), (0.01, 0.0)]), "displacement", 0.02, None, 1.0)
    resonator = Resonator(np.random.default_rng(0), RATE, motion)
    assert np.any(resonator.take(4 * SEGMENT))
    for _ in range(20):
        last = resonator.take(4 * SEGMENT)
    assert not np.any(last)


# ---------------------------------------------------------------------------------------------- impacts


def impact_phase(pole: Pole, quantity: str) -> float:
    """After a unit impulse x = sin(wd t) exp(-g t) / wd; velocity and acceleration are s and s^2 times as far round."""
    order = {"displacement": 0, "velocity": 1, "acceleration": 2}[quantity]
    return float(np.angle(-1j * pole.s**order))


@pytest.mark.parametrize("quantity", QUANTITIES)
@pytest.mark.parametrize("first", [0.0, 0.01, 0.01 + 0.4 / RATE, 0.0213])
def test_each_impact_leaves_the_closed_forms_decay_from_its_exact_instant(quantity: str, first: float) -> None:
    pole = Pole.from_q(900.0, 40.0)
    motion = Motion(flat(900.0), flat(40.0), flat(0.0), quantity, first, 0.037001, 0.7)
    resonator = Resonator(np.random.default_rng(0), RATE, motion)
    found = np.concatenate([resonator.take(4 * SEGMENT) for _ in range(10)])
    onsets = np.arange(first, len(found) / RATE, 0.037001) * RATE
    phase = impact_phase(pole, quantity)
    expected = sum(free_decay(len(found), RATE, 900.0, 40.0, 0.7, phase, onset) for onset in onsets)
    np.testing.assert_allclose(found, expected, rtol=0, atol=1e-10)


@pytest.mark.parametrize("quantity", QUANTITIES)
def test_the_envelope_of_an_impact_begins_at_its_peak(quantity: str) -> None:
    motion = Motion(flat(900.0), flat(4000.0), flat(0.0), quantity, 0.001, None, 0.7)
    found = Resonator(np.random.default_rng(0), RATE, motion).take(RATE // 10)
    assert np.max(np.abs(found)) == pytest.approx(0.7, rel=0.01)  # 53 samples a period, 0.08 % decay a period


def test_impacts_closer_than_a_sample_all_count() -> None:
    motion = Motion(flat(900.0), flat(40.0), flat(0.0), "velocity", 0.0, 0.25 / RATE, 1.0)
    assert len(motion.impacts(0, 1, RATE)) == 1
    assert motion.impacts(1, 2, RATE) == [0.25 * k for k in range(1, 9)]


def test_a_decay_follows_a_changing_frequency_and_q() -> None:
    """y = exp(integral of s) for any s(t); where s is linear the middle of each segment integrates it exactly."""
    f, q = Course.of([(0, 500.0), (1, 600.0)]), 300.0
    motion = Motion(f, flat(q), flat(0.0), "velocity", 0.0, None, 1.0)
    found = Resonator(np.random.default_rng(0), RATE, motion).take(160 * SEGMENT)
    ends = np.arange(1, 160) * SEGMENT  # one sample past each segment: first sample of the next
    t = (ends - 1 + 0.0) / RATE
    unit = Pole.from_q(1.0, q)
    # sample n has run n periods: those up to the segment's last sample are all of whole segments but the first
    whole = (t + 1 / RATE) * 500 + (t + 1 / RATE) ** 2 / 2 * 100 - (500 + 100 * SEGMENT / RATE / 2) / RATE
    velocity = (1 + 1j * unit.decay_rate / unit.s.imag) / abs(1 + 1j * unit.decay_rate / unit.s.imag)
    expected = np.real(velocity * np.exp(unit.s * whole))
    np.testing.assert_allclose(found[ends - 1], expected, rtol=0, atol=1e-10)


# ---------------------------------------------------------------------------------------------- pure functions


def test_a_free_decay_is_zero_before_its_onset_and_starts_with_its_phase() -> None:
    x = free_decay(100, RATE, 900.0, 40.0, 2.0, 0.3, 10.0)
    assert not np.any(x[:10])
    assert x[10] == pytest.approx(2.0 * math.cos(0.3), rel=1e-15)


@pytest.mark.parametrize(("frequency_hz", "q"), MODES)
def test_a_free_decay_has_the_poles_recursion(frequency_hz: float, q: float) -> None:
    x = free_decay(2000, RATE, frequency_hz, q, 1.0, 0.7, 3.6)[4:]
    z = Pole.from_q(frequency_hz, q).discrete(RATE)
    np.testing.assert_allclose(x[2:], 2 * z.real * x[1:-1] - abs(z) ** 2 * x[:-2], rtol=0, atol=1e-11)


# ---------------------------------------------------------------------------------------------- courses


def test_a_course_is_constant_before_and_after_and_straight_between() -> None:
    course = Course.of([(1.0, 10.0), (3.0, 20.0)])
    assert course.at(np.array([0.0, 1.0, 2.0, 3.0, 9.0])).tolist() == [10, 10, 15, 20, 20]
    assert course.integral(np.array([0.0, 1.0, 2.0, 3.0, 4.0])).tolist() == [0, 10, 22.5, 40, 60]
    assert not course.constant
    assert flat(3.0).constant
