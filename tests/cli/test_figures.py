"""Figures are shown with as many digits as their uncertainty allows."""

from __future__ import annotations

import pytest
from driftwatch.cli.figures import duration, known_with_std, moment, with_interval
from driftwatch.records import NS


@pytest.mark.parametrize(
    ("value", "std", "text"),
    [
        (900.12345, 0.0123, "900.123 ± 0.012"),
        (900.12345, 12.3, "900 ± 12"),
        (0.0012345, 0.00012, "0.00123 ± 0.00012"),
        (900.12345, None, "900.123"),
        (900.12345, 0.0, "900.123"),
        (None, 0.1, "-"),
    ],
)
def test_a_value_stands_with_two_digits_of_its_uncertainty(value: float, std: float, text: str) -> None:
    assert known_with_std(value, std) == text


@pytest.mark.parametrize(
    ("value", "low", "high", "text"),
    [
        (40.123, 37.5, 42.9, "40.1 (37.5 to 42.9)"),
        (2000.4, 1900.2, 2105.8, "2000 (1900 to 2106)"),
        (40.123, None, None, "40.12"),
        (None, None, None, "-"),
    ],
)
def test_a_q_stands_with_its_interval(value: float, low: float, high: float, text: str) -> None:
    assert with_interval(value, low, high) == text


@pytest.mark.parametrize(
    ("seconds", "text"),
    [
        (0.0, "0 s"),
        (2.5, "2.5 s"),
        (59.96, "60 s"),
        (75.0, "1 min 15 s"),
        (7260.0, "2 h 1 min"),
        (180_000.0, "2 d 2 h"),
    ],
)
def test_a_duration_stands_in_its_two_largest_units(seconds: float, text: str) -> None:
    assert duration(seconds) == text


def test_a_moment_stands_to_the_millisecond() -> None:
    assert moment(1_767_225_600 * NS + 123_456_789) == "2026-01-01T00:00:00.123Z"
