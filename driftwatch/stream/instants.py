"""The clock by which arrivals are dated: it never steps, and it runs on while the computer sleeps."""

from __future__ import annotations

import time

_CLOCK = getattr(time, "CLOCK_BOOTTIME", time.CLOCK_MONOTONIC)


def instant_ns() -> int:
    """Return nanoseconds since the computer was started, the same for all its processes.

    Linux's CLOCK_MONOTONIC stands still while the computer is suspended; then samples that were missed would seem to
    be none. CLOCK_BOOTTIME counts that time as well (clock_gettime(2)). Elsewhere the monotonic clock serves.
    """
    return time.clock_gettime_ns(_CLOCK)
