"""A resonator under random force and impacts, sample by sample and exact.

The resonator ``x'' + 2 g x' + wn^2 x = w(t)`` has the poles ``s = -g + i wd`` and its conjugate s*. In the modal
coordinate ``y = v - s* x`` (v = x') its equation is a first-order one,

    y' = s y + w(t),        x = Im y / wd,        v = Re y - (g/wd) Im y,

so that over one sample period dt, for white force of two-sided intensity W, exactly

    y[n+1] = exp(s dt) y[n] + e[n],
    E |e|^2 = W (1 - exp(-2 g dt)) / (2 g),       E e^2 = W (exp(2 s dt) - 1) / (2 s)

with e Gaussian and independent from sample to sample; dt to infinity gives the stationary state. This is the matrix
exponential with its process noise (C. F. Van Loan, IEEE Trans. Automatic Control 23, 1978) in closed form. W = 4 g
makes the rms of v, and of wn x, one.

What is sensed has the *level* as its rms: displacement ``wn x``, velocity ``v``, acceleration ``a/wn``. White force
makes the acceleration itself infinite, since ``a = w - 2 g v - wn^2 x`` contains w. The acceleration here is the
derivative of the sampled velocity, band-limited to the sample rate: i w times its spectrum, within 1.2e-4 up to 0.9 of
half the rate (`differentiator`). Whoever divides its spectrum by i w has the velocity's back. Its level is that of the
velocity, so the rms near the resonance; the force's own white part, which fills the whole band, comes on top.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter

from driftwatch.resonance import Pole
from driftwatch.stream.course import Course

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

SEGMENT = 256
"""Samples over which frequency, Q and level stand still; the state runs on from one to the next."""

TAPS = 32
"""Length of the differentiator."""

_FORGOTTEN = 1e-20  # an amplitude under this is set to 0: numbers near the smallest would slow the filter down


# ---------------------------------------------------------------------------------------------- one step


@dataclass(frozen=True, slots=True)
class Step:
    """The exact discretisation of one resonator at unit level."""

    factor: complex  # exp(s dt)
    noise: tuple[float, float, float]  # e = (noise[0] a) + i (noise[1] a + noise[2] b), a and b unit Gaussians
    start: tuple[float, float, float]  # the same for the stationary state
    displacement: complex  # wn x = Re(displacement y)
    velocity: complex  # v = Re(velocity y)
    acceleration: complex  # a/wn = Re(acceleration y) where no force acts
    wn_dt: float  # radians a sample


@lru_cache(maxsize=1024)
def step_of(frequency_hz: float, q: float, rate_hz: float) -> Step:
    """Return the discretisation of a resonator at a sample rate, both in Hz."""
    pole = Pole.from_q(frequency_hz, q)
    s_dt, g_dt, wn_dt = pole.s / rate_hz, pole.decay_rate / rate_hz, pole.angular_frequency_rad_s / rate_hz
    # W = 4 g; with everything in units of dt, W dt = 4 g dt
    power = -2 * math.expm1(-2 * g_dt)
    square = 2 * g_dt / s_dt * complex(np.expm1(2 * s_dt))
    velocity = 1 + 1j * g_dt / s_dt.imag
    return Step(
        factor=complex(np.exp(s_dt)),
        noise=_root(power, square),
        start=_root(2.0, -2 * g_dt / s_dt),
        displacement=-1j * wn_dt / s_dt.imag,
        velocity=velocity,
        acceleration=velocity * s_dt / wn_dt,
        wn_dt=wn_dt,
    )


def _root(power: float, square: complex) -> tuple[float, float, float]:
    """Return the lower Cholesky factor of the covariance of (Re e, Im e) from E |e|^2 and E e^2."""
    real, cross, imag = (power + square.real) / 2, square.imag / 2, (power - square.real) / 2
    first = math.sqrt(real)
    return first, cross / first, math.sqrt(max(0.0, imag - (cross / first) ** 2))


def _gaussian(root: tuple[float, float, float], unit: Floats) -> Complexes:
    """Return complex Gaussians from `unit` of shape (2, n)."""
    out = np.empty(unit.shape[1], np.complex128)
    np.multiply(unit[0], root[0], out=out.real)
    np.multiply(unit[0], root[1], out=out.imag)
    out.imag += root[2] * unit[1]
    return out


@lru_cache(maxsize=1)
def differentiator() -> Floats:
    """Return the taps c with ``sum c[k] v[n + k]`` the derivative, per sample, of v at n + (TAPS - 1)/2.

    Antisymmetric and of even length (its zero at half the rate is missing, as it must be for a derivative); least
    squares of the relative error up to 0.9 of half the rate, where it stays under 1.2e-4.
    """
    place = np.arange(1, TAPS // 2 + 1) - 0.5
    radians = np.linspace(1e-3, 0.9 * np.pi, 20 * TAPS)
    response = 2 * np.sin(np.outer(radians, place)) / radians[:, None]
    half = np.linalg.lstsq(response, np.ones(len(radians)), rcond=None)[0]
    return np.concatenate([-half[::-1], half])


# ---------------------------------------------------------------------------------------------- over time


@dataclass(frozen=True, slots=True)
class Motion:
    """What a resonator does over time; all courses in seconds of the stream."""

    frequency_hz: Course  # undamped natural frequency
    q: Course
    level: Course  # rms that the random force causes, once settled
    quantity: str  # displacement, velocity, acceleration; any other is taken as velocity
    impact_first_s: float | None = None  # None: no impacts
    impact_every_s: float | None = None  # None: one only
    impact_peak: float = 0.0  # amplitude at which each impact's decay begins

    def impacts(self, first: int, samples: int, rate_hz: float) -> list[float]:
        """Return the impacts, in samples from the start, whose decay is first seen in a stretch of the stream."""
        if self.impact_first_s is None or self.impact_peak == 0:
            return []
        begin, end = first - 1, first + samples - 1  # seen at the next whole sample: begin < onset <= end
        onset, every = self.impact_first_s * rate_hz, (self.impact_every_s or math.inf) * rate_hz
        if math.isinf(every):
            return [onset] if begin < onset <= end else []
        number = max(0, math.floor((begin - onset) / every))
        onsets = (onset + k * every for k in range(number, number + math.ceil(samples / every) + 2))
        return [onset for onset in onsets if begin < onset <= end]


class Resonator:
    """One resonator, moving from stretch to stretch.

    Parameters
    ----------
    rng : numpy.random.Generator
        The random force; belongs to this resonator alone.
    rate_hz : float
        Sample rate.
    motion : Motion
        What it does over time.

    Notes
    -----
    The result is bit-identical only for the same stretches: the caller keeps to a fixed grid of whole segments.
    """

    def __init__(self, rng: np.random.Generator, rate_hz: float, motion: Motion) -> None:
        self._rng, self._rate_hz, self._motion = rng, rate_hz, motion
        self._at = 0  # samples taken
        self._decay = 0j  # state left by impacts
        step, level = self._runs(0, 1)[0][1:]
        self._forced = level * complex(_gaussian(step.start, rng.standard_normal((2, 1)))[0])
        self._velocities = np.empty(0)  # those before the next sample that the differentiator still needs
        if motion.quantity == "acceleration":
            unit = rng.standard_normal((2, TAPS - 1))
            self._velocities = np.real(step.velocity * self._force(step, level, unit))

    def take(self, samples: int) -> Floats:
        """Return the next samples of what is sensed, shape (samples,)."""
        out = np.empty(samples)
        runs = self._runs(self._at, samples)
        unit = self._rng.standard_normal((2, samples))
        for part, step, level in runs:
            state = self._force(step, level, unit[:, part])
            if self._motion.quantity == "displacement":
                _sense(step.displacement, state, out[part])
            else:
                _sense(step.velocity, state, out[part])
        if self._motion.quantity == "acceleration":
            self._differentiate(out, runs)
        self._add_decays(out, runs)
        self._at += samples
        return out

    def _runs(self, first: int, samples: int) -> list[tuple[slice, Step, float]]:
        """Return the stretches with the same parameters, as slices of the next samples."""
        motion = self._motion
        middles = (first + np.arange(0.0, samples, SEGMENT) + SEGMENT / 2) / self._rate_hz
        courses = (motion.frequency_hz, motion.q, motion.level)
        if all(course.constant for course in courses):
            middles = middles[:1]
        values = np.stack([course.at(middles) for course in courses])
        new = np.flatnonzero(np.any(np.diff(values), axis=0)) + 1
        edges = [0, *(int(edge) for edge in new * SEGMENT), samples]
        runs = []
        for begin, end in pairwise(edges):
            frequency_hz, q, level = (float(value) for value in values[:, begin // SEGMENT])
            runs.append((slice(begin, end), step_of(frequency_hz, q, self._rate_hz), level))
        return runs

    def _force(self, step: Step, level: float, unit: Floats) -> Complexes:
        """Move on under random force; return the states."""
        if level == 0 and abs(self._forced) < _FORGOTTEN:
            self._forced = 0j
            return np.zeros(unit.shape[1], np.complex128)
        root = (level * step.noise[0], level * step.noise[1], level * step.noise[2])
        states = _run_on(step, self._forced, _gaussian(root, unit))
        self._forced = complex(states[-1])
        return states

    def _differentiate(self, velocities: Floats, runs: list[tuple[slice, Step, float]]) -> None:
        """Turn velocities into a/wn, in place."""
        seen = np.concatenate([self._velocities, velocities])
        velocities[:] = np.correlate(seen, differentiator(), mode="valid")
        for part, step, _ in runs:
            velocities[part] /= step.wn_dt
        self._velocities = seen[len(velocities) :]

    def _add_decays(self, out: Floats, runs: list[tuple[slice, Step, float]]) -> None:
        """Add what impacts leave, each from its exact instant on."""
        onsets = self._motion.impacts(self._at, len(out), self._rate_hz)
        if abs(self._decay) <= _FORGOTTEN * self._motion.impact_peak:
            self._decay = 0j
            if not onsets:
                return
        for part, step, _ in runs:
            pushes = np.zeros(part.stop - part.start, np.complex128)
            for onset in onsets:
                index = math.ceil(onset) - self._at
                if part.start <= index < part.stop:
                    # at unit push each quantity decays from |velocity| = wn/wd
                    push = self._motion.impact_peak / abs(step.velocity)
                    pushes[index - part.start] += push * step.factor ** (math.ceil(onset) - onset)
            states = _run_on(step, self._decay, pushes)
            self._decay = complex(states[-1])
            out[part] += np.real(_sensed(self._motion.quantity, step) * states)


def _run_on(step: Step, state: complex, pushes: Complexes) -> Complexes:
    """Return ``y[n] = factor y[n-1] + pushes[n]`` from the state before the first."""
    states, _ = lfilter([1.0], [1.0, -step.factor], pushes, zi=[step.factor * state])
    return np.asarray(states, np.complex128)


def _sense(row: complex, states: Complexes, out: Floats) -> None:
    """Write ``Re(row y)`` into `out`."""
    np.multiply(states.imag, -row.imag, out=out)
    if row.real:
        out += row.real * states.real


def _sensed(quantity: str, step: Step) -> complex:
    """Return what turns a free state into the sensed quantity."""
    if quantity == "displacement":
        return step.displacement
    return step.acceleration if quantity == "acceleration" else step.velocity


# ---------------------------------------------------------------------------------------------- pure functions


def resonator_response(
    rng: np.random.Generator,
    n: int,
    rate_hz: float,
    frequency_hz: float,
    q: float,
    level: float,
    quantity: str = "acceleration",
) -> Floats:
    """Return the stationary response of one resonator to white Gaussian force.

    Parameters
    ----------
    rng : numpy.random.Generator
        Where the force comes from.
    n : int
        Samples.
    rate_hz, frequency_hz : float
        Sample rate and undamped natural frequency, Hz.
    q : float
        Quality factor 1/(2 zeta), over 0.5.
    level : float
        rms of ``wn x``, ``v`` or ``a/wn`` (the last without the force's own white part; see the module).
    quantity : str
        displacement, velocity or acceleration.

    Returns
    -------
    ndarray
        float64, shape (n,).
    """
    fixed = (Course.of([(0.0, value)]) for value in (frequency_hz, q, level))
    return Resonator(rng, rate_hz, Motion(next(fixed), next(fixed), next(fixed), quantity)).take(n)


def free_decay(
    n: int,
    rate_hz: float,
    frequency_hz: float,
    q: float,
    amplitude: float,
    phase: float,
    onset_sample: float,
) -> Floats:
    """Return ``amplitude exp(-g t) cos(wd t + phase)`` from the onset on, 0 before it.

    Parameters
    ----------
    n : int
        Samples.
    rate_hz, frequency_hz : float
        Sample rate and undamped natural frequency, Hz.
    q : float
        Quality factor 1/(2 zeta), over 0.5.
    amplitude, phase : float
        At the onset; radians.
    onset_sample : float
        Instant t = 0, in samples; need not be whole.

    Returns
    -------
    ndarray
        float64, shape (n,).
    """
    pole = Pole.from_q(frequency_hz, q)
    since = (np.arange(n) - onset_sample) / rate_hz
    out = np.zeros(n)
    after = since >= 0
    out[after] = amplitude * np.real(np.exp(pole.s * since[after] + 1j * phase))
    return out
