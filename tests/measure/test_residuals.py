"""The residual test against exponentials that a random generator made."""

from __future__ import annotations

import numpy as np
import pytest
from driftwatch.measure import residuals, whittle
from scipy import stats

LINES = whittle.lines_of(1000, 250.0, 900.0, (820.0, 980.0), 0)


def p_values(scale: np.ndarray, rows: int = 400) -> np.ndarray:
    """p-values of exponentials of mean `scale` under a flat model of level 1."""
    power = scale * np.random.default_rng(0).exponential(size=(rows, LINES.count))
    pools = whittle.pool(
        whittle.cumulated(power),
        LINES,
        whittle.Quiet.whole(rows),
        np.full(rows, 2 * np.pi * 900.0),
        np.full(rows, 60.0),
    )
    return residuals.p_value(np.max(power, axis=1), LINES.count, np.ones_like(pools.power), pools)


def test_moments_of_a_pools_deviance_are_those_of_gamma_samples() -> None:
    """Mean and variance of 2 K (r - 1 - ln r) agree with 200,000 samples within six standard errors."""
    mean, variance = residuals._moments(32)
    for count in (1, 2, 5, 20):
        ratio = np.random.default_rng(count).gamma(count, 1.0 / count, 200_000)
        deviance = 2 * count * (ratio - 1 - np.log(ratio))
        assert abs(np.mean(deviance) - mean[count]) < 6 * stats.sem(deviance)
        squares = np.square(deviance - mean[count])
        assert abs(np.mean(squares) - variance[count]) < 6 * stats.sem(squares)


def test_exponential_residuals_pass() -> None:
    """Where nothing was fitted the four parameters taken off make p too small, but fewer than 15 % are under 0.05."""
    assert np.mean(p_values(np.ones(LINES.count)) < 0.05) < 0.15


@pytest.mark.parametrize("shape", ["line", "hump"])
def test_departures_are_seen(shape: str) -> None:
    """One line twentyfold, or a fifth of the band raised to 1.6, fails at 0.01 in four windows of five at least."""
    scale = np.ones(LINES.count)
    if shape == "line":
        scale[400] = 100.0
    else:
        scale[250:380] = 1.6
    assert np.mean(p_values(scale) < 0.01) > 0.8
