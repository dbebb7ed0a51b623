"""The keeper: a record is in the store before anybody hears of it.

In a live run what the store does not take waits, and is tried again: `StoreNews` says what became of it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from driftwatch.daemon.spool import MOST_RECORDS, Spool
from driftwatch.records import Fault
from driftwatch.store.ahead import LOG_BYTES
from driftwatch.store.errors import CommitError, StoreError, Trouble

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from driftwatch.bus.publisher import Publisher
    from driftwatch.records import Envelope
    from driftwatch.store.aside import Predecessor
    from driftwatch.store.writer import Writer

COMMIT_EVERY_S = 0.15
"""Time between two commits, seconds. With `flush_due` called every 50 ms no record waits longer than 200 ms."""

GROUP_RECORDS = 5000
"""Most records in a group, so that a fast replay holds few of them at a time."""

CATCH_UP_RECORDS = 1000
"""Records stored and published at a time after trouble: subscribers must keep up, and the main loop must turn."""

FIRST_RETRY_S = 0.1
"""Time from a failure to the next attempt, seconds; doubled each time, to `LAST_RETRY_S`."""

LAST_RETRY_S = 2.0

GONE_S = 3.0
"""How long a file that was taken away is waited for before another is begun, seconds."""

ANEW = "anew"
"""Key of the news that records go into another database: over as soon as it is told."""

_ON_DISK = (Trouble.FULL, Trouble.DISK)


@dataclass(frozen=True, slots=True)
class StoreNews:
    """What became of the store, for the log and for the records."""

    key: str  # what it is about; a begin and its end have the same
    words: str
    fault: Fault | None  # None: it is over
    lost: int = 0  # records that were never stored, at the end
    goes_on: bool = False  # the run goes on in another database


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
    is_patient
        A live run: what the store does not take waits, `most` records at most, and is tried again. A replay ends with
        the error: it can be done again.
    most
        Records that wait at most.

    The keeper reads no clock: its caller calls `flush_due` at least every 50 ms and says what time it
    is on one monotonic clock, in seconds, and calls `flush` at the end.
    """

    def __init__(
        self,
        writer: Writer | None = None,
        publisher: Publisher | None = None,
        out: Callable[[Sequence[Envelope]], None] | None = None,
        *,
        is_patient: bool = False,
        most: int = MOST_RECORDS,
    ) -> None:
        self._writer = writer
        self._publisher = publisher
        self._out = out
        self._is_patient = is_patient
        self._spool = Spool(most)
        self._committed_at = -math.inf
        self.last_sequence = 0
        self._trouble: Trouble | None = None  # what keeps records from being stored
        self._since = self._gone_since = self._retry_at = 0.0
        self._retry_s = FIRST_RETRY_S
        self._waited = 0  # records stored since the trouble began
        self._is_pinned = False
        self._news: list[StoreNews] = []
        if is_patient and writer is not None:
            self._news += [_anew(gone) for gone in writer.set_aside]
        self._said = ""

    @property
    def waiting(self) -> int:
        """Records that are taken but not committed."""
        return len(self._spool)

    @property
    def trouble(self) -> Trouble | None:
        """What keeps records from being stored; None: nothing."""
        return self._trouble

    def unsaved(self, now_monotonic: float) -> tuple[int, float]:
        """Return how many records could not be stored when they were due, and for how long, seconds."""
        return (len(self._spool), now_monotonic - self._since) if self._trouble is not None else (0, 0.0)

    @property
    def unstored(self) -> int:
        """Records that are not stored: those that wait, and while there is trouble those that had to go."""
        return len(self._spool) + (self._spool.lost.total() if self._trouble is not None else 0)

    def news(self) -> list[StoreNews]:
        """Return what became of the store since this was last asked."""
        found, self._news = self._news, []
        return found

    def take(self, envelopes: Sequence[Envelope]) -> None:
        """Add records to the group that waits."""
        self._spool.extend(envelopes, bounded=self._trouble is not None)

    def flush_due(self, now_monotonic: float) -> None:
        """Commit and publish the group if the last commit is `COMMIT_EVERY_S` ago, or the group is large.

        Raises
        ------
        CommitError
            As `flush`; where the keeper is patient, only for what no waiting helps.
        """
        if self._trouble is not None:
            if now_monotonic >= self._retry_at:
                self._try_again(now_monotonic)
        elif now_monotonic - self._committed_at >= COMMIT_EVERY_S or len(self._spool) >= GROUP_RECORDS:
            self.flush_now(now_monotonic)

    def flush_now(self, now_monotonic: float) -> None:
        """Commit and publish the group, due or not.

        Raises
        ------
        CommitError
            As `flush_due`.
        """
        self._committed_at = now_monotonic
        try:
            self.flush()
        except CommitError as error:
            self.failed(error, now_monotonic)
        self._watch_log()

    def flush(self) -> None:
        """Commit, publish and hand on what waits.

        Raises
        ------
        CommitError
            When it could not be stored: nothing that was not stored was published, and it still waits.
        """
        while self._spool:
            self._store(GROUP_RECORDS)

    def _store(self, most: int) -> int:
        """Store the first records, about `most`, and return how many that were."""
        group = self._spool.first(most)
        if self._writer is not None:
            self._writer.write(group)
        self._spool.take_away(len(group))
        self.last_sequence = group[-1].sequence
        if self._publisher is not None:
            self._publisher.publish(group)
        if self._out is not None:
            self._out(group)
        return len(group)

    # ------------------------------------------------------------------------------------------ trouble

    def failed(self, error: CommitError, now_monotonic: float) -> None:
        """Hear of a transaction that failed: wait and try again where that may help, else raise it.

        Raises
        ------
        CommitError
            What came.
        """
        if not self._is_patient or error.trouble is Trouble.REFUSED:
            raise error
        if self._trouble is None:
            self._since, self._waited, self._retry_s = now_monotonic, 0, FIRST_RETRY_S
            self._spool.forget_lost()
        if error.trouble is not self._trouble:
            self._gone_since = now_monotonic
            fault = Fault.DISK if error.trouble in _ON_DISK else Fault.STORE
            self._tell(StoreNews("store", f"{error}; until then records wait in memory", fault))
        self._trouble = error.trouble
        self._retry_at = now_monotonic + self._retry_s
        self._retry_s = min(2.0 * self._retry_s, LAST_RETRY_S)
        self._remedy(error, now_monotonic)

    def _remedy(self, error: CommitError, now: float) -> None:
        """Begin another database where the old one is damaged, or was taken away and does not come back."""
        if self._writer is None:
            return
        is_lost = error.trouble is Trouble.GONE and now - self._gone_since >= GONE_S
        if error.trouble is not Trouble.DAMAGED and not is_lost:
            return
        try:
            gone = self._writer.begin_after_loss() if is_lost else self._writer.begin_after_damage(error.cause)
        except StoreError as failure:
            self._tell(StoreNews("store", f"another database cannot be begun: {failure}", Fault.STORE))
            return
        self._retry_at = now
        if gone is not None:
            self._tell(_anew(gone, is_under_way=True))

    def _try_again(self, now: float) -> None:
        """Store what waited, a part at a time; the trouble is over when all of it is stored."""
        try:
            count = self._store(CATCH_UP_RECORDS) if self._spool else 0
        except CommitError as error:
            self.failed(error, now)
            return
        self._waited += count
        self._retry_s = FIRST_RETRY_S
        if not self._spool:
            self._over(now)

    def _over(self, now: float) -> None:
        self._trouble, self._committed_at = None, now
        lost = ", ".join(f"{count} {kind}" for kind, count in self._spool.lost.items())
        words = (
            f"the store takes rows again after {now - self._since:.1f} s; {self._waited} records that waited are "
            f"stored, {f'lost for want of room are {lost}' if lost else 'none was lost'}"
        )
        self._tell(StoreNews("store", words, None, self._spool.lost.total()))

    def _tell(self, news: StoreNews) -> None:
        if news.words != self._said:
            self._said = news.words
            self._news.append(news)

    def _watch_log(self) -> None:
        """Tell when somebody who reads keeps the write-ahead log from being folded, and when no more."""
        if not self._is_patient or self._writer is None:
            return
        pinned = self._writer.pinned_bytes
        if (pinned > 0) is self._is_pinned:
            return
        self._is_pinned = pinned > 0
        if pinned:
            words = (
                f"the write-ahead log has {pinned >> 20} MB, expected at most {LOG_BYTES >> 20}: another program has "
                "been reading from the database for long; end it"
            )
            self._tell(StoreNews("log", words, Fault.STORE))
        else:
            self._tell(StoreNews("log", "The write-ahead log is folded into the database again", None))


def _anew(gone: Predecessor, *, is_under_way: bool = False) -> StoreNews:
    words = f"records go into another database; the one before it: {gone.path} ({gone.reason})"
    return StoreNews(ANEW, words, Fault.STORE, goes_on=is_under_way)
