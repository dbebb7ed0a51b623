"""How far the computer's clock can be trusted, by what the kernel says."""

from __future__ import annotations

import ctypes

from driftwatch.records import TimeQuality

_TIME_ERROR = 5
"""What ``ntp_adjtime`` returns while nobody disciplines the clock (TIME_ERROR, ntp_adjtime(3))."""

_ROOM = 512
"""Bytes that ``struct timex`` has room in, whatever the system."""


def time_quality() -> TimeQuality:
    """Return whether a time service disciplines the clock; where the system does not tell, that none does."""
    try:
        asked = ctypes.CDLL(None).ntp_adjtime
    except (OSError, AttributeError):
        return TimeQuality.FREE
    state = int(asked(ctypes.create_string_buffer(_ROOM)))  # all zero: nothing is set, only told
    return TimeQuality.SYNCHRONISED if 0 <= state < _TIME_ERROR else TimeQuality.FREE
