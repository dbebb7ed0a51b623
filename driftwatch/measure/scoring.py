"""Fisher scoring of the debiased Whittle likelihood, row by row."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from driftwatch.measure.whittle import FLOOR, LN_G, LN_P, TILT, WN, Array, Lines, Pools, expected

_LARGEST_STEP = np.array([1.0, 0.7, 1.5, 1.5, 0.7])  # in units of g for wn, else in logarithms
_SLACK = 1e-3  # loss of log-likelihood that is no reason to go back
_RIDGE = 1e-6  # lines' worth of information that keeps an idle parameter's equation solvable


@dataclass(frozen=True, slots=True)
class Prior:
    """Weak Gaussian knowledge of the floor."""

    floor: Array  # shape (rows,): mean of f
    floor_precision: float
    tilt_precision: float  # of d, whose mean is 0

    def rows(self, index: NDArray[np.intp]) -> Prior:
        """Return some of the rows."""
        return Prior(self.floor[index], self.floor_precision, self.tilt_precision)


@dataclass(slots=True)
class Optimum:
    """The result of `maximise`."""

    theta: Array  # shape (rows, 5)
    likelihood: Array  # shape (rows,): log-likelihood, the priors' part included
    information: Array  # shape (rows, 5, 5): Fisher information of wn/g, ln g, ln P, f, d, priors included
    g: Array  # shape (rows,): the g by which wn was divided
    converged: NDArray[np.bool_]  # shape (rows,)


def maximise(theta: Array, pools: Pools, prior: Prior, lines: Lines, tolerance: float, most: int) -> Optimum:
    """Climb to the optimum by Fisher scoring with step control.

    A row is done, and no longer touched, when the next step would be shorter than `tolerance` standard deviations;
    that step is still taken.

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
    result = _blank(theta)
    active = np.arange(theta.shape[0])
    base, best = theta.copy(), np.full(theta.shape[0], -np.inf)
    step = np.zeros_like(theta)
    for evaluation in range(most):
        trial = _inside(base + step, lines)
        likelihood, score, information = _evaluate(trial, pools, prior)
        better = likelihood >= best - _SLACK
        step, decrement = _next_step(trial, step, score, information, better)
        base = np.where(better[:, None], trial, base)
        best = np.where(better, likelihood, best)
        _keep(result, active, better, base, best, information)
        done = better & (decrement < tolerance**2)
        if evaluation == most - 1 or np.all(done):
            result.theta[active[done]] = _inside(base + step, lines)[done]
            result.converged[active[done]] = True
            break
        if np.any(done):
            result.theta[active[done]] = _inside(base + step, lines)[done]
            result.converged[active[done]] = True
            rest = np.flatnonzero(~done)
            active, base, best, step = active[rest], base[rest], best[rest], step[rest]
            pools, prior = pools.rows(rest), prior.rows(rest)
    return result


def _blank(theta: Array) -> Optimum:
    rows = theta.shape[0]
    return Optimum(
        theta.copy(), np.full(rows, -np.inf), np.zeros((rows, 5, 5)), np.ones(rows), np.zeros(rows, dtype=np.bool_)
    )


def _keep(
    result: Optimum, active: NDArray[np.intp], better: NDArray[np.bool_], base: Array, best: Array, information: Array
) -> None:
    rows = active[better]
    result.theta[rows] = base[better]
    result.likelihood[rows] = best[better]
    result.information[rows] = information[better]
    result.g[rows] = np.exp(base[better, LN_G])


def _evaluate(theta: Array, pools: Pools, prior: Prior) -> tuple[Array, Array, Array]:
    """Return the penalised log-likelihood, its gradient by wn/g, ln g, ln P, f, d, and the Fisher information."""
    model, jacobian = expected(theta, pools)
    ratio = pools.power / model
    likelihood = -np.sum(pools.count * (np.log(model) + ratio), axis=1)
    weighted = jacobian * pools.count[:, None, :]
    score = np.matmul(weighted, (ratio - 1.0)[:, :, None])[:, :, 0]
    information = np.matmul(weighted, np.ascontiguousarray(jacobian.transpose(0, 2, 1)))
    floor = theta[:, FLOOR] - prior.floor
    tilt = theta[:, TILT]
    score[:, FLOOR] -= prior.floor_precision * floor
    score[:, TILT] -= prior.tilt_precision * tilt
    information[:, FLOOR, FLOOR] += prior.floor_precision
    information[:, TILT, TILT] += prior.tilt_precision
    information[:, range(5), range(5)] += _RIDGE
    likelihood -= 0.5 * prior.floor_precision * np.square(floor) + 0.5 * prior.tilt_precision * np.square(tilt)
    return likelihood, score, information


def _next_step(
    trial: Array, step: Array, score: Array, information: Array, better: NDArray[np.bool_]
) -> tuple[Array, Array]:
    """Return the next step in the parameters' own units, and its squared length in standard deviations."""
    newton = np.linalg.solve(information, score[:, :, None])[:, :, 0]
    decrement = np.sum(newton * score, axis=1)
    newton = np.clip(newton, -_LARGEST_STEP, _LARGEST_STEP)
    newton[:, WN] *= np.exp(trial[:, LN_G])
    return np.where(better[:, None], newton, 0.25 * step), decrement


def _inside(theta: Array, lines: Lines) -> Array:
    """Keep parameters where the model means something: within a band's width of the band."""
    width = lines.high - lines.low
    theta[:, WN] = np.clip(theta[:, WN], max(lines.low - 0.5 * width, 0.1 * lines.low), lines.high + 0.5 * width)
    theta[:, LN_G] = np.clip(theta[:, LN_G], np.log(0.02 / lines.seconds), np.log(2.0 * width))
    theta[:, LN_P] = np.clip(theta[:, LN_P], -60.0, 60.0)
    theta[:, FLOOR] = np.clip(theta[:, FLOOR], -40.0, 10.0)
    theta[:, TILT] = np.clip(theta[:, TILT], -5.0, 5.0)
    return theta
