"""Where in raw samples a free decay begins."""

from __future__ import annotations

import math

import numpy as np
from scipy import fft

from driftwatch.measure.decay_bins import Bins, PoleFit, Reals, transform

_ONSET_STEPS = 33


def steepest_rise(data: Reals, rate_hz: float, search_hz: tuple[float, float]) -> float:
    """Index where the band's envelope, its edges smoothed by a Hann window, rises through half its highest point.

    The smoothing is symmetric, so a sudden onset lies where the rise is half done.
    """
    length = fft.next_fast_len(len(data), real=True)
    bins = transform(np.pad(data, (0, length - len(data))), rate_hz, search_hz)
    m = len(bins.values)
    envelope = np.abs(fft.ifft(bins.values * np.hanning(m + 2)[1:-1], 8 * m))[: max(1, 8 * m * len(data) // length)]
    peak = int(np.argmax(envelope))
    low = np.flatnonzero(envelope[:peak] < envelope[peak] / 2.0)
    return (float(low[-1]) + 0.5 if len(low) else 0.0) * length / (8 * m)


def refined_onset(
    data: Reals, rate_hz: float, search_hz: tuple[float, float], hint: float, pole: PoleFit
) -> tuple[float, float]:
    """Return the likeliest onset within two reciprocal bandwidths of the hint, and its standard deviation, samples."""
    reciprocal = rate_hz / (search_hz[1] - search_hz[0])
    first = max(0, math.floor(hint - 4.0 * reciprocal))
    last = min(len(data), math.ceil(hint + 2.0 * reciprocal + 4.0 * rate_hz / pole.g))
    bins = transform(data[first:last], rate_hz, search_hz)
    noise = pole.noise * bins.length / max(1, len(data))
    low, high = max(0.0, hint - 2.0 * reciprocal - first), hint + 2.0 * reciprocal - first
    for _ in range(3):
        trials = np.linspace(low, min(high, bins.length - 1.0), _ONSET_STEPS)
        gain = _onset_gain(bins, trials, pole)
        top = int(np.argmax(gain))
        width = trials[1] - trials[0]
        low, high = max(0.0, trials[top] - 2.0 * width), trials[top] + 2.0 * width
    return first + float(trials[top]), _spread(gain, width, top, noise)


def _onset_gain(bins: Bins, onsets: Reals, pole: PoleFit) -> Reals:
    """By how much a tone from each trial onset on lowers the sum of squares, amplitude free; without the image.

    The tone's transform is (w^n0 - z^(N-n0)) / (1 - z w), w = exp(-i w_k / fs).
    """
    eigenvalue = complex(-pole.g, pole.damped) / bins.rate_hz
    turn = bins.omega / bins.rate_hz
    ends = np.exp(eigenvalue * (bins.length - onsets))
    shape = (np.exp(-1j * onsets[:, None] * turn) - ends[:, None]) / (1.0 - np.exp(eigenvalue - 1j * turn))
    power = np.sum(shape.real**2 + shape.imag**2, axis=1)
    return np.asarray(np.abs(shape.conj() @ bins.values) ** 2 / np.maximum(power, np.finfo(float).tiny))


def _spread(gain: Reals, width: float, top: int, noise: float) -> float:
    """Standard deviation from the curvature of the log-likelihood gain / (2 noise) about its top."""
    centre = min(max(top, 1), len(gain) - 2)
    curvature = (2.0 * gain[centre] - gain[centre - 1] - gain[centre + 1]) / width**2
    return math.sqrt(2.0 * noise / curvature) if curvature > 0.0 else math.inf
