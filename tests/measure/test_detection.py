"""Start and detection: the bump is found, the floor is fitted, noise does not pass for a mode."""

from __future__ import annotations

import numpy as np
import pytest
from driftwatch.measure import detection, whittle
from driftwatch.measure.whittle import LN_G, WN
from scipy import optimize

from benchmarks import falsestart
from benchmarks.bars import FAMILY_REGULAR, Size

LINES = whittle.lines_of(1000, 250.0, 900.0, (820.0, 980.0), 0)


@pytest.mark.parametrize("q", [12.0, 45.0, 300.0])
@pytest.mark.parametrize("hz", [840.0, 900.0, 951.0])
def test_search_begins_at_the_mode(hz: float, q: float) -> None:
    """At 10 dB the start lies within 1.5 half-widths of fn and within a factor 4 of g, in each of 50 windows."""
    wn = 2 * np.pi * hz
    g = wn / (2 * q)
    theta = np.array([[wn, np.log(g), 0.0, 0.0, 0.0]])
    theta[0, 3] = np.log(0.1 / (LINES.high - LINES.low) * 2 * np.pi)
    power = whittle.on_lines(theta, LINES, whittle.Quiet.whole(1)) * np.random.default_rng(0).exponential(
        size=(50, LINES.count)
    )
    begin = detection.start(whittle.cumulated(power / np.mean(power, axis=1, keepdims=True)), LINES)
    assert np.max(np.abs(begin[:, WN] - wn)) < 1.5 * g
    assert np.max(np.abs(begin[:, LN_G] - np.log(g))) < np.log(4.0)


def test_floor_alone_is_as_likely_as_its_optimum() -> None:
    """In sloping noise the moments' estimate loses under 0.1 of log-likelihood against a general optimiser."""
    place = (LINES.omega - LINES.low) / (LINES.high - LINES.low)
    power = (0.8 + 0.4 * place) * np.random.default_rng(0).exponential(size=(5, LINES.count))
    wn = np.full(5, 2 * np.pi * 900.0)
    pools = whittle.pool(whittle.cumulated(power), LINES, whittle.Quiet.whole(5), wn, np.full(5, 60.0))
    got = detection.floor_only(pools, 1e-9)
    for row in range(5):

        def cost(p: np.ndarray, row: int = row) -> float:
            floor = np.exp(p[0]) * pools.upper[row] + np.exp(p[1]) * pools.lower[row]
            return float(np.sum(pools.count[row] * (np.log(floor) + pools.power[row] / floor - 1.0)))

        best = -optimize.minimize(cost, np.zeros(2), method="Nelder-Mead").fun
        assert best - 0.1 < got[row] < best + 1e-4


def test_noise_starts_no_track_in_small() -> None:
    """The bench of false starts with 2000 windows of each noise: no bar is refuted at 1e-6."""
    rows = list(falsestart.run(Size(trials=200, family=FAMILY_REGULAR, full=False)))
    assert [row for row in rows if row.ok is False] == []
