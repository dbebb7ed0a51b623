"""The debiased model of a resonance's periodogram, against sums and derivatives that know nothing of it."""

from __future__ import annotations

import numpy as np
import pytest
from driftwatch.measure import whittle
from driftwatch.measure.whittle import FLOOR, LN_G, LN_P, TILT, WN, Array, Lines

RATE, CENTRE, SEARCH = 400.0, 900.0, (820.0, 980.0)


def lines(length: int, power: int = 0) -> Lines:
    return whittle.lines_of(length, RATE, CENTRE, SEARCH, power)


def parameters(g: float) -> Array:
    theta = np.empty((3, 5))
    theta[:, WN] = 2 * np.pi * np.array([899.7, 873.0, 931.3])
    theta[:, LN_G] = np.log(g * np.array([1.0, 0.7, 1.6]))
    theta[:, LN_P] = (-1.0, 0.0, 0.5)
    theta[:, FLOOR] = (-3.0, -1.0, 0.0)
    theta[:, TILT] = (0.1, -0.2, 0.3)
    return theta


@pytest.mark.parametrize(("length", "g"), [(1600, 60.0), (160, 8.0), (120, 2.0)])
def test_expectation_is_that_of_the_complex_formula(length: int, g: float) -> None:
    """E = 2 P Re{ (1/a) [1 - (1 - exp(-aT))/(aT)] }, a = g + iu, holds to rounding, in short windows too."""
    grid, theta = lines(length), parameters(g)
    theta[:, FLOOR] = -60.0
    wn, decay = theta[:, WN, None], np.exp(theta[:, LN_G, None])
    a = decay + 0.5j * (grid.omega - wn**2 / grid.omega)
    seconds = grid.seconds
    phase = np.exp(-decay * seconds - 1j * (grid.omega - np.sqrt(wn**2 - decay**2)) * seconds)
    wanted = 2 * np.exp(theta[:, LN_P, None]) * np.real((1 - (1 - phase) / (a * seconds)) / a)
    # the phase psi is a difference of numbers near 1e4 rad: it is known to some 1e-12
    np.testing.assert_allclose(whittle.on_lines(theta, grid, whittle.Quiet.whole(len(theta))), wanted, rtol=1e-10)


@pytest.mark.parametrize("gt", [30.0, 8.0, 2.0])
def test_expectation_is_that_of_a_sampled_window(gt: float) -> None:
    """The exact mean periodogram of a window, summed from the autocovariance, is met near the resonance.

    It differs by the aliases of the sampled stream, which the zoom's filter removes, and by the warp, which the
    baseband autocovariance exp(-g t + i (wd - wc) t) does not have: both are of the order of a per cent of the tail.
    """
    rate, length = 4000.0, 4000
    g = gt * rate / length
    grid = whittle.lines_of(length, rate, 20000.0, (19950.0, 20050.0), 0)
    wn = 2 * np.pi * 20003.3
    lag = np.arange(1, length)
    covariance = (1 - lag / length) * np.exp((-g + 1j * (np.sqrt(wn**2 - g**2) - grid.centre)) * lag / rate)
    turns = np.exp(-1j * np.outer(grid.omega - grid.centre, lag / rate))
    wanted = (1.0 + 2.0 * np.real(turns @ covariance)) / rate
    theta = np.array([[wn, np.log(g), 0.0, -60.0, 0.0]])
    assert np.max(np.abs(whittle.on_lines(theta, grid, whittle.Quiet.whole(len(theta)))[0] - wanted)) < 2e-3 * np.max(
        wanted
    )


@pytest.mark.parametrize(("length", "g", "power"), [(1600, 60.0, -1), (160, 8.0, 0), (120, 2.0, 1)])
def test_derivatives_are_those_of_the_expectation(length: int, g: float, power: int) -> None:
    """Analytic derivatives agree with central differences, whose own error is near 1e-9.

    In short windows psi is taken to turn with wn alone and as fast as wn, a neglect of the order of g/wn.
    """
    grid, theta = lines(length, power), parameters(g)
    sums = whittle.cumulated(np.random.default_rng(0).exponential(size=(3, grid.count)))
    pools = whittle.pool(sums, grid, whittle.Quiet.whole(len(theta)), theta[:, WN], 1.2 * np.exp(theta[:, LN_G]))
    _, columns = whittle.expected(theta, pools)
    for column in range(5):
        step = np.zeros((3, 5))
        step[:, column] = 1e-5 * (np.exp(theta[:, LN_G]) if column == WN else 1.0)
        difference = whittle.expected(theta + step, pools)[0] - whittle.expected(theta - step, pools)[0]
        allowed = 1e-8 if length == 1600 else 2 * g / theta[0, WN]
        assert np.max(np.abs(difference / 2e-5 - columns[column])) < allowed * np.max(np.abs(columns[column]))


@pytest.mark.parametrize("g", [5.0, 60.0])
def test_pooling_loses_no_line_and_moves_no_expectation(g: float) -> None:
    """Pools share out all lines, and the model of a pool is the mean of its lines.

    2e-3 is left by the fourth-order term in pools of three lines beside the narrowest resonance, 4.5 lines wide.
    """
    grid, theta = lines(1600), parameters(g)
    pools = whittle.pool(
        whittle.cumulated(whittle.on_lines(theta, grid, whittle.Quiet.whole(len(theta)))),
        grid,
        whittle.Quiet.whole(len(theta)),
        theta[:, WN],
        np.exp(theta[:, LN_G]),
    )
    assert np.all(np.sum(pools.count, axis=1) == grid.count)
    filled = pools.count > 0
    model, _ = whittle.expected(theta, pools)
    np.testing.assert_allclose(model[filled], pools.power[filled], rtol=2e-3)


def test_few_lines_are_not_pooled() -> None:
    """Where there are no more lines than pools each line is a pool of its own."""
    grid, theta = lines(60), parameters(20.0)
    power = np.random.default_rng(0).exponential(size=(3, grid.count))
    pools = whittle.pool(
        whittle.cumulated(power), grid, whittle.Quiet.whole(len(theta)), theta[:, WN], np.exp(theta[:, LN_G])
    )
    assert grid.count <= whittle.POOLS
    np.testing.assert_allclose(pools.power, power, rtol=1e-12, atol=1e-13)  # differences of a running sum near 50


@pytest.mark.parametrize("length", [1000, 999])
def test_lines_lie_inside_the_search_band_on_the_windows_own_grid(length: int) -> None:
    """Every line is a Fourier frequency of the window inside the band, and none is left out."""
    grid = lines(length)
    every = CENTRE + np.fft.fftfreq(length, 1 / RATE)
    inside = np.sort(every[(every >= SEARCH[0]) & (every <= SEARCH[1])])
    np.testing.assert_allclose(grid.omega / (2 * np.pi), inside, rtol=1e-12)
