"""What a figure must reach, as tests with a stated false-alarm probability."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats

FAMILY_BENCH = 1e-3
"""Family-wise false-alarm probability of a bench's statistical bars."""

FAMILY_REGULAR = 1e-6
"""The same in the regular test run."""


@dataclass(frozen=True, slots=True)
class Row:
    """One line of a bench's table."""

    case: str  # what was measured on
    figure: str  # which figure
    value: float
    bar: str  # what it must reach, in words; empty: for information
    ok: bool | None  # None: for information


@dataclass(frozen=True, slots=True)
class Size:
    """How much work a bench does."""

    trials: int = 2000  # independent trials a cell
    family: float = FAMILY_BENCH  # false-alarm probability over all cells of the bench
    full: bool = True  # False: in small, for the regular run
    seconds: float | None = None  # how long what runs in real time is watched; None: as long as the bench wants


Bench = Callable[[Size], Iterator[Row]]


def coverage_ok(hits: int, trials: int, low: float, high: float, alpha: float) -> bool:
    """Say whether a coverage between `low` and `high` is consistent with `hits` of `trials` (two-sided binomial)."""
    below = stats.binom.cdf(hits, trials, low)
    above = stats.binom.sf(hits - 1, trials, high)
    return bool(below > alpha / 2 and above > alpha / 2)


def spread_ok(errors: NDArray[np.float64], bound: float, factor: float, alpha: float) -> bool:
    """Say whether an rms of at most `factor` times `bound` is consistent with the errors (chi-square)."""
    statistic = float(np.sum(np.square(errors))) / (factor * bound) ** 2
    return bool(stats.chi2.sf(statistic, len(errors)) > alpha)


def bias_ok(errors: NDArray[np.float64], limit: float, alpha: float) -> bool:
    """Say whether a bias within +-`limit` is consistent with the errors (normal mean)."""
    excess = abs(float(np.mean(errors))) - limit
    return bool(stats.norm.sf(excess / (np.std(errors) / np.sqrt(len(errors)))) > alpha / 2)
