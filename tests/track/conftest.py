"""Measurements of a known truth, with the errors that overlapping windows have."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
import pytest
from driftwatch.records import NS, Measurement, Method

Truth = Callable[[float], float]


def make_measurement(
    f: float | None,
    q: float | None,
    *,
    std_f: float = 1e-3,
    std_q: float = 0.08,
    correlation: float = 0.0,
    window_s: float = 4.0,
    method: Method = Method.AMBIENT,
    reasons: tuple[str, ...] = (),
) -> Measurement:
    """Return a measurement with relative standard deviations; without f it is unusable."""
    found = f is not None and q is not None and not reasons
    return Measurement(
        channel="a",
        mode="m",
        method=method,
        regime=None,
        window_s=window_s,
        first_sample=0,
        samples=round(window_s * 8000),
        frequency_hz=f if found else None,
        frequency_std_hz=f * std_f if found and f else None,
        q=q if found else None,
        q_std=q * std_q if found and q else None,
        q_low=None,
        q_high=None,
        frequency_q_correlation=correlation if found else None,
        level=1.0,
        level_unit="m/s2",
        snr_db=20.0,
        fit_p=0.5,
        usable=found,
        reasons=reasons,
    )


@dataclass(frozen=True)
class Scatter:
    """How windows scatter about the truth."""

    std_f: float = 1e-3  # of ln fn, one window
    std_q: float = 0.08  # of ln q, one window
    correlation: float = 0.0
    window_steps: int = 4  # window over step
    step_s: float = 1.0
    follows_q: bool = True  # the stated variance of ln q grows with the measured q


@pytest.fixture(scope="session")
def measurement() -> Callable[..., Measurement]:
    return make_measurement


@pytest.fixture(scope="session")
def windows() -> Callable[..., Iterator[tuple[int, Measurement]]]:
    return scattered_windows


def scattered_windows(
    seed: int, count: int, frequency: Truth, q: Truth, **how: float
) -> Iterator[tuple[int, Measurement]]:
    """Yield (end in ns, measurement): each window averages the truth and independent errors of its steps."""
    scatter = Scatter(**how)  # type: ignore[arg-type]
    m = scatter.window_steps
    rng = np.random.default_rng(seed)
    normal = rng.standard_normal((count + m - 1, 2))
    rho = scatter.correlation
    errors_f = scatter.std_f * math.sqrt(m) * normal[:, 0]
    errors_q = scatter.std_q * math.sqrt(m) * (rho * normal[:, 0] + math.sqrt(1 - rho * rho) * normal[:, 1])
    middles = (np.arange(count + m - 1) + 0.5) * scatter.step_s
    ln_f = np.log([frequency(t) for t in middles]) + errors_f
    ln_q = np.log([q(t) for t in middles]) + errors_q
    for k in range(count):
        last = k + m
        measured_q = math.exp(float(np.mean(ln_q[k:last])))
        true_q = q((k + 0.5 * m) * scatter.step_s)
        std_q = scatter.std_q * (math.sqrt(measured_q / true_q) if scatter.follows_q else 1.0)
        yield (
            round(last * scatter.step_s * NS),
            make_measurement(
                math.exp(float(np.mean(ln_f[k:last]))),
                measured_q,
                std_f=scatter.std_f,
                std_q=std_q,
                correlation=rho,
                window_s=m * scatter.step_s,
            ),
        )
