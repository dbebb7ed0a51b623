"""Random response of one resonance with known truth, for the benches: exact, seeded, through the real zoom."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from driftwatch.measure.zoom import Band, BandRequest, Zoom
from numpy.typing import NDArray
from scipy import fft, signal

CHUNK = 50
"""Windows made at a time, from one seed."""


@dataclass(frozen=True, slots=True)
class Case:
    """A resonance, the window it is seen through, and the band it is searched in."""

    frequency_hz: float
    q: float
    window_s: float
    rate_hz: int
    widths: float = 6.0  # half-power widths from the band's centre to its edges
    off: float = 0.0  # half-power widths from the band's centre to the resonance
    velocity_power: int = 0  # -1: the channel measures acceleration

    @property
    def search_hz(self) -> tuple[float, float]:
        """Return the search band."""
        width = self.frequency_hz / self.q
        centre = self.frequency_hz - self.off * width
        return centre - self.widths * width, centre + self.widths * width

    @property
    def band(self) -> Band:
        """Return the zoom's band."""
        return self.zoom().bands[0]

    def zoom(self) -> Zoom:
        """Return a zoom for this case alone."""
        return Zoom(self.rate_hz, [BandRequest(self.search_hz, self.window_s, self.window_s, self.velocity_power)])

    def __str__(self) -> str:
        kind = {0: "velocity", -1: "acceleration", 1: "displacement"}[self.velocity_power]
        return f"{self.frequency_hz:g} Hz, Q {self.q:g}, {self.window_s:g} s, +-{self.widths:g} widths, {kind}"


def velocity(case: Case, count: int, rng: np.random.Generator) -> NDArray[np.float64]:
    """Return `count` samples of the velocity of a resonator under white force, of variance 1.

    Sampled, this Gaussian process is exactly an ARMA(2, 1): its autocovariance exp(-g t) (cos wd t - g/wd sin wd t)
    gives the coefficients. The start is as good as stationary: 40 time constants run before it.
    """
    wn = 2 * np.pi * case.frequency_hz
    g = wn / (2 * case.q)
    wd = math.sqrt(wn * wn - g * g)
    lag = np.arange(4) / case.rate_hz
    r = np.exp(-g * lag) * (np.cos(wd * lag) - g / wd * np.sin(wd * lag))
    a = np.array([1.0, -2 * math.exp(-g * lag[1]) * math.cos(wd * lag[1]), math.exp(-2 * g * lag[1])])
    products, m = np.correlate(a, a, "full"), np.arange(-2, 3)
    c0, c1 = (float(products @ r[np.abs(k - m)]) for k in (0, 1))  # autocovariance of the moving average
    ratio = c0 / (2 * c1)
    theta = ratio - math.copysign(math.sqrt(ratio * ratio - 1.0), ratio)  # theta/(1 + theta^2) = c1/c0
    lead = math.ceil(40 / g * case.rate_hz)
    noise = math.sqrt(c1 / theta) * rng.standard_normal(count + lead)
    return np.asarray(signal.lfilter([1.0, theta], a, noise)[lead:], dtype=np.float64)


def in_band(case: Case, power: int) -> float:
    """Return the share of the variance of w^power times a velocity of variance 1 that lies in the band."""
    low, high = case.search_hz
    f = np.linspace(low, high, 20001)
    w, wn = 2 * np.pi * f, 2 * np.pi * case.frequency_hz
    g = wn / (2 * case.q)
    u = (w - wn * wn / w) / 2
    return float(np.trapezoid(2 * g / (g * g + u * u) * w ** (2 * power), f))


def windows(case: Case, snr_db: tuple[float, ...], count: int) -> Iterator[list[NDArray[np.complex64]]]:
    """Yield batches of windows with known truth, one array of shape (CHUNK, samples) for each signal-to-noise ratio.

    Signal and noise are the same in all of them but for the noise's level. White noise is added to what the channel
    measures; its level is that which gives the ratio of variances in the search band, in the channel's own unit.
    """
    zoom = case.zoom()
    low, high = case.search_hz
    density = in_band(case, -case.velocity_power) / (high - low)
    for seed in range(-(-count // CHUNK)):
        rng = np.random.default_rng(seed)
        length = math.ceil((CHUNK + 2) * case.window_s * case.rate_hz)
        motion = _measured(velocity(case, length, rng), case)
        noise = math.sqrt(density * case.rate_hz / 2) * rng.standard_normal(length)
        yield [_cut(zoom, motion + 10 ** (-snr / 20) * noise) for snr in snr_db]


def noise_windows(case: Case, slope: float, count: int) -> Iterator[NDArray[np.complex64]]:
    """Yield batches of windows of noise whose amplitude density goes with frequency to the power `slope`."""
    zoom = case.zoom()
    for seed in range(-(-count // CHUNK)):
        rng = np.random.default_rng(seed)
        length = fft.next_fast_len(math.ceil((CHUNK + 2) * case.window_s * case.rate_hz), real=True)
        noise = rng.standard_normal(length, dtype=np.float32)
        if slope:
            spectrum = fft.rfft(noise)
            spectrum *= (
                np.maximum(np.linspace(0, case.rate_hz / 2, spectrum.size, dtype=np.float32) / 500, 0.1) ** slope
            )
            noise = fft.irfft(spectrum, length)
        yield _cut(zoom, noise)


def _measured(motion: NDArray[np.float64], case: Case) -> NDArray[np.float64]:
    """Return what the channel measures of a velocity, apart from the stretch's ends."""
    if case.velocity_power == 0:
        return motion
    length = fft.next_fast_len(motion.size, real=True)
    spectrum = fft.rfft(motion, length)
    w = 2 * np.pi * np.arange(spectrum.size) * case.rate_hz / length
    w[0] = w[1]  # the mean is nothing to a resonance
    return np.asarray(fft.irfft(spectrum * (1j * w) ** -case.velocity_power, length)[: motion.size], dtype=np.float64)


def _cut(zoom: Zoom, samples: NDArray[np.floating]) -> NDArray[np.complex64]:
    band = zoom.bands[0]
    stream = zoom.stream(samples.astype(np.float32))[0]
    return stream[band.window : (CHUNK + 1) * band.window].reshape(CHUNK, band.window)
