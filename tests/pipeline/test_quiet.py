"""What the pipeline takes for quiet before an impact: clear of other impacts, of gaps, and of how the samples came."""

from __future__ import annotations

import itertools
from typing import Any

import numpy as np
import pytest
from driftwatch.config import loads
from driftwatch.measure import ringdown
from driftwatch.measure.decay_spread import Quiet
from driftwatch.pipeline.channel import ChannelLine
from driftwatch.pipeline.impacts import Impact, Impacts
from driftwatch.stream.resonator import free_decay
from numpy.typing import NDArray

RATE_HZ = 4096
CONFIG = """
schema = 1
[[channel]]
name = "near"
[[mode]]
name = "rocking"
channel = "near"
search_hz = [560.0, 680.0]
methods = ["ringdown"]
window_s = 2.0
"""
GUARD_S = ringdown.GUARD / 120.0
IMPACTS_S = (4.0, 5.0, 7.5)
GAP_S = (6.2, 6.4)
RMS = 0.01  # of white noise at the full rate


def samples(impacts_s: tuple[float, ...] = IMPACTS_S) -> NDArray[np.float32]:
    count = 10 * RATE_HZ
    found = np.random.default_rng(0).normal(0.0, RMS, count)
    for at in impacts_s:
        found += free_decay(count, RATE_HZ, 620.0, 50.0, 1.0, 0.3, at * RATE_HZ)
    return found.astype(np.float32)


def quiets(monkeypatch: pytest.MonkeyPatch, size: int, impacts_s: tuple[float, ...] = IMPACTS_S) -> list[Quiet]:
    """Feed the samples in blocks of one size, without those of the gap; return the quiet that each fit was given."""
    found: list[Quiet] = []
    fit = ringdown.fit

    def noted(*arguments: object) -> ringdown.RingdownFit:
        assert isinstance(arguments[-1], Quiet)
        found.append(arguments[-1])
        return fit(*arguments)  # type: ignore[arg-type]

    config = loads(CONFIG)
    line = ChannelLine(config.channel[0], config.mode, RATE_HZ, 0)
    gap = tuple(round(at * RATE_HZ) for at in GAP_S)
    whole = samples(impacts_s)
    with monkeypatch.context() as patch:
        patch.setattr(ringdown, "fit", noted)
        for begin, end in ((0, gap[0]), (gap[1], len(whole))):
            edges = [*range(begin, end, size), end]
            for first, last in itertools.pairwise(edges):
                line.push(first, whole[first:last, None])
        line.finish()
    return found


def test_quiet_lies_between_whatever_came_before_and_the_impact(monkeypatch: pytest.MonkeyPatch) -> None:
    """A window's length at most; of the second impact less, for the first one rings; of the third what a gap leaves."""
    found = quiets(monkeypatch, 10 * RATE_HZ)
    seconds = [len(quiet.stream) / quiet.rate_hz for quiet in found]
    slack = 0.05  # an onset is known to a reciprocal bandwidth, and the rest is whole baseband samples
    assert seconds[0] == pytest.approx(2.0 - GUARD_S, abs=slack)
    assert 0.3 < seconds[1] < 1.0 - 2.0 * GUARD_S
    assert seconds[2] == pytest.approx(IMPACTS_S[2] - GAP_S[1] - 2.0 * GUARD_S, abs=slack)


def test_quiet_holds_the_noise_and_nothing_else(monkeypatch: pytest.MonkeyPatch) -> None:
    """White noise's power in a stream of amplitude A for a tone of amplitude A; 6 standard deviations of 30 to 200."""
    for quiet in quiets(monkeypatch, 10 * RATE_HZ):
        hz = np.abs(np.fft.fftfreq(len(quiet.stream), 1.0 / quiet.rate_hz))
        inside = np.abs(np.fft.fft(quiet.stream))[hz < 55.0] ** 2 / len(quiet.stream)
        density = float(np.mean(inside)) / quiet.rate_hz / 2.0
        assert density == pytest.approx(RMS**2 * 2.0 / RATE_HZ, rel=6.0 / np.sqrt(len(inside)))


@pytest.mark.parametrize("size", [333, 4096])
def test_quiet_does_not_depend_on_how_the_samples_came(monkeypatch: pytest.MonkeyPatch, size: int) -> None:
    whole, cut = quiets(monkeypatch, 10 * RATE_HZ), quiets(monkeypatch, size)
    assert len(whole) == len(cut) == len(IMPACTS_S)
    for one, other in zip(whole, cut, strict=True):
        assert np.array_equal(one.stream, other.stream)


@pytest.mark.parametrize("delay_s", [0.195, 0.2, 0.205])
def test_a_blow_on_a_decay_s_very_end_settles_at_the_level_before_both(
    monkeypatch: pytest.MonkeyPatch, delay_s: float
) -> None:
    """The few samples between them are no level to come back to: the first one's serves, that of the noise."""
    levels: list[float] = []
    new = Impacts._new

    def noted(self: Impacts, *arguments: Any) -> Impact:
        impact = new(self, *arguments)
        levels.append(impact.before)
        return impact

    monkeypatch.setattr(Impacts, "_new", noted)
    quiets(monkeypatch, 10 * RATE_HZ, (3.0, 3.0 + delay_s, 9.0))
    assert len(levels) == 4  # the first is the begin of the samples
    assert levels[2] == levels[1]
