"""When a process that died is started again: pure policy, no clock and no process."""

from __future__ import annotations

from collections import deque

FIRST_S = 0.1
LONGEST_S = 2.0
"""Shortest and longest wait before the next start, seconds: samples must flow within 5 s of the end of the cause."""

LOOPS = 5
WITHIN_S = 60.0
"""So many deaths in so many seconds are a loop: something that a restart does not mend."""


class Restarts:
    """Counts the deaths of one process and says when to start it again."""

    def __init__(self) -> None:
        self._deaths: deque[float] = deque(maxlen=LOOPS)

    def died(self, now: float) -> float:
        """Take note of a death at monotonic `now`, seconds; return how long to wait before the next start."""
        recent = sum(now - death < WITHIN_S for death in self._deaths)
        self._deaths.append(now)
        return min(LONGEST_S, FIRST_S * 2.0**recent)

    def is_looping(self, now: float) -> bool:
        """Say whether it dies in a loop."""
        return len(self._deaths) == LOOPS and now - self._deaths[0] < WITHIN_S

    @property
    def deaths(self) -> int:
        """Deaths that are remembered, at most `LOOPS`."""
        return len(self._deaths)
