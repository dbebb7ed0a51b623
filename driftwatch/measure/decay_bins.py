"""One decaying sinusoid fitted to the in-band bins of a record: the exact finite sum, and least squares on it.

A record x[n] = Re{c exp(lambda n / fs)}, n = 0 .. N-1, lambda = -g + i wd, has the discrete Fourier transform

    X_k = [c S(lambda, w_k) + conj(c) S(conj(lambda), w_k)] / 2,   S(lambda, w) = (1 - z^N) / (1 - z exp(-i w / fs))

with z = exp(lambda / fs), exactly: the rectangular cut is part of the model, and so is the negative-frequency image.
The noise of the bins is uncorrelated whatever N is. The amplitude is solved for linearly inside (variable
projection: Golub and Pereyra 1973); what remains is a search in ln g and wd.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

Reals = NDArray[np.float64]
Complexes = NDArray[np.complex128]

_ITERATIONS = 25
_WIDTHS = np.geomspace(0.3, 100.0, 14)
"""Decay rates tried at the start, times the reciprocal length of the record."""


@dataclass(frozen=True, slots=True)
class Bins:
    """The in-band part of a record's transform."""

    values: Complexes  # shape (m,), X_k
    omega: Reals  # shape (m,), w_k, 1/s
    rate_hz: float
    length: int  # N, samples transformed
    image: bool  # whether the record was real, so that a negative-frequency image lies in the bins

    @property
    def level(self) -> float:
        """Rms of the record in the bins."""
        return math.sqrt(self.sides * float(np.sum(np.abs(self.values) ** 2))) / self.length

    @property
    def sides(self) -> float:
        """Power over that of these bins: a real record has as much at negative frequencies; a stream twice too much."""
        return 2.0 if self.image else 0.5


@dataclass(frozen=True, slots=True)
class PoleFit:
    """The least-squares pole of one set of bins."""

    g: float  # decay rate, 1/s
    damped: float  # wd, 1/s
    amplitude: complex  # c at the record's first sample
    background: bool  # a smooth background was fitted along
    residual: Complexes  # shape (m,), what the model leaves of the bins
    covariance: Reals  # shape (2, 2), of (ln g, wd)
    noise: float  # variance of the real part of a bin's noise, from the residuals
    freedom: int  # degrees of freedom of `noise`
    basis: Reals  # shape (2 m, p), orthonormal columns spanning the model's tangent space
    converged: bool


def transform(samples: Reals | Complexes, rate_hz: float, search_hz: tuple[float, float]) -> Bins:
    """Return the bins of a record inside a search band; at most a hundredth of its end is cut for a fast transform."""
    image = not np.iscomplexobj(samples)
    length = fft.prev_fast_len(len(samples), real=image)
    first = math.ceil(search_hz[0] * length / rate_hz)
    last = math.floor(search_hz[1] * length / rate_hz)
    numbers = np.arange(first, last + 1)
    spectrum = fft.rfft(samples[:length].real) if image else fft.fft(samples[:length])
    omega = np.asarray(numbers * (2.0 * math.pi * rate_hz / length), dtype=np.float64)
    return Bins(np.asarray(spectrum[numbers], dtype=np.complex128), omega, rate_hz, length, image)


def start(bins: Bins) -> tuple[float, float]:
    """Return (g, wd) of the likeliest pole on a grid: near the highest bins, over all widths a record can show."""
    spacing = 2.0 * math.pi * bins.rate_hz / bins.length
    peak = bins.omega[int(np.argmax(np.abs(bins.values)))]
    damped = peak + spacing * np.arange(-1.25, 1.3, 0.5)
    g = _WIDTHS * bins.rate_hz / bins.length
    shape = 1.0 / (g[:, None, None] + 1j * (bins.omega - damped[None, :, None]))
    power = np.sum(shape.real**2 + shape.imag**2, axis=2)
    gain = np.abs(shape.conj() @ bins.values) ** 2 / power
    wide, near = np.unravel_index(int(np.argmax(gain)), gain.shape)
    return float(g[wide]), float(damped[near])


def fit_pole(bins: Bins, first_guess: tuple[float, float], background: bool = False, accuracy: float = 1e-3) -> PoleFit:
    """Fit one pole to the bins by Gauss-Newton with halved steps.

    Parameters
    ----------
    first_guess
        (g, wd) to start from.
    background
        Fit a smooth complex background along, constant plus slope in frequency: tails of modes outside the band.
    accuracy
        Distance from the optimum, in standard deviations, at which to stop.
    """
    data = _stacked(bins.values)
    theta = np.array([math.log(first_guess[0]), first_guess[1]])
    state = _linearise(bins, theta, data, background)
    converged = False
    for _ in range(_ITERATIONS):
        # At the optimum to the wanted accuracy, or to what floating point tells apart.
        converged = state.promise <= max(accuracy**2 * state.cost / len(data), 1e-24 * float(data @ data))
        following = None if converged else _descend(bins, theta, state, data, background)
        if following is None:
            break
        theta, state = following
    return _finished(theta, state, background, converged)


@dataclass(frozen=True, slots=True)
class _Linearised:
    """The model about one pole, amplitudes solved for."""

    amplitudes: Reals  # of the linear columns: Re c, Im c, background ...
    residual: Reals  # shape (2 m,)
    cost: float
    promise: float  # by how much the cost would fall were the model linear
    step: Reals  # towards the least-squares (ln g, wd)
    basis: Reals  # shape (2 m, p)
    triangle: Reals  # shape (2, 2), of d/d ln g and d/d wd clear of the linear columns


def _descend(
    bins: Bins, theta: Reals, state: _Linearised, data: Reals, background: bool
) -> tuple[Reals, _Linearised] | None:
    """Halve a step until it lowers the cost; None when none does. ln g moves by 1 at most, wd by 3 g."""
    step = state.step / max(abs(state.step[0]), abs(state.step[1]) / (3.0 * math.exp(theta[0])), 1.0)
    for _ in range(12):
        following = _linearise(bins, theta + step, data, background)
        if following.cost < state.cost:
            return theta + step, following
        step = step / 2.0
    return None


def _linearise(bins: Bins, theta: Reals, data: Reals, background: bool) -> _Linearised:
    g = math.exp(theta[0])
    value, slope = _finite_sum(complex(-g, theta[1]), bins)
    columns = [_stacked(column) for column in _amplitude_columns(bins, value)]
    if background:
        columns += _background_columns(bins)
    linear = np.stack(columns, axis=1)
    basis, triangle = np.linalg.qr(linear)
    amplitudes = np.linalg.solve(triangle, basis.T @ data)
    residual = data - linear @ amplitudes
    derivative = _pole_columns(bins, slope, complex(amplitudes[0], amplitudes[1]), g)
    return _with_step(amplitudes, residual, basis, derivative)


def _with_step(amplitudes: Reals, residual: Reals, basis: Reals, derivative: Reals) -> _Linearised:
    inside = basis.T @ derivative
    tangent, rest = np.linalg.qr(derivative - basis @ inside)
    towards = tangent.T @ residual
    step = np.linalg.solve(rest, towards)
    cost, promise = float(residual @ residual), float(towards @ towards)
    return _Linearised(amplitudes, residual, cost, promise, step, np.hstack([basis, tangent]), rest)


def _finite_sum(pole: complex, bins: Bins) -> tuple[tuple[Complexes, Complexes], tuple[Complexes, Complexes]]:
    """S of the pole and of its conjugate at the bins, and d S / d lambda of both."""
    up, up_slope = _one_sum(pole, bins)
    if not bins.image:
        return (up, np.zeros_like(up)), (up_slope, np.zeros_like(up))
    down, down_slope = _one_sum(pole.conjugate(), bins)
    return (up, down), (up_slope, down_slope)


def _one_sum(pole: complex, bins: Bins) -> tuple[Complexes, Complexes]:
    turned = np.exp((pole - 1j * bins.omega) / bins.rate_hz)  # z exp(-i w / fs)
    end = complex(np.exp(pole * bins.length / bins.rate_hz))  # z^N
    inverse = 1.0 / (1.0 - turned)
    value = (1.0 - end) * inverse
    slope = (value * turned - bins.length * end) * inverse / bins.rate_hz
    return value, slope


def _amplitude_columns(bins: Bins, value: tuple[Complexes, Complexes]) -> tuple[Complexes, Complexes]:
    """What Re c and Im c multiply; a complex record has no image, and its whole power on one side."""
    up, down = value
    half = 0.5 if bins.image else 1.0
    return half * (up + down), 1j * half * (up - down)


def _pole_columns(bins: Bins, slope: tuple[Complexes, Complexes], amplitude: complex, g: float) -> Reals:
    """Derivatives with respect to ln g and wd at a fixed amplitude."""
    half = 0.5 if bins.image else 1.0
    up, down = half * amplitude * slope[0], half * amplitude.conjugate() * slope[1]
    return np.stack([_stacked(-g * (up + down)), _stacked(1j * (up - down))], axis=1)


def _background_columns(bins: Bins) -> list[Reals]:
    """Constant and slope, real and imaginary, over the bins; of unit size, so that they are well scaled."""
    ramp = np.linspace(-1.0, 1.0, len(bins.omega))
    zero = np.zeros_like(ramp)
    scale = float(np.max(np.abs(bins.values))) or 1.0
    pairs = [(ramp**0, zero), (zero, ramp**0), (ramp, zero), (zero, ramp)]
    return [scale * np.concatenate(pair) for pair in pairs]


def _finished(theta: Reals, state: _Linearised, background: bool, converged: bool) -> PoleFit:
    freedom = len(state.residual) - state.basis.shape[1]
    noise = state.cost / freedom
    inverse = np.linalg.inv(state.triangle)
    covariance = noise * (inverse @ inverse.T)
    m = len(state.residual) // 2
    residual = state.residual[:m] + 1j * state.residual[m:]
    amplitude = complex(state.amplitudes[0], state.amplitudes[1])
    g = math.exp(theta[0])
    return PoleFit(
        g, float(theta[1]), amplitude, background, residual, covariance, noise, freedom, state.basis, converged
    )


def _stacked(values: Complexes) -> Reals:
    return np.concatenate([values.real, values.imag])
