"""One decaying sinusoid in the bins of a record: the finite sum is exact, the fit and its residual test are right."""

from __future__ import annotations

import math

import numpy as np
import pytest
from driftwatch.measure.decay_bins import PoleFit, fit_pole, start, transform
from driftwatch.measure.decay_checks import residual_p
from numpy.typing import NDArray
from scipy import stats

RATE = 8000.0
G, DAMPED = 70.0, 2.0 * math.pi * 900.0
SEARCH = (765.0, 1035.0)


def decay(length: int, amplitude: complex = 0.6 - 0.8j) -> NDArray[np.complex128]:
    return np.asarray(amplitude * np.exp((-G + 1j * DAMPED) * np.arange(length) / RATE))


def fitted(samples: NDArray[np.float64], background: bool = False) -> PoleFit:
    bins = transform(samples, RATE, SEARCH)
    return fit_pole(bins, start(bins), background)


@pytest.mark.parametrize("length", [160, 161, 375, 1000])
@pytest.mark.parametrize("image", [True, False])
def test_a_clean_decay_is_fitted_to_rounding_however_short(length: int, image: bool) -> None:
    """The model is the exact finite sum, image included: nothing but rounding is left. 1e-9: conditioning 1e6."""
    samples = decay(length).real if image else decay(length)
    fit = fitted(samples)
    assert fit.converged
    assert fit.g == pytest.approx(G, rel=1e-9)
    assert fit.damped == pytest.approx(DAMPED, rel=1e-11)
    assert fit.amplitude == pytest.approx(0.6 - 0.8j, rel=1e-8)
    assert np.max(np.abs(fit.residual)) < 1e-9 * length


def test_the_transform_keeps_the_bins_inside_the_band_and_their_level() -> None:
    """A tone on a bin of amplitude 3 has rms 3 / sqrt(2), real or as its baseband stream."""
    time = np.arange(800) / RATE
    for samples in (3.0 * np.cos(2.0 * math.pi * 900.0 * time), 3.0 * np.exp(2j * math.pi * 900.0 * time)):
        bins = transform(samples, RATE, SEARCH)
        hz = bins.omega / (2.0 * math.pi)
        assert hz[0] >= SEARCH[0]
        assert hz[-1] <= SEARCH[1]
        assert len(hz) == 27  # 770, 780 ... 1030 Hz
        assert bins.level == pytest.approx(3.0 / math.sqrt(2.0), rel=1e-12)


def test_a_smooth_background_is_taken_out() -> None:
    """A mode far outside the band leaks a smooth tail in, that spoils a plain fit ten times more."""
    time = np.arange(400) / RATE
    samples = decay(400).real + 2.0 * np.exp(-90.0 * time) * np.cos(2.0 * math.pi * 1900.0 * time + 1.0)
    plain, along = fitted(samples), fitted(samples, background=True)
    assert residual_p(plain) < 1e-4
    assert abs(math.log(along.g / G)) < abs(math.log(plain.g / G)) / 10.0
    assert along.g == pytest.approx(G, rel=0.02)


def noisy_fits(trials: int, length: int, level: float, background: bool) -> list[PoleFit]:
    found = []
    for seed in range(trials):
        noise = np.random.default_rng(seed).normal(0.0, level, length)
        found.append(fitted(decay(length, complex(np.exp(1j * seed))).real + noise, background))
    return found


@pytest.mark.parametrize(("length", "background"), [(250, False), (600, False), (600, True)])
def test_the_residual_test_s_p_is_uniform_when_the_model_holds(length: int, background: bool) -> None:
    """Kolmogorov-Smirnov at 1e-6 (beta law matched in mean and variance: no difference shows in 500 trials)."""
    p = [residual_p(fit) for fit in noisy_fits(500, length, 0.05, background)]
    assert stats.kstest(p, "uniform").pvalue > 1e-6


def test_the_covariance_is_that_of_the_errors() -> None:
    """(ln g, wd) over 600 trials at 30 dB: chi-square of the normalised errors, 2-sided at 1e-6; t of 32 degrees."""
    errors = np.array(
        [
            [
                math.log(fit.g / G) / math.sqrt(fit.covariance[0, 0]),
                (fit.damped - DAMPED) / math.sqrt(fit.covariance[1, 1]),
            ]
            for fit in noisy_fits(600, 500, 0.05, background=False)
        ]
    )
    inflation = 30.0 / 28.0  # variance of Student's t of about 30 degrees of freedom
    for column in errors.T:
        statistic = float(np.sum(column**2)) / inflation
        assert 5e-7 < stats.chi2.cdf(statistic, len(column)) < 1.0 - 5e-7


def test_a_second_mode_in_the_band_contradicts_the_model() -> None:
    time = np.arange(900) / RATE
    second = 0.5 * np.exp(-60.0 * time) * np.cos(2.0 * math.pi * 960.0 * time)
    noise = np.random.default_rng(0).normal(0.0, 0.02, 900)
    assert residual_p(fitted(decay(900).real + second + noise)) < 1e-4
