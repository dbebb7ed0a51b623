"""Pruning beside the live run: one small step at a time, so that no commit waits for it."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

from driftwatch.store.retention import prune

if TYPE_CHECKING:
    from driftwatch.store.writer import Writer

LOOK_EVERY_S = 3600.0
"""Time from finding nothing old to looking again, seconds."""

AFTER_FAILURE_S = 60.0
"""Time from a step that failed to the next one, seconds."""


class Pruner:
    """Takes a step of pruning when it is called and one is due.

    Parameters
    ----------
    writer
        The database's writer.
    keep_days
        Age from which rows go.
    utc_ns
        The wall clock: rows are as old as people count.
    """

    def __init__(self, writer: Writer, keep_days: float, utc_ns: Callable[[], int]) -> None:
        self._writer = writer
        self.keep_days = keep_days
        self._utc_ns = utc_ns
        self._due = 0.0
        self.is_done = False
        """Whether the last step found nothing old."""

    def step(self, now_monotonic: float) -> None:
        """Take a step if one is due at `now_monotonic`, seconds.

        Raises
        ------
        CommitError
            When the store fails; the next step is due in a while.
        """
        if now_monotonic < self._due:
            return
        self._due = now_monotonic + AFTER_FAILURE_S
        removed = prune(self._writer, self.keep_days, self._utc_ns())
        self.is_done = not removed
        self._due = now_monotonic + (0.0 if removed else LOOK_EVERY_S)
