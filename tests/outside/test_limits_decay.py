"""Bounds of a free decay and of a tone against published formulas and figures."""

from __future__ import annotations

import math

import numpy as np
import pytest
from driftwatch.measure.limits_decay import (
    damped_tone_variance,
    full_decay,
    in_band,
    record_factor,
    tone_variance,
    whole_record,
)


def fisher_of_time_samples(alpha: float, omega: float, samples: int, snr: float) -> np.ndarray:
    """Covariance bound of (alpha, omega) of a complex damped tone by a plain sum over its samples."""
    n = np.arange(samples)
    tone = np.exp((-alpha + 1j * omega) * n)
    slopes = np.stack([tone, 1j * tone, -n * tone, 1j * n * tone])  # Re b, Im b, alpha, omega at b = 1
    information = 2.0 * snr * (slopes.conj() @ slopes.T).real
    return np.asarray(np.linalg.inv(information)[2:, 2:])


@pytest.mark.parametrize(("alpha", "samples"), [(0.1, 10), (0.02, 100), (0.001, 5000), (0.5, 3)])
def test_yao_and_pandit_is_the_inverse_fisher_information_of_the_samples(alpha: float, samples: int) -> None:
    """Source: Yao & Pandit, IEEE Trans. Signal Processing 43 (1995) 878. 1e-6: the inversion's conditioning."""
    covariance = fisher_of_time_samples(alpha, 0.7, samples, 25.0)
    published = damped_tone_variance(alpha, samples, 25.0)
    assert covariance[0, 0] == pytest.approx(published, rel=1e-6)
    assert covariance[1, 1] == pytest.approx(published, rel=1e-6)


def test_undamped_limit_of_yao_and_pandit_is_rife_and_boorstyn() -> None:
    """Source: Rife & Boorstyn 1974: complex 6 sigma^2 / (b^2 N (N^2-1)); real amplitude A: SNR = A^2 / (4 sigma^2).

    1e-3: at alpha N = 3e-4 the decay itself still changes the bound by about alpha N.
    """
    samples, amplitude, sigma = 300, 2.0, 0.3
    nearly_undamped = damped_tone_variance(1e-6, samples, amplitude**2 / (4.0 * sigma**2))
    assert nearly_undamped == pytest.approx(tone_variance(amplitude, sigma, samples), rel=1e-3)
    assert tone_variance(1.0, 1.0, 2) == pytest.approx(24.0 / 6.0)


@pytest.mark.parametrize(("time_constants", "published"), [(1.0, 2.05), (2.0, 1.21), (3.0, 1.05)])
def test_short_records_widen_the_bound_as_published(time_constants: float, published: float) -> None:
    """Widening of a record of 1, 2, 3 time constants (recomputed law; half a unit of the last digit given)."""
    factor = full_decay(900.0, 40.0, 1.0, 1e-6).ln_q * record_factor(time_constants)
    assert record_factor(time_constants) == pytest.approx(published, abs=0.006)
    rate = 200_000.0
    samples = round(time_constants * 40.0 / (math.pi * 900.0) * rate)
    sampled = whole_record(900.0, 40.0, 1.0, 1e-6, rate, samples).ln_q
    # 2e-3: the first sample of n = 0 .. N-1 counts in full, an excess of order alpha = 3.5e-4, and N is rounded.
    assert sampled == pytest.approx(factor, rel=2e-3)


def test_full_decay_follows_the_continuous_law() -> None:
    """std(Q)/Q = sqrt(8 g S)/A and std(f)/f = std(Q)/Q / (2 Q) for a decay seen to its end, light damping."""
    frequency, q, amplitude, density = 2400.0, 150.0, 3.0, 2e-5
    g = math.pi * frequency / q
    bound = full_decay(frequency, q, amplitude, density)
    law = math.sqrt(8.0 * g * density) / amplitude
    assert bound.ln_q == pytest.approx(law, rel=1e-4)  # the two part by zeta^2 = 1.1e-5
    assert bound.ln_f == pytest.approx(law / (2.0 * q), rel=1e-4)
    assert record_factor(40.0) == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize("time_constants", [2.0, 5.0])
def test_all_bins_tell_what_the_whole_record_tells(time_constants: float) -> None:
    """With every bin from 0 to half the rate the in-band bound is Yao & Pandit's.

    2 %: a real record's phase moves the bound of frequency against that of damping by up to 1/(2 Q) of itself.
    """
    frequency, q, rate = 900.0, 40.0, 48_000.0
    samples = 2 * round(time_constants * q / (math.pi * frequency) * rate / 2)
    bins = np.arange(1, samples // 2)
    found = in_band(frequency, q, 1.0 + 0.5j, 1e-6, rate, samples, bins)
    whole = whole_record(frequency, q, abs(1.0 + 0.5j), 1e-6, rate, samples)
    assert found.ln_q == pytest.approx(whole.ln_q, rel=0.02)
    assert found.ln_f == pytest.approx(whole.ln_f, rel=0.02)


def test_fewer_bins_never_tell_more() -> None:
    samples = 4000
    wide = in_band(900.0, 40.0, 1.0, 1e-6, 48_000.0, samples, np.arange(60, 91))
    narrow = in_band(900.0, 40.0, 1.0, 1e-6, 48_000.0, samples, np.arange(68, 83))
    assert narrow.ln_q > wide.ln_q
    assert narrow.ln_f > wide.ln_f


def test_impossible_arguments_are_refused_with_what_was_expected() -> None:
    with pytest.raises(ValueError, match="expected alpha > 0"):
        damped_tone_variance(0.0, 10, 1.0)
    with pytest.raises(ValueError, match="expected more than 0"):
        record_factor(0.0)
    with pytest.raises(ValueError, match="Q above 1/2"):
        full_decay(900.0, 0.4, 1.0, 1e-6)
    with pytest.raises(ValueError, match="at least 2"):
        tone_variance(1.0, 1.0, 1)
