"""What a person is shown of an input: known signals in, known figures out."""

from __future__ import annotations

import numpy as np
import pytest
from driftwatch.stream.meter import LatestSamples, Meter, strongest_line

RATE = 48_000
TIMES = np.arange(RATE) / RATE


def sine(hz: float, size: float = 1.0) -> np.ndarray:
    return (size * np.sin(2 * np.pi * hz * TIMES)).astype(np.float32)


def test_a_sine_has_the_rms_and_peak_of_its_formula_and_its_mean_counts_not() -> None:
    (level,) = Meter(RATE, 1).read((sine(1000.0, 0.25) + 0.125).astype(np.float32)[:, None])
    assert level.rms == pytest.approx(0.25 / np.sqrt(2), rel=1e-5)
    assert level.peak == pytest.approx(0.375, rel=1e-5)
    assert level.clipped == 0


@pytest.mark.parametrize("hz", [20.0, 439.7, 1000.5, 12_345.6, 23_900.25])
def test_the_strongest_line_is_found_within_a_tenth_of_a_bin(hz: float) -> None:
    noise = 1e-3 * np.random.default_rng(0).standard_normal(RATE).astype(np.float32)
    assert strongest_line(sine(hz, 0.1) + noise, RATE) == pytest.approx(hz, abs=0.1)


def test_white_noise_has_no_line() -> None:
    """The false alarm of one second is 1e-6; of these 200, 2e-4."""
    for seed in range(200):
        noise = np.random.default_rng(seed).standard_normal(RATE).astype(np.float32)
        assert strongest_line(noise, RATE) is None


def test_every_sample_at_full_scale_is_counted_over_all_readings() -> None:
    meter = Meter(RATE, 2)
    samples = np.zeros((100, 2), np.float32)
    samples[:3, 1] = 1.0, -1.0, 1 - 2.0**-15  # the last one is the largest of 16 bits
    samples[3, 1] = 1 - 2.0**-14
    meter.read(samples)
    assert [level.clipped for level in meter.read(samples)] == [0, 6]


def test_a_tap_is_held_for_three_seconds_and_then_forgotten() -> None:
    meter = Meter(RATE, 1)
    tap = np.zeros((RATE // 2, 1), np.float32)
    tap[100] = 0.5
    rounds = [meter.read(samples)[0] for samples in (tap, *[np.zeros_like(tap)] * 8)]
    assert [level.peak for level in rounds] == [0.5] + [0.0] * 8
    assert [level.held_peak for level in rounds[:6]] == [0.5] * 6
    assert rounds[-1].held_peak == 0.0


def test_inputs_with_the_same_signal_name_the_first_of_them_and_silence_is_like_nothing() -> None:
    one, other = np.random.default_rng(0).standard_normal((2, RATE)).astype(np.float32)
    silence = np.zeros_like(one)
    levels = Meter(RATE, 6).read(np.stack([one, other, -0.1 * one, silence, other, silence], axis=1))
    assert [level.like for level in levels] == [None, None, 0, None, 1, None]


def test_before_the_first_samples_there_is_nothing_to_show() -> None:
    (level,) = Meter(RATE, 1).read(np.zeros((0, 1), np.float32))
    assert (level.rms, level.peak, level.held_peak, level.line_hz) == (0.0, 0.0, 0.0, None)


def test_the_last_seconds_are_given_once_and_in_order_across_the_end_of_the_memory() -> None:
    latest = LatestSamples(1000, 1, seconds=0.1)
    count = np.arange(1000, dtype=np.float32)
    got = []
    for begin in range(0, 960, 30):
        latest.take(count[begin : begin + 30, None], 0, False)
        if begin % 60:
            got.append(latest.fresh()[:, 0])
    np.testing.assert_array_equal(np.concatenate(got), count[:960])
    for begin in range(0, 960, 30):
        latest.take(count[begin : begin + 30, None], 0, False)
    np.testing.assert_array_equal(latest.fresh()[:, 0], count[860:960])
