"""Track points and bands for the tests of alerts."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import pytest
from driftwatch.records import Priority, Track, TrackStatus


@dataclass(frozen=True)
class PlainBand:
    name: str = "warning"
    quantity: str = "frequency"
    limits: str = "absolute"
    low: float | None = 890.0
    high: float | None = 915.0
    confidence: float = 0.95
    on_delay_s: float = 10.0
    off_delay_s: float = 30.0
    deadband: float = 0.5
    priority: Priority = Priority.MEDIUM


def make_track(
    f: float | None = 900.0,
    f_std: float | None = 0.3,
    *,
    q: float | None = 40.0,
    q_std: float | None = 1.0,
    status: TrackStatus = TrackStatus.TRACKING,
    reason: str | None = None,
    **other: Any,
) -> Track:
    figures = q is not None and q_std is not None and q > 0.0 and math.isfinite(q_std)
    reach = math.exp(1.96 * q_std / q) if figures and q_std is not None and q is not None else None
    values: dict[str, Any] = dict.fromkeys(Track.__slots__) | {
        "channel": "drive end",
        "mode": "rocking",
        "status": status,
        "frequency_hz": f,
        "frequency_std_hz": f_std,
        "q": q,
        "q_std": q_std,
        "q_low": q / reach if reach and q else None,
        "q_high": q * reach if reach and q else None,
        "reason": reason,
    }
    return Track(**(values | other))


@pytest.fixture(scope="session")
def band() -> Callable[..., PlainBand]:
    return PlainBand


@pytest.fixture(scope="session")
def track() -> Callable[..., Track]:
    return make_track
