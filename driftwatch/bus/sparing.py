"""What keeps a flood small: how often a key may ask, and how often a line of the log tells of the same."""

from __future__ import annotations

import math
from dataclasses import dataclass


class Allowance:
    """How often somebody may do something: `burst` at once, then `per_s` a second (a token bucket).

    It reads no clock: each call says what time it is on one monotonic clock, seconds.
    """

    def __init__(self, per_s: float, burst: float) -> None:
        self._per_s = per_s
        self._burst = burst
        self._left = burst
        self._at = -math.inf

    def take(self, now: float) -> bool:
        """Return whether it may be done now; it then counts."""
        self._left = min(self._burst, self._left + max(0.0, now - self._at) * self._per_s)
        self._at = now
        if self._left < 1.0:
            return False
        self._left -= 1.0
        return True


@dataclass(slots=True)
class _Line:
    due: float  # when the next one may be told
    more: int = 0  # that were not
    last: str = ""  # of them


class SparseLog:
    """Tells what happens again and again once, then at most every `every_s` seconds, with how often it did.

    It reads no clock, see `Allowance`. Kinds are few and fixed; texts may be anything.
    """

    def __init__(self, every_s: float) -> None:
        self._every_s = every_s
        self._lines: dict[str, _Line] = {}

    def note(self, kind: str, text: str, now: float) -> str | None:
        """Take in what happened; return the line to tell now, if one is due."""
        line = self._lines.get(kind)
        if line is None or (now >= line.due and not line.more):
            self._lines[kind] = _Line(now + self._every_s)
            return text
        line.more += 1
        line.last = text
        return None

    def due(self, now: float) -> list[str]:
        """Return the lines of what was held back and may be told now."""
        told = []
        for line in self._lines.values():
            if line.more and now >= line.due:
                told.append(line.last if line.more == 1 else f"{line.last} (and {line.more - 1} more like it)")
                line.more, line.due = 0, now + self._every_s
        return told
