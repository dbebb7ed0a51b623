"""Whether a fitted decay is to be believed: residuals, noise before it, chance, and the logarithmic decrement."""

from __future__ import annotations

import math

import numpy as np
from scipy import fft, special

from driftwatch.measure.decay_bins import Bins, PoleFit, Reals, transform


def residual_p(fit: PoleFit) -> float:
    """Return the p-value of a test whether neighbouring residuals agree: what the model misses is smooth in frequency.

    The lag-one correlation r' M r / r' r of the residuals is a ratio of quadratic forms of which the noise's variance
    drops out. Its exact mean and variance over noise, given what the fit took away, set a beta law on the range that
    the ratio can take. Small values speak against the model: a second mode, a cut too early, a pole that moves with
    the amplitude.
    """
    m = len(fit.residual)
    dimension = fit.freedom
    numerator = float(np.sum((fit.residual[1:] * fit.residual[:-1].conj()).real))
    total = float(np.sum(np.abs(fit.residual) ** 2))
    if dimension < 3 or total <= 0.0:
        return 1.0
    moved = _neighbours(fit.basis, m)
    inner = fit.basis.T @ moved
    trace = -float(np.trace(inner))
    square = (m - 1.0) - 2.0 * float(np.sum(moved**2)) + float(np.sum(inner * inner))
    mean = trace / dimension
    variance = 2.0 * (square - trace**2 / dimension) / (dimension * (dimension + 2.0))
    edge = math.cos(math.pi / (m + 1))
    return _beta_tail(numerator / total, mean, variance, edge)


def _neighbours(columns: Reals, m: int) -> Reals:
    """Apply M, half the sum of both neighbours, to the real and to the imaginary halves of stacked columns."""
    halves = columns.reshape(2, m, -1)
    moved = np.zeros_like(halves)
    moved[:, 1:] += 0.5 * halves[:, :-1]
    moved[:, :-1] += 0.5 * halves[:, 1:]
    return moved.reshape(2 * m, -1)


def _beta_tail(value: float, mean: float, variance: float, edge: float) -> float:
    """Return the probability beyond `value` of the beta law on +-`edge` with this mean and variance."""
    centre, spread = (mean / edge + 1.0) / 2.0, variance / (2.0 * edge) ** 2
    count = centre * (1.0 - centre) / spread - 1.0
    place = min(max((value / edge + 1.0) / 2.0, 0.0), 1.0)
    return float(special.betaincc(centre * count, (1.0 - centre) * count, place))


def excess_p(bins: Bins, pole: PoleFit, quiet: Reals, search_hz: tuple[float, float]) -> float:
    """Return the p-value of Fisher's F: whether the fit left more than the noise in the band before the onset.

    What one pole leaves of two that beat is smooth in frequency only where the record is long; but it is there.
    1 where too little quiet was seen, or none.
    """
    if len(quiet) * (search_hz[1] - search_hz[0]) < 2.0 * bins.rate_hz:
        return 1.0
    before = transform(quiet, bins.rate_hz, search_hz)
    power = float(np.sum(np.abs(before.values) ** 2))
    if power <= 0.0:
        return 1.0
    ratio = pole.noise / bins.length / (power / (2.0 * len(before.values)) / before.length)
    return float(special.fdtrc(pole.freedom, 2.0 * len(before.values), ratio))


def chance(bins: Bins, pole: PoleFit) -> float:
    """The probability that noise alone gains so much by a pole: Fisher's F, times the bins it could have been at."""
    parameters = 4
    gained = float(np.sum(np.abs(bins.values) ** 2)) - pole.noise * pole.freedom
    if pole.noise <= 0.0:
        return 0.0
    ratio = gained / (parameters * pole.noise)
    return float(special.fdtrc(parameters, pole.freedom, max(ratio, 0.0))) * len(bins.values)


def decrement_q(bins: Bins, frequency_hz: float) -> float | None:
    """Return Q from the slope of the band's log envelope, the logarithmic decrement; None where it does not fall.

    A cross-check that shares nothing with the fit but the bins. The envelope is that of the bins under a Hann window;
    points count by their power, since that is how certain their logarithms are.
    """
    m = len(bins.values)
    envelope = np.abs(fft.ifft(bins.values * np.hanning(m + 2)[1:-1]))
    keep = slice(2, m - 2)  # the window smears by two points, over both ends of the record
    time = np.arange(m)[keep] * (bins.length / bins.rate_hz / m)
    height = envelope[keep]
    if len(height) < 3 or not np.all(height > 0.0):
        return None
    weight = height**2 / np.sum(height**2)
    centre = float(weight @ time)
    slope = float(weight @ ((time - centre) * np.log(height))) / float(weight @ (time - centre) ** 2)
    return math.pi * frequency_hz / -slope if slope < 0.0 else None
