"""Rate estimate and wall clock, against simulated clocks whose truth is known."""

from __future__ import annotations

import math

import numpy as np
import pytest
from driftwatch.records import NS, Fault, sample_time_ns
from driftwatch.stream.arrival import ArrivalJudge
from driftwatch.stream.clock import BIN_NS, WANDER_PER_SQRT_S, RateEstimate, WallClock, clock_record

RATE = 48_000
T0 = 7 * 86_400 * NS + 123_456_789
UTC0 = 1_790_000_000 * NS


def arrivals(
    rng: np.random.Generator, seconds: float, deviation: float, *, wander: bool = False, jitter_s: float = 0.003
) -> tuple[list[int], list[int], float]:
    """Return for every second a count, its arrival after the least of 50 exponential delays, and the last deviation."""
    n = int(seconds)
    steps = rng.normal(0.0, WANDER_PER_SQRT_S, n) if wander else np.zeros(n)
    relative = deviation + np.cumsum(steps)
    count = np.floor(np.cumsum(RATE * (1.0 + relative))).astype(np.int64)
    late = rng.exponential(jitter_s / 50, n)
    return count.tolist(), (T0 + (np.arange(1, n + 1) + late) * NS).astype(np.int64).tolist(), float(relative[-1])


def estimate(counts: list[int], arrived: list[int]) -> RateEstimate:
    rate = RateEstimate(RATE)
    for count, at in zip(counts, arrived, strict=True):
        rate.count(count, at)
    return rate


def errors(*, runs: int, seconds: float, wander: bool, jitter_s: float) -> np.ndarray:
    """Return errors in units of the stated uncertainty."""
    out = []
    for seed in range(runs):
        rng = np.random.default_rng(seed)
        counts, arrived, truth = arrivals(
            rng, seconds, float(rng.uniform(-3e-4, 3e-4)), wander=wander, jitter_s=jitter_s
        )
        rate = estimate(counts, arrived)
        assert rate.deviation_ppm is not None and rate.deviation_std_ppm is not None
        out.append((rate.deviation_ppm - 1e6 * truth) / rate.deviation_std_ppm)
    return np.array(out)


@pytest.mark.parametrize("jitter_s", [0.003, 0.2, 1.0])
@pytest.mark.parametrize("seconds", [45, 300, 1500])
def test_stated_uncertainty_of_the_rate_covers_its_error(seconds: int, jitter_s: float) -> None:
    """95 % intervals hold the truth in at least 95 % of 200 runs with a steady clock; false alarm 1e-6.

    They hold it more often where arrivals are good: the noise is guessed at 2 ms until bins have shown less.
    """
    outside = int(np.sum(np.abs(errors(runs=200, seconds=seconds, wander=False, jitter_s=jitter_s)) > 1.96))
    assert outside <= 28  # P(X > 28) = 3e-7 for X binomial(200, 0.05)


def test_stated_uncertainty_covers_a_clock_that_wanders() -> None:
    """The same with a rate in a random walk of the size that the estimate assumes; and it is not far too wide."""
    z = errors(runs=200, seconds=4000, wander=True, jitter_s=0.1)
    assert int(np.sum(np.abs(z) > 1.96)) <= 28
    assert 0.5 < math.sqrt(float(np.mean(z**2))) < 1.3


def test_rate_is_known_to_a_tenth_ppm_after_hours_and_follows_a_week_of_wander() -> None:
    rng = np.random.default_rng(0)
    counts, arrived, truth = arrivals(rng, 4 * 86_400, -2.7e-4, wander=True)
    rate = estimate(counts, arrived)
    assert rate.deviation_ppm == pytest.approx(1e6 * truth, abs=0.5)
    assert rate.deviation_std_ppm is not None and rate.deviation_std_ppm < 0.15
    assert rate.span_s == pytest.approx(4 * 86_400, rel=0.11)


def test_nothing_is_told_before_half_a_minute() -> None:
    rate = RateEstimate(RATE)
    for second in range(30):
        rate.count(second * RATE, T0 + second * NS)
    assert rate.deviation_ppm is None and rate.deviation_std_ppm is None and rate.noise_s is None


def test_a_gap_of_any_length_moves_no_rate() -> None:
    """A length taken from the clock may be wrong by a block; said to the estimate, it leaves the rate alone."""
    rng = np.random.default_rng(1)
    counts, arrived, truth = arrivals(rng, 3000, 1.5e-4)
    rate = RateEstimate(RATE)
    for i, (count, at) in enumerate(zip(counts, arrived, strict=True)):
        if i in (1000, 2000):
            rate.gap()
        rate.count(count + 1000 * (i >= 1000) - 4000 * (i >= 2000), at)
    assert rate.deviation_ppm is not None and rate.deviation_std_ppm is not None
    assert abs(rate.deviation_ppm - 1e6 * truth) < 4 * rate.deviation_std_ppm < 2.0


def test_a_loss_that_nobody_noticed_spoils_the_rate_for_no_longer_than_a_minute() -> None:
    rng = np.random.default_rng(2)
    counts, arrived, truth = arrivals(rng, 3000, 1.5e-4)
    rate = estimate([count - 500 * (i >= 2900) for i, count in enumerate(counts)], arrived)
    assert rate.deviation_ppm == pytest.approx(1e6 * truth, abs=1.0)


def test_a_busy_quarter_of_an_hour_does_not_spoil_the_rate() -> None:
    """Every callback late by 5 to 50 ms in one bin of five."""
    rng = np.random.default_rng(3)
    counts, arrived, truth = arrivals(rng, 3000, -1e-4)
    late = [
        at + int(rng.uniform(5e6, 5e7)) * ((at - T0) // BIN_NS % 5 == 0 and i < 1900) for i, at in enumerate(arrived)
    ]
    rate = estimate(counts, late)
    assert rate.deviation_ppm is not None and rate.deviation_std_ppm is not None
    assert abs(rate.deviation_ppm - 1e6 * truth) < 4 * rate.deviation_std_ppm < 20.0


@pytest.mark.parametrize("start", [2**31, 2**32, 2**53, 2**62])
def test_rate_is_the_same_wherever_the_count_starts(start: int) -> None:
    counts, arrived, _ = arrivals(np.random.default_rng(4), 600, 1e-4)
    here = estimate(counts, arrived)
    there = estimate([count + start - 300 * RATE for count in counts], [at + start for at in arrived])
    assert there.deviation_ppm == pytest.approx(here.deviation_ppm, abs=1e-3)


# ---------------------------------------------------------------------------------------------- UTC


def watch(offsets_s: list[float]) -> tuple[WallClock, list[float | None]]:
    """Read both clocks once a second with these offsets of UTC."""
    wall = WallClock()
    return wall, [wall.saw(T0 + i * NS, UTC0 + i * NS + round(offset * NS)) for i, offset in enumerate(offsets_s)]


@pytest.mark.parametrize("step", [3600.0, -3600.0, 0.2, -0.06])
def test_a_step_of_utc_is_told_once(step: float) -> None:
    wall, told = watch([0.0] * 10 + [step] * 10)
    found = [one for one in told if one is not None]
    assert found == pytest.approx([step])
    assert wall.utc_ns(T0 + 30 * NS) == UTC0 + 30 * NS + round(step * NS)


def test_slewing_and_midnight_are_no_step() -> None:
    _, told = watch([500e-6 * i for i in range(3 * 3600)])
    assert not any(told)


def test_one_reading_that_was_held_up_is_no_step() -> None:
    wall, told = watch([0.0] * 5 + [0.3] + [0.0] * 5 + [-0.2, 0.4] + [0.0] * 3)
    assert not any(told)
    assert wall.offset_s(T0, UTC0) == 0.0


def test_utc_before_any_reading_is_refused() -> None:
    with pytest.raises(ValueError, match=r"call saw\(\) first"):
        WallClock().utc_ns(T0)


# ---------------------------------------------------------------------------------------------- the record


def test_the_record_tells_rate_and_offset_and_a_step_moves_no_sample() -> None:
    """A clock 200 ppm fast runs 0.2 s ahead of UTC in 1000 s of its own; then UTC is set back by an hour."""
    block = 960
    judge, wall = ArrivalJudge(RATE, block), WallClock()
    judge.begin_at(0, T0)
    judge.opened(Fault.DEVICE)
    first = []
    for k in range(1000 * RATE // block):
        elapsed_ns = round((k + 1) * block * NS / (RATE * 1.0002))
        first += [one.first_sample for one in judge.came(k, block, T0 + elapsed_ns, False)]
        if k % 50 == 0:
            wall.saw(T0 + elapsed_ns, UTC0 + elapsed_ns - (3600 * NS if k > 40_000 else 0))
    assert first == [k * block for k in range(len(first))]
    record = clock_record("card", RATE, UTC0, judge, wall)
    assert record.source == "card" and record.rate_hz == 48_000.0
    assert record.deviation_ppm == pytest.approx(200.0, abs=0.5)
    assert record.offset_s == pytest.approx(-3600.0 - 0.2, abs=1e-3)
    assert record.offset_std_s is not None and record.offset_std_s < 1e-3
    assert record.span_s == pytest.approx(1000.0, rel=0.02)
    assert sample_time_ns(UTC0, judge.next_index, RATE) == UTC0 + 1000 * NS
