"""Ringdown: the bars in small, and what the estimator makes of less than ideal decays."""

from __future__ import annotations

import math

import numpy as np
import pytest
from driftwatch.measure import ringdown
from driftwatch.measure.decay_attempts import CUT
from driftwatch.measure.limits_decay import whole_record
from driftwatch.measure.zoom import BandRequest, Zoom
from driftwatch.records import REASONS
from numpy.typing import NDArray

from benchmarks import ringdown as bench
from benchmarks.bars import FAMILY_REGULAR, Size, coverage_ok

RATE = 48_000.0
FREQUENCY, Q = 900.0, 40.0
TAU = Q / (math.pi * FREQUENCY)
SEARCH = (765.0, 1035.0)
ONSET = 2000.3


def record(
    seed: int = 0,
    *,
    time_constants: float = 5.0,
    level: float = 0.01,
    frequency: float = FREQUENCY,
    q: float = Q,
    amplitude: float = 1.0,
    phase: float = 0.4,
) -> NDArray[np.float64]:
    """Noise of rms `level` in the search band, and a decay of unit amplitude from `ONSET` on."""
    rng = np.random.default_rng(seed)
    length = math.floor(ONSET + time_constants * TAU * RATE) + 1
    since = (np.arange(length) - ONSET) / RATE
    damped = 2.0 * math.pi * frequency * math.sqrt(1.0 - 0.25 / q**2)
    tone = np.exp(-math.pi * frequency / q * np.maximum(since, 0.0)) * np.cos(damped * since + phase)
    noise = rng.normal(0.0, level * math.sqrt(RATE / 2.0 / (SEARCH[1] - SEARCH[0])), length)
    return np.asarray(np.where(since >= 0.0, amplitude * tone, 0.0) + noise)


def assert_right(fit: ringdown.RingdownFit, deviations: float = 5.0) -> None:
    """Usable, and within so many of its own standard deviations of the truth (5: false alarm below 1e-5 at t of 30)."""
    assert fit.usable, fit.reasons
    assert fit.frequency_hz is not None
    assert fit.q is not None
    assert fit.std_ln_f is not None
    assert fit.std_ln_q is not None
    assert abs(math.log(fit.frequency_hz / FREQUENCY)) < deviations * fit.std_ln_f
    assert abs(math.log(fit.q / Q)) < deviations * fit.std_ln_q


@pytest.mark.timeout(300)
def test_bars_in_small() -> None:
    """Every bar of the bench over 200 decays a cell; family-wise false alarm 1e-6."""
    rows = list(bench.run(Size(trials=200, family=FAMILY_REGULAR, full=False)))
    assert [row for row in rows if row.ok is False] == []
    assert len(rows) == 16 * 7


@pytest.mark.parametrize("hint", [None, ONSET, ONSET - 200.0, ONSET + 200.0])
def test_the_onset_is_refined_from_any_hint_within_a_reciprocal_bandwidth(hint: float | None) -> None:
    fit = ringdown.fit(record(), RATE, SEARCH, hint)
    assert_right(fit)
    assert fit.onset_sample is not None
    assert fit.onset_sample == pytest.approx(ONSET, abs=0.02 * TAU * RATE)
    assert fit.first_sample == pytest.approx(ONSET + CUT * TAU * RATE, abs=0.02 * TAU * RATE)
    assert not fit.background


def test_every_derivative_of_a_decay_has_the_same_pole() -> None:
    """Displacement, velocity, acceleration by exact differentiation of the clean decay, each with noise of its own."""
    damped = 2.0 * math.pi * FREQUENCY * math.sqrt(1.0 - 0.25 / Q**2)
    for order in range(3):
        turn = order * math.atan2(damped, -math.pi * FREQUENCY / Q)
        assert_right(ringdown.fit(record(order, phase=0.4 + turn), RATE, SEARCH, ONSET))


def test_level_and_snr_are_those_of_the_record() -> None:
    """A decay of amplitude A has the mean square A^2 tau / (4 T); 3 %: the band holds that much less of it."""
    fit = ringdown.fit(record(level=1e-4), RATE, SEARCH, ONSET)
    assert fit.amplitude == pytest.approx(math.exp(-CUT), rel=0.02)
    expected = math.exp(-2.0 * CUT) * TAU * RATE / 4.0 / fit.samples
    assert fit.level == pytest.approx(math.sqrt(expected), rel=0.03)
    assert fit.snr_db == pytest.approx(10.0 * math.log10(expected / 1e-8), abs=2.0)  # 32 degrees of freedom
    assert fit.decrement_q == pytest.approx(Q, rel=0.1)


def test_a_blow_of_some_length_and_other_modes_move_the_cut_later() -> None:
    """A half-sine of 1 ms instead of a step, and two modes beside the band: the residuals tell, a later cut fits."""
    samples = record(level=1e-3)
    since = (np.arange(len(samples)) - ONSET) / RATE
    after = since >= 0.0
    samples[after] += 3.0 * np.exp(-600.0 * since[after]) * np.cos(2.0 * math.pi * 1200.0 * since[after])
    samples[after] += 2.0 * np.exp(-500.0 * since[after]) * np.cos(2.0 * math.pi * 640.0 * since[after])
    pulse = (since >= 0.0) & (since < 1e-3)
    samples[pulse] += 4.0 * np.sin(math.pi * since[pulse] / 1e-3)
    fit = ringdown.fit(samples, RATE, SEARCH, ONSET)
    assert fit.usable, fit.reasons
    assert fit.frequency_hz == pytest.approx(FREQUENCY, rel=2e-3)
    assert fit.q == pytest.approx(Q, rel=0.05)
    assert fit.background or fit.first_sample > ONSET + 0.05 * TAU * RATE


@pytest.mark.parametrize(
    ("other", "amplitude"), [(925.0, 0.8), (940.0, 0.3), (950.0, 0.8), (970.0, 0.3), (1000.0, 0.8)]
)
def test_a_pair_that_beats_is_not_taken_for_one_mode(other: float, amplitude: float) -> None:
    """One to four half-power widths apart, 60 dB over the noise: one pole leaves far more than was there before."""
    samples = record(level=1e-3) + record(1, level=1e-3, frequency=other, amplitude=amplitude)
    fit = ringdown.fit(samples, RATE, SEARCH, ONSET)
    assert not fit.usable
    assert "misfit" in fit.reasons


@pytest.mark.parametrize("widths", [1.0, 2.0, 4.0])
@pytest.mark.parametrize("time_constants", [2.0, 5.0])
def test_what_a_faint_neighbour_does_lies_in_the_interval_that_the_remainder_widens(
    widths: float, time_constants: float
) -> None:
    """A neighbour of 0.03, some half-power widths off, 60 dB over the noise: 95 % covered at least, one-sided 1e-6."""
    trials, hits, near = 60, 0, 0
    for seed in range(trials):
        phase = 2.0 * math.pi * seed / trials
        other = FREQUENCY * (1.0 + (-1.0) ** seed * widths / Q)
        samples = record(seed, level=1e-3, time_constants=time_constants)
        samples += record(level=0.0, time_constants=time_constants, frequency=other, amplitude=0.03, phase=phase)
        fit = ringdown.fit(samples, RATE, SEARCH, ONSET)
        assert fit.usable, fit.reasons
        assert fit.q_low is not None
        assert fit.q_high is not None
        assert fit.frequency_hz is not None
        assert fit.std_ln_f is not None
        hits += fit.q_low < Q < fit.q_high
        near += abs(math.log(fit.frequency_hz / FREQUENCY)) < 1.96 * fit.std_ln_f
    assert coverage_ok(hits, trials, 0.95, 1.0, 2e-6)
    assert coverage_ok(near, trials, 0.95, 1.0, 2e-6)


def test_a_contradicted_fit_is_usable_where_little_is_left_and_refused_where_much_is() -> None:
    """Neighbours four half-power widths off, 0.02 and 0.75 of the amplitude; no quiet before to compare with."""
    for amplitude, usable in ((0.02, True), (0.75, False)):
        samples = record(level=1e-4) + record(level=0.0, frequency=990.0, amplitude=amplitude, phase=3.0)
        fit = ringdown.fit(samples[math.ceil(ONSET) :], RATE, SEARCH, 0.0)
        assert fit.fit_p is not None
        assert fit.snr_db is not None
        assert fit.fit_p < ringdown.REFUSED_P
        assert (10.0 ** (-fit.snr_db / 20.0) < ringdown.SMALL_REMAINDER) == usable
        assert fit.usable == usable
        assert ("misfit" in fit.reasons) != usable


def test_a_decay_of_minutes_is_fitted_in_the_zoomed_stream() -> None:
    """Q 20000 at 400 Hz, three time constants of 16 s, 40 dB: within 5 standard deviations near the bound."""
    rate, frequency, q, search = 4000, 400.0, 20_000.0, (396.0, 404.0)
    tau = q / (math.pi * frequency)
    since = np.arange(round((5.0 + 3.0 * tau) * rate)) / rate - 5.0
    damped = 2.0 * math.pi * frequency * math.sqrt(1.0 - 0.25 / q**2)
    density = 1e-4 / (search[1] - search[0])
    noise = np.random.default_rng(0).normal(0.0, math.sqrt(density * rate / 2.0), len(since))
    samples = np.where(since >= 0.0, np.exp(-np.maximum(since, 0.0) / tau) * np.cos(damped * since), 0.0) + noise
    zoom = Zoom(rate, [BandRequest(search, 10.0, 10.0)])
    band = zoom.bands[0]
    stream = zoom.stream(samples.astype(np.float32))[0]
    end = len(stream) - math.ceil(ringdown.GUARD * band.rate_hz / 8.0)
    fit = ringdown.fit_baseband(stream[:end], band.rate_hz, band.centre_hz, search, 5.0 * band.rate_hz)
    bound = whole_record(frequency, q, 1.0, density, rate, round(3.0 * tau * rate))
    assert fit.usable, fit.reasons
    assert fit.q is not None
    assert fit.std_ln_q is not None
    assert abs(math.log(fit.q / q)) < 5.0 * fit.std_ln_q
    assert fit.frequency_hz == pytest.approx(frequency, rel=5.0 * 1.5 * bound.ln_f)
    assert fit.std_ln_q < 1.5 * bound.ln_q  # the guard costs 1.1; the noise is estimated from 370 residuals


def test_noise_alone_is_refused() -> None:
    """No onset, no decay: of 40 records each passes with probability 0.01 at most, so more than 5 with below 1e-5."""
    usable = sum(ringdown.fit(record(seed, amplitude=0.0), RATE, SEARCH, ONSET).usable for seed in range(40))
    assert usable <= 5


@pytest.mark.parametrize(
    ("samples", "reason"),
    [
        (np.zeros(6000), "unexcited"),
        (np.where(np.arange(6000) == 4000, np.nan, record()[:1].repeat(6000)), "not_finite"),
        (record()[1900:2300], "short"),
        (np.where(np.arange(6000) < 2000, 1e-3, np.inf), "not_finite"),
    ],
)
def test_data_that_hold_no_decay_give_reasons_and_no_figures(samples: NDArray[np.float64], reason: str) -> None:
    fit = ringdown.fit(samples, RATE, SEARCH)
    assert not fit.usable
    assert fit.reasons == (reason,)
    assert fit.frequency_hz is None
    assert set(fit.reasons) <= set(REASONS)


def test_a_mode_at_the_edge_of_the_band_or_outside_is_not_usable() -> None:
    for frequency in (765.0, 1100.0):
        fit = ringdown.fit(record(frequency=frequency), RATE, SEARCH, ONSET)
        assert not fit.usable
        assert set(fit.reasons) <= set(REASONS)


def test_arguments_that_contradict_each_other_are_refused_with_what_was_expected() -> None:
    good = record()
    with pytest.raises(ValueError, match="one row of samples"):
        ringdown.fit(good[None, :], RATE, SEARCH)
    with pytest.raises(ValueError, match="half the sample rate"):
        ringdown.fit(good, 2000.0, SEARCH)
    with pytest.raises(ValueError, match="index into the"):
        ringdown.fit(good, RATE, SEARCH, float(len(good)))
    stream = np.ones(500, dtype=np.complex64)
    with pytest.raises(ValueError, match="expected inside"):
        ringdown.fit_baseband(stream, 100.0, 400.0, (300.0, 410.0), 0.0)
    with pytest.raises(ValueError, match="index into the"):
        ringdown.fit_baseband(stream, 100.0, 400.0, (390.0, 410.0), 500.0)
    with pytest.raises(ValueError, match="one row of samples"):
        ringdown.fit_baseband(stream[None, :], 100.0, 400.0, (390.0, 410.0), 0.0)
