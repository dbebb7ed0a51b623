"""Does the model fit? Periodogram over expectation must be exponential, line by line.

Two looks at the residuals, the smaller p-value counted twice over (Sidak):

* the largest line, against the largest of as many exponentials: finds tones;
* the deviance of the pools, 2 K (r - 1 - ln r) with r the mean ratio of K lines, gamma distributed under the model:
  finds a second mode, a wrong shape. Its mean 2 K (ln K - psi(K)) and variance 4 K^2 (psi'(K) - 1/K) are exact, the
  parameters fitted are taken off, and a scaled chi-square with this mean and variance gives the p-value.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import special

from driftwatch.measure.whittle import Array, Lines, Pools, Quiet, on_lines

_FITTED = 4.0  # parameters that the data determine; the fifth, the tilt, is mostly its prior's


def largest(power: NDArray[np.floating], theta: Array, lines: Lines, quiet: Quiet) -> Array:
    """Return the largest ratio of periodogram to expectation, shape (rows,)."""
    model = on_lines(theta, lines, quiet, power.dtype.type)
    return np.asarray(np.max(np.divide(power, model, out=model), axis=1), dtype=np.float64)


def p_value(largest: Array, lines: int, model: Array, pools: Pools) -> Array:
    """Return the p-value of the residuals, shape (rows,).

    Parameters
    ----------
    largest
        Shape (rows,), the largest ratio of periodogram to expectation.
    lines
        Lines among which it is the largest.
    model
        Shape (rows, pools), expected periodogram.
    pools
        Pooled periodogram, of the same shape.
    """
    one_line = -np.expm1(lines * np.log1p(-np.exp(-np.maximum(largest, 1e-3))))
    least = np.minimum(one_line, _deviance_p(model, pools))
    return np.asarray(least * (2.0 - least), dtype=np.float64)


def _deviance_p(model: Array, pools: Pools) -> Array:
    ratio = np.maximum(pools.power / model, 1e-300)
    deviance = np.sum(2.0 * pools.weight * (ratio - 1.0 - np.log(ratio)), axis=1)
    means, variances = _moments(1 << int(np.max(pools.count)).bit_length())
    index = pools.count.astype(np.intp)
    mean = np.maximum(np.sum(means[index], axis=1) - _FITTED, 1.0)
    variance = np.maximum(np.sum(variances[index], axis=1) - 2.0 * _FITTED, 2.0)
    return np.asarray(special.gammaincc(mean * mean / variance, deviance * mean / variance), dtype=np.float64)


@lru_cache(maxsize=32)
def _moments(most: int) -> tuple[Array, Array]:
    """Return mean and variance of the deviance of a pool of 0, 1, 2 ... `most` lines."""
    count = np.arange(1.0, most + 1.0)
    mean = 2.0 * count * (np.log(count) - special.digamma(count))
    variance = 4.0 * count**2 * (special.polygamma(1, count) - 1.0 / count)
    return np.concatenate(([0.0], mean)), np.concatenate(([0.0], variance))
