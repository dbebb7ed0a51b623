"""The CUSUM of innovations: quiet on what is consistent, quick on what is not."""

import numpy as np
from driftwatch.records import NS
from driftwatch.track.consistency import REFERENCE, THRESHOLD, Cusum


def run_length(values):
    cusum = Cusum()
    for k, value in enumerate(values):
        if cusum.add(value, k * NS) is not None:
            return k + 1
    return None


def test_a_shift_is_reported_with_its_size_and_its_begin():
    cusum = Cusum()
    for k in range(20):
        assert cusum.add(0.1 if k % 2 else -0.1, k * NS) is None
    found = [drifted for k in range(20, 30) if (drifted := cusum.add(-2.0, k * NS)) is not None]
    assert found[0].mean == -2.0
    assert found[0].since_ns == 20 * NS


def test_both_sides_take_the_same_time():
    shift = [1.0] * 50
    expected = int(THRESHOLD / (1.0 - REFERENCE)) + 1
    assert run_length(shift) == run_length([-value for value in shift]) == expected


def test_after_a_signal_it_begins_anew():
    cusum = Cusum()
    signals = [k for k in range(40) if cusum.add(2.0, k * NS) is not None]
    assert len(signals) > 1
    assert len(set(np.diff(signals))) == 1


def test_false_signals_are_as_rare_as_stated():
    """Mean run of unit noise: 370 within 6 standard errors of 400 runs (false alarm 2e-9), a run being exponential."""
    lengths = [run_length(np.random.default_rng(seed).standard_normal(20_000)) for seed in range(400)]
    assert None not in lengths
    assert abs(np.mean(lengths) - 370.0) < 6.0 * 370.0 / np.sqrt(400)
