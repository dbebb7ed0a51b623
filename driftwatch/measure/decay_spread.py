"""How far a fitted decay's frequency and Q may be from the truth, where its own residuals do not tell all."""

from __future__ import annotations

import numpy as np

from driftwatch.measure.decay_bins import PoleFit, Reals


def log_covariance(pole: PoleFit) -> Reals:
    """Covariance of (ln fn, ln q) from that of (ln g, wd): wn^2 = g^2 + wd^2, q = wn / (2 g)."""
    square = pole.g**2 + pole.damped**2
    of_f = [pole.g**2 / square, pole.damped / square]
    slope = np.array([of_f, [of_f[0] - 1.0, of_f[1]]])
    return np.asarray(slope @ pole.covariance @ slope.T)


def remainder_gain(pole: PoleFit) -> float:
    """Return the variance that a remainder with structure adds, over that of noise of the same power.

    Noise spreads its power over the 2 m real numbers in m bins, and an estimate feels one of them. What is left where
    a decay is no single exponential was not drawn by chance: as much as the fit leaves it may have taken in, and all of
    that along the one direction that moves the estimate. So the variance is up to 2 m times that of noise. For a decay
    seen to its end this is a standard deviation of 2 r of ln q and of r / q of ln fn, r being the remainder's amplitude
    over the decay's; for shorter records it is more.

    With two modes one to four half-power widths apart the 95 % interval then covers the stronger one's Q and frequency
    at least 95 times in 100, where the residuals contradict one pole; half as much covers 53. Nearer pairs look like
    one pole and leave next to nothing: no interval from the remainder covers what they do. Where the damping depends on
    the amplitude, Q is the mean along the record and the interval is that mean's.
    """
    return 2.0 * len(pole.residual)
