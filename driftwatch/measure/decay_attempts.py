"""Which part of a decay to fit: the cut after the onset, and what else to try where one pole does not fit."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from driftwatch.measure.decay_bins import Bins, Complexes, PoleFit, Reals, fit_pole, start, transform
from driftwatch.measure.decay_checks import residual_p

CUT = 0.02
"""The cut after the onset, in time constants."""

LATER_CUTS = (0.1, 0.25, 0.5, 0.75, 1.0, 1.25)
"""Cuts tried one after the other, in time constants, where the residuals contradict an earlier one."""

LONGEST = 7.0
"""Time constants after the cut that are used at most: what follows is noise."""

SHORTEST = 0.5
"""Time constants that a record must show at least."""

MISFIT_P = 0.01
"""p-value of the residual test below which other cuts are tried."""

FEWEST_BINS = 4
"""Bins that a fit needs at least."""

_LATER = [(cut, background) for cut in LATER_CUTS for background in (False, True)]
_FEWEST_SAMPLES = 16
_FEWEST_BINS_WITH_BACKGROUND = 8


@dataclass(frozen=True, slots=True)
class Attempt:
    """One fit of one record."""

    first: int  # index of the record's first sample
    bins: Bins
    pole: PoleFit
    p: float  # of the residual test

    @property
    def std_ln_g(self) -> float:
        """Standard deviation of ln g by the residuals alone."""
        return math.sqrt(float(self.pole.covariance[0, 0]))

    @property
    def remainder(self) -> float:
        """Amplitude of what the fit leaves over that of the decay fitted."""
        signal = float(np.sum(np.abs(self.bins.values - self.pole.residual) ** 2))
        noise = 2.0 * self.pole.noise * len(self.bins.values)
        return math.sqrt(noise / signal) if signal > 0.0 else math.inf


def attempt_at(
    data: Reals | Complexes,
    rate_hz: float,
    search_hz: tuple[float, float],
    onset: float,
    guess: PoleFit,
    cut: float,
    background: bool = False,
) -> Attempt | None:
    """Fit the record that begins `cut` time constants after the onset; None where too little is left."""
    # A guess from little data may be far off: no decay is taken for longer than the record, or wider than the band.
    shortest = 2.0 * rate_hz / (math.pi * (search_hz[1] - search_hz[0]))
    tau = min(max(rate_hz / guess.g, shortest), len(data) - onset)
    first = max(0, math.ceil(onset + cut * tau))
    last = min(len(data), first + math.ceil(LONGEST * tau))
    if last - first < _FEWEST_SAMPLES:
        return None
    bins = transform(data[first:last], rate_hz, search_hz)
    if len(bins.values) < (_FEWEST_BINS_WITH_BACKGROUND if background else FEWEST_BINS) or not np.any(bins.values):
        return None
    pole = fit_pole(bins, (guess.g, guess.damped), background)
    return Attempt(first, bins, pole, residual_p(pole))


def best_attempt(
    data: Reals | Complexes, rate_hz: float, search_hz: tuple[float, float], onset: float, plain: Attempt
) -> Attempt:
    """Return the plain fit if its residuals do not contradict it, else the first that serves better.

    Better is: not contradicted, and more certain of the decay rate by its own residuals. Of mere noise, which now and
    then contradicts by chance, a shorter record is less certain. Where none serves, the most certain is taken.
    """
    if plain.p > MISFIT_P:
        return plain
    best = plain
    for cut, background in _LATER:
        trial = attempt_at(data, rate_hz, search_hz, onset, plain.pole, cut, background)
        if trial is None or not trial.pole.converged or trial.bins.length * trial.pole.g < SHORTEST * rate_hz:
            continue
        if trial.p > MISFIT_P and trial.std_ln_g < plain.std_ln_g:
            return trial
        if trial.std_ln_g < best.std_ln_g:
            best = trial
    return best


def rough_pole(data: Reals | Complexes, rate_hz: float, search_hz: tuple[float, float], first: int) -> PoleFit | None:
    """Return the pole of all that comes a reciprocal bandwidth after the hint, where the onset cannot be."""
    if len(data) - first < 4:
        return None
    bins = transform(data[first:], rate_hz, search_hz)
    if len(bins.values) < FEWEST_BINS or not np.any(bins.values):
        return None
    return fit_pole(bins, start(bins), accuracy=0.1)
