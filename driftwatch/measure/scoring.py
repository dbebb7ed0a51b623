"""Fisher scoring of the debiased Whittle likelihood, row by row."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Self

import numpy as np
from numpy.typing import NDArray

from driftwatch.measure.whittle import FLOOR, LN_G, WN, Array, Lines, Pools, expected

_LARGEST_STEP = np.array([1.0, 0.7, 1.5, 1.5, 0.7])  # in units of g for wn, else in logarithms
_PATIENCE, _DAMPING = 4, 0.6  # evaluations after which steps are shortened: a weak floor may overshoot for ever
_SLACK = 1e-3  # loss of log-likelihood that is no reason to go back
_DIAGONAL = np.arange(5)
_ROUNDING = 1e-9  # share of the information that rounding may take: keeps a far-off trial's equations solvable
_RIDGE = 1e-6  # lines' worth of information that keeps an idle parameter's equation solvable


class Prior:
    """Weak Gaussian knowledge of the floor's f and d.

    Attributes
    ----------
    mean
        Shape (rows, 2).
    precision
        Shape (2,), one over the variances.
    information
        Shape (5, 5), what it adds to the Fisher information.
    """

    __slots__ = ("information", "mean", "precision")

    def __init__(self, mean: Array, precision: Array) -> None:
        self.mean = mean
        self.precision = precision
        self.information = np.diag(np.concatenate(([_RIDGE] * 3, precision)))

    def rows(self, index: NDArray[np.intp]) -> Prior:
        """Return some of the rows."""
        return Prior(self.mean[index], self.precision)


@dataclass(slots=True)
class Optimum:
    """The result of `maximise`."""

    theta: Array  # shape (rows, 5)
    likelihood: Array  # shape (rows,): log-likelihood, the priors' part included
    information: Array  # shape (rows, 5, 5): Fisher information of wn/g, ln g, ln P, f, d, priors included
    g: Array  # shape (rows,): the g by which wn was divided
    model: Array  # shape (rows, pools): expected periodogram
    converged: NDArray[np.bool_]  # shape (rows,)


def maximise(theta: Array, pools: Pools, prior: Prior, lines: Lines, tolerance: float, most: int) -> Optimum:
    """Climb to the optimum by Fisher scoring with step control.

    A row is done, and no longer touched, when the next step of wn and ln g would be shorter than `tolerance` standard
    deviations; that step is still taken.

    Parameters
    ----------
    theta
        Shape (rows, 5), where to begin.
    pools, prior, lines
        The data, what is known of the floor, and the search band.
    tolerance
        In standard deviations of the estimate.
    most
        Evaluations of the model at most.
    """
    result = _blank(theta, pools)
    limits = _limits(lines)
    climb = _Climb.at(theta, pools, prior)
    for evaluation in range(1, most + 1):
        point = _evaluate(climb.trial, climb.pools, climb.prior)
        done = climb.advance(point, limits, tolerance, _DAMPING if evaluation > _PATIENCE else 1.0)
        last = evaluation == most or bool(np.all(done))
        ending = np.arange(done.size) if last else np.flatnonzero(done)
        if ending.size:
            _keep(result, climb, point, done, ending)
        if last:
            break
        if ending.size:
            climb = climb.rows(np.flatnonzero(~done))
    return result


@dataclass(frozen=True, slots=True)
class _Point:
    """The likelihood at a trial point of each row, the priors counted in."""

    likelihood: Array  # shape (rows,): -sum K (ln E + I/E - 1)
    model: Array  # shape (rows, pools)
    score: Array  # shape (rows, 5): its gradient by wn/g, ln g, ln P, f, d
    information: Array  # shape (rows, 5, 5)


@dataclass(slots=True)
class _Climb:
    """Where the rows that are not done stand."""

    active: NDArray[np.intp]  # their numbers
    trial: Array  # parameters to look at next
    base: Array  # the best so far
    step: Array  # from there to the trial
    best: Array  # log-likelihood at the base
    pools: Pools
    prior: Prior

    @classmethod
    def at(cls, theta: Array, pools: Pools, prior: Prior) -> Self:
        """Begin."""
        nothing = np.zeros_like(theta)
        rows = theta.shape[0]
        return cls(np.arange(rows), theta, nothing, nothing, np.full(rows, -np.inf), pools, prior)

    def rows(self, index: NDArray[np.intp]) -> Self:
        """Return some of the rows."""
        return type(self)(
            active=self.active[index],
            trial=self.trial[index],
            base=self.base[index],
            step=self.step[index],
            best=self.best[index],
            pools=self.pools.rows(index),
            prior=self.prior.rows(index),
        )

    def advance(
        self, point: _Point, limits: tuple[Array, Array], tolerance: float, damping: float
    ) -> NDArray[np.bool_]:
        """Accept the trial or draw back from it, step on, and say which rows are done."""
        better = point.likelihood >= self.best - _SLACK
        newton, length = _newton(self.trial, self.prior, point)
        worse = ~better[:, None]
        self.step = np.where(worse, 0.25 * self.step, damping * newton)
        self.base = np.where(worse, self.base, self.trial)
        self.best = np.where(better, point.likelihood, self.best)
        self.trial = np.minimum(np.maximum(self.base + self.step, limits[0]), limits[1])
        return better & (length < tolerance**2)


def _keep(result: Optimum, climb: _Climb, point: _Point, done: NDArray[np.bool_], ending: NDArray[np.intp]) -> None:
    """Write down the rows that end here."""
    rows = climb.active[ending]
    result.theta[rows] = climb.trial[ending]
    result.likelihood[rows] = climb.best[ending]
    result.information[rows] = point.information[ending]
    result.g[rows] = np.exp(climb.base[ending, LN_G])
    result.model[rows] = point.model[ending]
    result.converged[rows] = done[ending]


def _blank(theta: Array, pools: Pools) -> Optimum:
    rows = theta.shape[0]
    return Optimum(
        theta=np.empty_like(theta),
        likelihood=np.empty(rows),
        information=np.empty((rows, 5, 5)),
        g=np.empty(rows),
        model=np.empty_like(pools.power),
        converged=np.empty(rows, dtype=np.bool_),
    )


def _evaluate(theta: Array, pools: Pools, prior: Prior) -> _Point:
    """Return likelihood, model, gradient and Fisher information at `theta`."""
    model, columns = expected(theta, pools)
    np.subtract(pools.power, model, out=columns[5])
    columns *= pools.root_weight / model
    terms = np.log(model)
    terms *= pools.weight
    terms += pools.root_weight * columns[5]
    likelihood = -np.sum(terms, axis=1)
    products = np.matmul(columns.transpose(1, 0, 2), columns.transpose(1, 2, 0))
    information = products[:, :5, :5] + prior.information
    information[:, _DIAGONAL, _DIAGONAL] *= 1.0 + _ROUNDING
    away = theta[:, FLOOR:] - prior.mean
    pull = away * prior.precision
    score = products[:, :5, 5].copy()
    score[:, FLOOR:] -= pull
    likelihood -= 0.5 * np.sum(away * pull, axis=1)
    return _Point(likelihood, model, score, information)


def _newton(theta: Array, prior: Prior, point: _Point) -> tuple[Array, Array]:
    """Return the scoring step in the parameters' own units, and its squared length in standard deviations.

    Where the data pull the floor down to nothing its Fisher information vanishes before its gradient does; the
    gradient is then part of the curvature, for d2 ln E/df2 does not vanish in residuals of one sign.
    """
    score, information = point.score, point.information
    curved = information.copy()
    pull = (theta[:, FLOOR] - prior.mean[:, 0]) * prior.precision[0]
    curved[:, FLOOR, FLOOR] += np.maximum(0.0, -(score[:, FLOOR] + pull))
    step = np.linalg.solve(curved, score[:, :, None])[:, :, 0]
    squares = np.square(step[:, :2])
    length = squares[:, 0] * information[:, 0, 0] + squares[:, 1] * information[:, 1, 1]
    step = np.minimum(np.maximum(step, -_LARGEST_STEP), _LARGEST_STEP)
    step[:, WN] *= np.exp(theta[:, LN_G])
    return step, length


def _limits(lines: Lines) -> tuple[Array, Array]:
    """Return least and greatest parameters: where the model means something, within a band's width of the band."""
    width = lines.high - lines.low
    least = (max(lines.low - 0.5 * width, 0.1 * lines.low), np.log(0.02 / lines.seconds), -60.0, -40.0, -5.0)
    greatest = (lines.high + 0.5 * width, np.log(2.0 * width), 60.0, 10.0, 5.0)
    return np.array(least), np.array(greatest)
