"""The simulated source."""

from __future__ import annotations

import itertools
from typing import Any

import numpy as np
import pytest
from driftwatch.config import SimulatedSourceConfig
from driftwatch.records import NS, Block, TimeQuality, sample_time_ns
from driftwatch.stream.resonator import free_decay, step_of
from driftwatch.stream.simulated import STRETCH, SimulatedSource
from driftwatch.stream.source import Source
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

RATE = 4000
MODE = {"frequency_hz": 900.0, "q": 40.0, "level": 0.1}


def source(**keys: Any) -> SimulatedSource:
    return SimulatedSource(SimulatedSourceConfig(**{"name": "bench", "rate_hz": RATE, "seconds": 10.0, **keys}), 5 * NS)


def gather(of: Source, frames: int = 10_000) -> NDArray[np.float32]:
    return np.concatenate([block.samples for block in of.blocks(frames)])


FULL = source(
    inputs=2,
    noise=0.01,
    resonator=(
        MODE | {"frequency_hz": [(0.0, 900.0), (10.0, 950.0)], "impact_every_s": 0.37, "impact_peak": 0.5},
        MODE | {"frequency_hz": 300.0, "quantity": "displacement", "input": 2},
    ),
    tone=({"frequency_hz": 50.0, "level": 0.1},),
)
WHOLE = gather(FULL)


@settings(deadline=None)
@given(frames=st.integers(1, 3 * STRETCH))
def test_the_samples_are_bit_identical_however_they_are_cut(frames: int) -> None:
    frames = max(frames, 50)
    blocks = list(FULL.blocks(frames))
    assert np.array_equal(np.concatenate([block.samples for block in blocks]), WHOLE)
    assert {len(block.samples) for block in blocks[:-1]} <= {frames}


def test_blocks_say_where_they_stand() -> None:
    """Every block is float32, contiguous with the one before it, and dated by its first sample."""
    at = 0
    for block in FULL.blocks(333):
        assert (block.source, block.first_sample) == ("bench", at)
        assert block.time_ns == sample_time_ns(5 * NS, at, RATE)
        assert block.samples.dtype == np.float32
        assert block.samples.shape[1] == 2
        at += len(block.samples)
    assert at == FULL.length == 10 * RATE


def test_a_source_tells_what_it_is() -> None:
    quiet: Source = source(seed=7)
    assert (quiet.name, quiet.rate_hz, quiet.inputs, quiet.start_ns) == ("bench", RATE, 1, 5 * NS)
    assert quiet.sources == ("simulated, seed 7",)
    assert quiet.time_quality is TimeQuality.ASSUMED
    assert quiet.assumed == quiet.warnings == ()


def test_a_source_without_seconds_does_not_end() -> None:
    endless = source(seconds=None)
    assert endless.length is None
    blocks: list[Block] = list(itertools.islice(endless.blocks(STRETCH), 5))
    assert blocks[-1].first_sample == 4 * STRETCH


def test_another_seed_gives_other_samples() -> None:
    assert not np.array_equal(gather(source(resonator=(MODE,))), gather(source(resonator=(MODE,), seed=1)))


def test_a_part_added_leaves_the_others_as_they_were() -> None:
    one = gather(source(inputs=2, noise=0.1, resonator=(MODE,)))
    two = gather(source(inputs=2, noise=0.1, resonator=(MODE, MODE | {"input": 2})))
    assert np.array_equal(one[:, 0], two[:, 0])
    assert not np.array_equal(one[:, 1], two[:, 1])


def test_noise_is_independent_from_input_to_input_with_the_rms_asked_for() -> None:
    """40,000 samples: variance and correlation within six standard deviations (2e-9 each)."""
    x = gather(source(inputs=2, noise=0.2)).astype(np.float64)
    bar = 6 / np.sqrt(len(x))
    assert np.var(x, axis=0) / 0.04 == pytest.approx(1.0, abs=bar * np.sqrt(2))
    assert abs(np.mean(x[:, 0] * x[:, 1])) / 0.04 < bar


def test_nothing_configured_is_silence() -> None:
    assert not np.any(gather(source()))


def test_a_tone_has_the_rms_asked_for_and_runs_on_in_phase_through_a_sweep() -> None:
    x = gather(source(tone=({"frequency_hz": [(0.0, 100.0), (10.0, 200.0)], "level": 0.5},)))[:, 0]
    t = np.arange(len(x)) / RATE
    expected = 0.5 * np.sqrt(2) * np.sin(2 * np.pi * (100 * t + 5 * t**2))
    np.testing.assert_allclose(x, expected, rtol=0, atol=1e-7)  # a unit of float32


def test_impacts_fall_where_they_were_asked_for() -> None:
    """From the first on at the interval given, whole stretches of the grid in between or not."""
    part = MODE | {"level": 0.0, "impact_first_s": 1.0003, "impact_every_s": 4.7, "impact_peak": 0.5}
    x = gather(source(resonator=(part,)))[:, 0]
    phase = float(np.angle(step_of(900.0, 40.0, RATE).acceleration))
    expected = sum(free_decay(len(x), RATE, 900.0, 40.0, 0.5, phase, RATE * onset) for onset in (1.0003, 5.7003))
    np.testing.assert_allclose(x, expected, rtol=0, atol=1e-7)  # a unit of float32
