"""What a free decay, or an undamped tone, can tell at best: Cramer-Rao bounds.

Notation: a real signal A exp(-g t) cos(wd t + phase), t >= 0, with decay rate g = pi fn / Q (1/s) and undamped natural
frequency fn, in white noise of one-sided density S (unit^2/Hz), sampled at rate fs; the noise's variance at the full
rate is then S fs / 2.

Sources: Y.-X. Yao and S. M. Pandit, "Cramer-Rao lower bounds for a damped sinusoidal process", IEEE Trans. Signal
Processing 43 (1995) 878; D. C. Rife and R. R. Boorstyn, "Single-tone parameter estimation from discrete-time
observations", IEEE Trans. Information Theory 20 (1974) 591.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class DecayBound:
    """Smallest standard deviations that an unbiased estimate of one decay can have."""

    ln_f: float  # of ln fn
    ln_q: float  # of ln Q


def damped_tone_variance(alpha: float, samples: int, snr: float) -> float:
    """Return the bound on the variance of frequency and of damping of a damped complex tone (Yao & Pandit 1995).

    For b exp(-alpha n + i w n), n = 0 .. N-1, in complex white noise of variance sigma^2, SNR = b^2 / sigma^2 and
    z = exp(-alpha),

        var(w) = var(alpha) = (1-z^2)^3 (1-z^2N) / (2 SNR [z^2 (1-z^2N)^2 - N^2 z^2N (1-z^2)^2])

    Parameters
    ----------
    alpha
        Damping a sample, > 0.
    samples
        N, at least 2.
    snr
        b^2 / sigma^2.

    Returns
    -------
    float
        Variance in (radians a sample)^2, the same for both.
    """
    if not (alpha > 0.0 and samples >= 2 and snr > 0.0):
        raise ValueError(f"alpha {alpha}, samples {samples}, snr {snr}: expected alpha > 0, samples >= 2, snr > 0")
    z2 = math.exp(-2.0 * alpha)
    end = math.exp(-2.0 * alpha * samples)
    one_z2, one_end = -math.expm1(-2.0 * alpha), -math.expm1(-2.0 * alpha * samples)
    return one_z2**3 * one_end / (2.0 * snr * (z2 * one_end**2 - samples**2 * end * one_z2**2))


def whole_record(
    frequency_hz: float, q: float, amplitude: float, density: float, rate_hz: float, samples: int
) -> DecayBound:
    """Return the bound of a real decay's record of `samples` from its onset, all frequencies used.

    A real tone of amplitude A in real noise of variance s^2 tells as much as a complex one with SNR = A^2 / (4 s^2).
    """
    g, omega = _rates(frequency_hz, q)
    variance = damped_tone_variance(g / rate_hz, samples, amplitude**2 / (2.0 * density * rate_hz)) * rate_hz**2
    return _bound_of(math.sqrt(variance), g, omega)


def full_decay(frequency_hz: float, q: float, amplitude: float, density: float) -> DecayBound:
    """Return the bound of a decay that is seen to its end: std(ln Q) = sqrt(8 g S) / A, in continuous time."""
    g, omega = _rates(frequency_hz, q)
    return _bound_of(math.sqrt(8.0 * g * density) / amplitude * g, g, omega)


def record_factor(time_constants: float) -> float:
    """Return how many times a record of so many time constants widens the bound of the full decay.

    With I(T) = int_0^T (t - m)^2 exp(-2t) dt about its weighted mean m the factor is sqrt(I(inf) / I(T)); I(inf) = 1/8.
    """
    if time_constants <= 0.0:
        raise ValueError(f"a record of {time_constants} time constants: expected more than 0")
    end = math.exp(-2.0 * time_constants)
    zeroth = (1.0 - end) / 2.0
    first = (1.0 - end * (1.0 + 2.0 * time_constants)) / 4.0
    second = (1.0 - end * (1.0 + 2.0 * time_constants + 2.0 * time_constants**2)) / 4.0
    return math.sqrt(0.125 / (second - first**2 / zeroth))


def in_band(
    frequency_hz: float,
    q: float,
    amplitude: complex,
    density: float,
    rate_hz: float,
    samples: int,
    bins: NDArray[np.int64],
) -> DecayBound:
    """Return the bound of what the DFT bins `bins` of a record tell, amplitude and phase unknown.

    The Fisher information is summed over the bins, in which white noise is uncorrelated; the derivatives are taken
    in time and transformed, sample by sample.

    Parameters
    ----------
    amplitude
        A exp(i phase) at the record's first sample.
    bins
        Shape (m,), numbers of the bins, bin k at k rate_hz / samples.
    """
    g, omega = _rates(frequency_hz, q)
    damped = math.sqrt(omega**2 - g**2)
    time = np.arange(samples) / rate_hz
    tone = np.exp((-g + 1j * damped) * time)
    slopes = np.stack([tone, 1j * tone, -time * amplitude * tone, 1j * time * amplitude * tone]).real
    spectra = np.fft.rfft(slopes, axis=1)[:, bins]
    slope = np.concatenate([spectra.real, spectra.imag], axis=1)
    # Scaled so that the information matrix inverts well whatever the units.
    size = np.sqrt(np.sum(slope**2, axis=1))
    information = (slope / size[:, None]) @ (slope / size[:, None]).T
    noise = samples * density * rate_hz / 4.0  # variance of a bin's real part, and of its imaginary part
    covariance = noise * np.linalg.inv(information) / np.outer(size, size)
    return _log_bound(covariance[2:, 2:], g, damped)


def tone_variance(amplitude: float, sigma: float, samples: int) -> float:
    """Return the bound on the variance of the frequency of an undamped real tone, (radians a sample)^2.

    var(w) >= 24 sigma^2 / (A^2 N (N^2 - 1)) (Rife & Boorstyn 1974), for a tone away from 0 and from half the rate.
    """
    if samples < 2:
        raise ValueError(f"{samples} samples: expected at least 2")
    return 24.0 * sigma**2 / (amplitude**2 * samples * (samples**2 - 1.0))


def _rates(frequency_hz: float, q: float) -> tuple[float, float]:
    if not (frequency_hz > 0.0 and q > 0.5):
        raise ValueError(f"frequency {frequency_hz} Hz, Q {q}: expected a frequency above 0 and a Q above 1/2")
    return math.pi * frequency_hz / q, 2.0 * math.pi * frequency_hz


def _bound_of(std: float, g: float, omega: float) -> DecayBound:
    """From one standard deviation of g and wd (uncorrelated, 1/s) to those of ln fn and ln Q, any damping."""
    return _log_bound(np.diag([std**2, std**2]), g, math.sqrt(omega**2 - g**2))


def _log_bound(covariance: NDArray[np.float64], g: float, damped: float) -> DecayBound:
    """From the covariance of (g, wd) to ln fn, ln Q: wn^2 = g^2 + wd^2, Q = wn / (2 g)."""
    square = g**2 + damped**2
    slope = np.array([[g / square, damped / square], [g / square - 1.0 / g, damped / square]])
    variances = np.diag(slope @ covariance @ slope.T)
    return DecayBound(ln_f=math.sqrt(variances[0]), ln_q=math.sqrt(variances[1]))
