"""Blocks whose place in the stream is not known yet, and the floor of the lag by which they are judged."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass
from typing import TYPE_CHECKING

from driftwatch.records import NS, Fault

if TYPE_CHECKING:
    from collections.abc import Iterable

SETTLE_NS = NS // 2
"""The smallest lag of the halves of this time must agree before a loss is believed ..."""

SETTLE_BURSTS = 8
"""... and so many bursts (single blocks, where they come singly) must have come in it; else it is longer.

A delay of 0.2 s holds up two bursts 0.17 s apart, and two such delays in a row are no rarity in a day: of few bursts
all may be late. Blocks of 20 ms that come singly or in pairs need no more than `SETTLE_NS`."""

FORCED_NS = NS
"""A lag that neither comes back nor settles is decided after so much; where it falls, after `CATCH_UP_NS`."""

CATCH_UP_NS = 5 * NS
"""So long a buffer may take to be emptied."""

TOLERANCE_NS = 5_000_000
"""Lags no further apart are one level; also the least loss that is believed where the device flagged one."""

FLOOR_NS = 10 * NS
"""For so long the smallest lag is remembered."""

DEVICE_SILENCE_NS = NS
"""No callback for longer: the device or its server stood still, and the computer was not merely busy (0.1 to 0.2 s)."""


@dataclass(frozen=True, slots=True)
class Arrival:
    """A block as it came."""

    number: int | None  # None: frames that came and could not be kept
    frames: int
    arrived_ns: int
    lag_ns: int
    flagged: bool


class Floor:
    """The smallest lag of about the last `FLOOR_NS` of arrivals; silence forgets nothing."""

    def __init__(self) -> None:
        self._least: deque[tuple[int, int]] = deque()  # second and its smallest lag
        self.level_ns: int | None = None

    def add(self, arrived_ns: int, lag_ns: int) -> None:
        """Take in the lag of a block that was kept."""
        second = arrived_ns // NS
        if self._least and self._least[-1][0] == second:
            if lag_ns >= self._least[-1][1]:
                return
            self._least[-1] = (second, lag_ns)
        else:
            self._least.append((second, lag_ns))
            while second - self._least[0][0] >= FLOOR_NS // NS:
                self._least.popleft()
        self.level_ns = min(lag for _, lag in self._least)

    def restart(self) -> None:
        """Learn the level anew from the lags to come; until then it stands."""
        self._least.clear()


class Held:
    """Blocks that wait for their decision, and what their lags tell by now.

    Parameters
    ----------
    block_ns : int
        Length of a usual block.
    """

    def __init__(self, block_ns: int) -> None:
        self._apart_ns = block_ns // 2
        self._pause_ns = max(SETTLE_NS // 2, 3 * block_ns)
        self._device_ns = max(DEVICE_SILENCE_NS, 4 * block_ns)
        self.arrivals: deque[Arrival] = deque()
        self.clear()

    def clear(self) -> None:
        """Forget all."""
        self.arrivals.clear()
        self.flagged = False
        self._bursts: deque[int] = deque(maxlen=SETTLE_BURSTS)  # when the last ones began
        self._began_ns = 0  # since when the lag may have settled
        self._last_ns = 0
        self._busy_ns = 0  # time in which blocks came, pauses left out
        self._silence_ns = 0

    def add(self, arrival: Arrival, silence_ns: int) -> None:
        """Hold a block that came `silence_ns` after the one before it."""
        if not self.arrivals or silence_ns > self._pause_ns or arrival.flagged:
            self._began_ns = arrival.arrived_ns
            self._bursts.clear()
        if not self._bursts or silence_ns > self._apart_ns:
            self._bursts.append(arrival.arrived_ns)
        self._busy_ns += min(silence_ns, self._pause_ns) if self.arrivals else 0
        self._silence_ns = max(self._silence_ns, silence_ns)
        self._last_ns = arrival.arrived_ns
        self.flagged |= arrival.flagged
        self.arrivals.append(arrival)

    @property
    def cause(self) -> Fault:
        """Why samples are missing: what the device says, else what its silence tells."""
        if self.flagged:
            return Fault.OVERFLOW
        return Fault.DEVICE if self._silence_ns > self._device_ns else Fault.GAP

    def settled_ns(self) -> int | None:
        """Return the level at which the smallest lag has settled, or at which it must be taken; None: not yet."""
        now = self._last_ns
        forced = self._busy_ns >= CATCH_UP_NS
        settled = len(self._bursts) == SETTLE_BURSTS and now - self._began_ns >= SETTLE_NS
        if not (settled or forced):
            return None
        half_ns = max(SETTLE_NS, now - self._bursts[0] + 1) // 2
        late = min(self._lags(now - half_ns, now))
        early = min(self._lags(now - 2 * half_ns, now - half_ns), default=late)
        if abs(late - early) <= TOLERANCE_NS:
            return min(late, early)
        stuck = self._busy_ns >= max(FORCED_NS, 4 * half_ns) and late > early
        return late if stuck or forced else None

    def doubtful(self, level_ns: int) -> int:
        """Return how many come before the first one that is at `level_ns` to stay (lower ones precede the hole)."""
        reached = len(self.arrivals)
        for i, arrival in reversed(tuple(enumerate(self.arrivals))):
            if arrival.lag_ns < level_ns - TOLERANCE_NS:
                break
            if arrival.lag_ns <= level_ns + TOLERANCE_NS:
                reached = i
        return reached

    def last_flagged(self) -> int:
        """Return the place of the last flagged one, -1 where none is."""
        return max((i for i, arrival in enumerate(self.arrivals) if arrival.flagged), default=-1)

    def _lags(self, after_ns: int, until_ns: int) -> Iterable[int]:
        for arrival in reversed(self.arrivals):
            if arrival.arrived_ns <= after_ns:
                return
            if arrival.arrived_ns <= until_ns:
                yield arrival.lag_ns
