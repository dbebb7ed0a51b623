"""Whether the filter still follows: a two-sided CUSUM of its normalised innovations (Page 1954)."""

from __future__ import annotations

from dataclasses import dataclass

REFERENCE = 0.25
"""Half the shift it is made for, in standard deviations of an innovation."""

THRESHOLD = 8.0
"""With `REFERENCE` a run of about 370 independent unit innovations before a false signal.

A false signal only widens the stated uncertainty for a while; it moves no figure by itself.
"""


@dataclass(frozen=True, slots=True)
class Drifted:
    """The innovations have left zero."""

    mean: float  # of the normalised innovations since they left, standard deviations
    since_ns: int  # stream time at which they left


@dataclass(slots=True)
class Cusum:
    """Sums of normalised innovations on either side, and since when each has been above zero."""

    up: float = 0.0
    down: float = 0.0
    up_count: int = 0
    down_count: int = 0
    up_since_ns: int = 0
    down_since_ns: int = 0

    def add(self, value: float, before_ns: int) -> Drifted | None:
        """Take one normalised innovation; `before_ns` is when what it compares itself with was last known right."""
        if self.up_count == 0:
            self.up_since_ns = before_ns
        if self.down_count == 0:
            self.down_since_ns = before_ns
        self.up = max(0.0, self.up + value - REFERENCE)
        self.down = max(0.0, self.down - value - REFERENCE)
        self.up_count = self.up_count + 1 if self.up > 0.0 else 0
        self.down_count = self.down_count + 1 if self.down > 0.0 else 0
        if self.up > THRESHOLD:
            return self._signal(self.up / self.up_count + REFERENCE, self.up_since_ns)
        if self.down > THRESHOLD:
            return self._signal(-self.down / self.down_count - REFERENCE, self.down_since_ns)
        return None

    def _signal(self, mean: float, since_ns: int) -> Drifted:
        self.reset()
        return Drifted(mean, since_ns)

    def reset(self) -> None:
        """Forget everything seen so far."""
        self.up = self.down = 0.0
        self.up_count = self.down_count = 0
