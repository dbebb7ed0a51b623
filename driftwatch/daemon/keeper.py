"""The keeper: a record is in the store before anybody hears of it."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from driftwatch.bus.publisher import Publisher
    from driftwatch.records import Envelope
    from driftwatch.store.writer import Writer

COMMIT_EVERY_S = 0.15
"""Time between two commits, seconds. With `flush_due` called every 50 ms no record waits longer than 200 ms."""

GROUP_RECORDS = 5000
"""Most records in a group, so that a fast replay holds few of them at a time."""


class Keeper:
    """Groups records, commits each group, then publishes it, then hands it on.

    Parameters
    ----------
    writer
        Where records are stored; None: nowhere.
    publisher
        Where they are published; None: nowhere.
    out
        Called with each group after that, for what is printed; None: nothing is.

    The keeper reads no clock: its caller calls `flush_due` at least every 50 ms and says what time it
    is on one monotonic clock, in seconds, and calls `flush` at the end.
    """

    def __init__(
        self,
        writer: Writer | None = None,
        publisher: Publisher | None = None,
        out: Callable[[Sequence[Envelope]], None] | None = None,
    ) -> None:
        self._writer = writer
        self._publisher = publisher
        self._out = out
        self._group: list[Envelope] = []
        self._committed_at = -math.inf
        self.last_sequence = 0

    @property
    def waiting(self) -> int:
        """Records that are taken but not committed."""
        return len(self._group)

    def take(self, envelopes: Sequence[Envelope]) -> None:
        """Add records to the group that waits."""
        self._group.extend(envelopes)

    def flush_due(self, now_monotonic: float) -> None:
        """Commit and publish the group if the last commit is `COMMIT_EVERY_S` ago, or the group is large.

        Raises
        ------
        CommitError
            As `flush`.
        """
        if now_monotonic - self._committed_at >= COMMIT_EVERY_S or len(self._group) >= GROUP_RECORDS:
            self._committed_at = now_monotonic
            self.flush()

    def flush(self) -> None:
        """Commit, publish and hand on what waits.

        Raises
        ------
        CommitError
            When the group could not be stored: nothing of it was published, and it still waits.
        """
        if not self._group:
            return
        if self._writer is not None:
            self._writer.write(self._group)
        group, self._group = self._group, []
        self.last_sequence = group[-1].sequence
        if self._publisher is not None:
            self._publisher.publish(group)
        if self._out is not None:
            self._out(group)
