"""Records that wait for the store, in memory: in order, and no more than a bound."""

from __future__ import annotations

from collections import Counter, deque
from heapq import merge
from itertools import islice
from operator import attrgetter
from typing import TYPE_CHECKING

from driftwatch.records import (
    KIND_OF,
    Alert,
    CommandDone,
    CovariateValue,
    Decay,
    Health,
    Level,
    Measurement,
    Note,
    Run,
    Tone,
    Track,
)

if TYPE_CHECKING:
    from collections.abc import Iterable

    from driftwatch.records import Envelope

MOST_RECORDS = 200_000
"""Records that wait at most, some 150 MB: four hours of three modes, half an hour of eight channels of three."""

_READINGS = (Measurement, Track, Level, Tone, Decay)
_KEPT = (Alert, Health, CommandDone, CovariateValue, Note, Run)
_EFFECTS = (Alert, CovariateValue, Note)
_RANK = dict.fromkeys(_READINGS, 0) | dict.fromkeys(_KEPT, 2)
"""What goes first where there is no room: readings, then what is not named, last what was decided, done and said."""

_sequence = attrgetter("sequence")


class Spool:
    """Records in order of their numbers; where there are too many, those that matter least go, the oldest first.

    Parameters
    ----------
    most
        So many are kept.

    Attributes
    ----------
    lost
        How many went since `forget_lost`, by kind.
    """

    def __init__(self, most: int = MOST_RECORDS) -> None:
        self._most = most
        self._ranks: tuple[deque[Envelope], ...] = (deque(), deque(), deque())
        self.lost: Counter[str] = Counter()

    def __len__(self) -> int:
        return sum(map(len, self._ranks))

    def extend(self, envelopes: Iterable[Envelope], *, bounded: bool) -> None:
        """Add records that come after all that are there; with `bounded` no more stay than may."""
        for envelope in envelopes:
            self._ranks[_RANK.get(type(envelope.body), 1)].append(envelope)
        while bounded and len(self) > self._most:
            gone = next(rank for rank in self._ranks if rank).popleft()
            self.lost[KIND_OF[type(gone.body)]] += 1

    def first(self, most: int) -> list[Envelope]:
        """Return the first records, about `most`, without taking them away: a command and what it does are not parted.

        What it does follows it with the same time; in one transaction, both are stored or neither is.
        """
        left = merge(*self._ranks, key=_sequence)
        found = list(islice(left, most))
        for one in left:
            if not isinstance(one.body, _EFFECTS) or one.time_ns != found[-1].time_ns:
                break
            found.append(one)
        return found

    def take_away(self, count: int) -> None:
        """Take the first `count` records away: they are stored."""
        for _ in range(count):
            min((rank for rank in self._ranks if rank), key=lambda rank: rank[0].sequence).popleft()

    def forget_lost(self) -> None:
        """Begin to count anew."""
        self.lost = Counter()
