"""How far a fitted decay's frequency and Q may be from the truth, where its own residuals do not tell all."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from driftwatch.measure.decay_bins import Bins, Complexes, PoleFit, Reals

_FEWEST_RECIPROCALS = 4.0
"""Reciprocal bandwidths of quiet from which on it tells anything."""

_MOST_RECORDS = 64
"""Record lengths of quiet that are used at most, the latest: enough to know a variance by, and it costs little."""


@dataclass(frozen=True, slots=True)
class Quiet:
    """Baseband from before an onset, free of that impact, of earlier ones, and of missing samples."""

    stream: NDArray[np.complexfloating]  # shape (n,), of amplitude A for a tone of amplitude A at the centre
    rate_hz: float
    centre_hz: float  # frequency of its zero
    velocity_power: int  # k of the (w / wc)^k by which it was weighted


@dataclass(frozen=True, slots=True)
class Noise:
    """A density of noise, and how well it is known."""

    density: float  # one-sided, unit^2 / Hz
    freedom: float  # degrees of freedom


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


def widening(bins: Bins, pole: PoleFit, quiet: Quiet | None, search_hz: tuple[float, float]) -> tuple[float, float]:
    """Return by how much the quiet before a decay widens the variance, 1 at least, and its degrees of freedom.

    The greater of both noises counts: the residuals' where it rose with the decay, the quiet's where it is not flat.
    Decays that fall on their own mode's random response have intervals that cover 93 to 96 in 100 (without the quiet 50
    to 60): a record that the noise prolongs, since it ends where the power is back, also reads Q too high.
    """
    inside = residual_noise(bins, pole)
    outside = None if quiet is None else felt_noise(quiet, search_hz, pole, bins.length / bins.rate_hz)
    if outside is None or outside.density <= inside.density or inside.density <= 0.0:
        return 1.0, inside.freedom
    return outside.density / inside.density, outside.freedom


def residual_noise(bins: Bins, pole: PoleFit) -> Noise:
    """Return the noise that the residuals of a real record tell: right where it is flat over the band."""
    return Noise(4.0 * pole.noise / (bins.length * bins.rate_hz), float(pole.freedom))


def felt_noise(quiet: Quiet, search_hz: tuple[float, float], pole: PoleFit, record_s: float) -> Noise | None:
    """Return the noise that moves the pole of a decay, from the quiet before it; None where that is too short.

    A least-squares pole is moved by the noise's projection on t exp(lambda t), 0 <= t < T, clear of exp(lambda t) and
    limited to the band. The mean square of that projection of the quiet, over all shifts, is the sum of |D|^2 |X|^2
    over the frequencies, with D and X the transforms of the template and of the quiet. Where the mode's own random
    response is the noise it is many times the residuals': their fit has taken in what lies at the peak.

    The degrees of freedom are those of a weighted sum of exponential variables (Welch 1967, "The use of fast Fourier
    transform for the estimation of power spectra", IEEE Trans. Audio Electroacoustics 15).
    """
    rate = quiet.rate_hz
    time = np.arange(max(2, round(record_s * rate))) / rate
    stream = quiet.stream[-_MOST_RECORDS * len(time) :].astype(np.complex128)
    count = len(stream)
    if count * (search_hz[1] - search_hz[0]) < _FEWEST_RECIPROCALS * rate:
        return None
    turned = np.exp((-pole.g + 1j * (pole.damped - 2.0 * np.pi * quiet.centre_hz)) * time)
    length = fft.next_fast_len(count + len(time))
    hz = fft.fftfreq(length, 1.0 / rate) + quiet.centre_hz
    band = (hz >= search_hz[0]) & (hz <= search_hz[1])
    weight = _clear(fft.fft(time * turned, length)[band], fft.fft(turned, length)[band])
    felt = weight * np.abs(fft.fft(stream, length)[band]) ** 2
    total, square = float(np.sum(felt)), float(np.sum(felt**2))
    if square <= 0.0:
        return None
    tilt = (pole.damped / (2.0 * np.pi * quiet.centre_hz)) ** (2 * quiet.velocity_power)
    density = total / (2.0 * float(np.sum(weight)) * count * rate * tilt)
    return Noise(density, 4.0 * total**2 / square * count / length)


def _clear(spectrum: Complexes, other: Complexes) -> Reals:
    """Return the power spectrum of a template clear of another."""
    rest = spectrum - other * (np.vdot(other, spectrum) / np.vdot(other, other))
    return np.asarray(rest.real**2 + rest.imag**2)
