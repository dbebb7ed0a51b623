"""A search band that leaves what the sensor is usable for is remarked, at either end, with how it is mounted."""

from __future__ import annotations

import pytest
from driftwatch.config import loads
from driftwatch.config.sensors import sensor_remarks

BASE = """schema = 1
[[channel]]
name = "a.b"
[channel.sensor]
mounting = "magnet"
usable_hz = [10.0, 2000.0]
[[channel]]
name = "other"
[[mode]]
name = "m"
channel = "a.b"
search_hz = [820.0, 980.0]
[[mode]]
name = "elsewhere"
channel = "other"
search_hz = [5000.0, 6000.0]
"""

OUTSIDE = [
    ((5.0, 980.0), "at its lower end, 5 Hz;"),
    ((820.0, 2000.5), "at its upper end, 2000.5 Hz;"),
    ((5.0, 3000.0), "at both ends, 5 and 3000 Hz;"),
    ((3000.0, 4000.0), "altogether, from 3000 to 4000 Hz;"),
    ((2.0, 10.0), "altogether, from 2 to 10 Hz;"),
]


def remarks(search: tuple[float, float], text: str = BASE) -> list[str]:
    return sensor_remarks(loads(text.replace("[820.0, 980.0]", f"[{search[0]}, {search[1]}]")))


@pytest.mark.parametrize(("search", "where"), OUTSIDE)
def test_a_search_band_outside_is_one_line_with_the_end_and_the_mounting(
    search: tuple[float, float], where: str
) -> None:
    (line,) = remarks(search)
    begin = 'mode "m": search_hz leaves what the sensor on "a.b" (mounting: magnet) is usable for, 10 to 2000 Hz, '
    assert line.startswith(begin + where)


@pytest.mark.parametrize("search", [(820.0, 980.0), (10.0, 2000.0), (10.0, 30.0), (1900.0, 2000.0)])
def test_a_search_band_inside_or_at_the_very_ends_is_none(search: tuple[float, float]) -> None:
    assert remarks(search) == []


def test_without_a_mounting_none_is_named_and_without_a_range_nothing_is_said() -> None:
    (line,) = remarks((5.0, 980.0), BASE.replace('mounting = "magnet"\n', ""))
    assert 'the sensor on "a.b" is usable for' in line
    assert remarks((5.0, 980.0), BASE.replace("usable_hz = [10.0, 2000.0]\n", "")) == []
