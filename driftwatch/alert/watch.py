"""One alert of a station: a life, its occurrence, and the records it writes."""

from __future__ import annotations

import uuid
from dataclasses import dataclass
from typing import TYPE_CHECKING

from driftwatch.alert.machine import IDLE, Delays, Event, Finding, Life, acknowledge, step
from driftwatch.records import NS, Alert, AlertState, Condition, Priority

if TYPE_CHECKING:
    from collections.abc import Callable

NO_OCCURRENCE = str(uuid.UUID(int=0))
"""What stands for the occurrence in records of an alert that never left normal: the nil UUID."""

_NAMES = uuid.uuid5(uuid.NAMESPACE_URL, "tag:driftwatch,2026:occurrence")


def occurrence_id(station: str, alert: str, since_ns: int) -> str:
    """Return the UUID of a life: the same for the same station, alert and begin, in every replay."""
    return str(uuid.uuid5(_NAMES, f"{station}\n{alert}\n{since_ns}"))


@dataclass(frozen=True, slots=True)
class Subject:
    """What an alert is about; the same in all its records."""

    station: str
    alert: str  # stable name
    condition: Condition
    channel: str | None
    mode: str | None
    quantity: str | None
    basis: str | None
    unit: str | None
    low: float | None
    high: float | None
    confidence: float | None
    priority: Priority
    delays: Delays


@dataclass(slots=True)  # never changed; not frozen, which would cost more than the judgement
class Seen:
    """One judgement with the figures and the records behind it."""

    finding: Finding
    value: float | None = None
    value_std: float | None = None
    probability: float | None = None
    because: tuple[int, ...] = ()  # sequences of the records judged


class Watch:
    """Drives one `Life` and writes a record at each transition and at each change of what can be told.

    An occurrence begins at the moment the alert leaves normal: that is its `since_ns`, and its name is made of it.
    Before the first one `since_ns` is the first moment of the alert and the occurrence is the nil UUID.
    """

    def __init__(self, subject: Subject, life: Life) -> None:
        self.subject = subject
        self._life = life
        self._since_ns: int | None = None
        self._occurrence = NO_OCCURRENCE
        self._timed: Finding | None = None
        self._begun: tuple[int, ...] = ()  # records that began what is being timed

    @property
    def state(self) -> AlertState:
        """Where the alert stands."""
        return self._life.state

    @property
    def determinate(self) -> bool:
        """Whether it can be told now."""
        return self._life.determinate

    @property
    def since_ns(self) -> int | None:
        """Begin of the occurrence."""
        return self._since_ns

    @property
    def quiet(self) -> bool:
        """Whether nothing stands and no violation is being timed."""
        return self._life.state is AlertState.NORMAL and self._life.determinate and self._life.on is IDLE

    def see(self, seen: Seen, time_ns: int, words: Callable[[Event | None, float], str]) -> Alert | None:
        """Take one judgement; return the record of what it changed.

        Parameters
        ----------
        seen : Seen
        time_ns : int
            Stream time of the judgement.
        words : callable
            Given the event (None: what can be told changed) and for how many seconds it has held, the reason to write.
        """
        before = self._life
        self._life, event = step(before, seen.finding, time_ns, self.subject.delays)
        if seen.finding is not Finding.CANNOT_TELL and seen.finding is not self._timed:
            self._timed, self._begun = seen.finding, seen.because
        since_ns = self._begin(before.state, time_ns)
        if event is None and self._life.determinate is before.determinate:
            return None
        timer = self._life.off if event is Event.RETURNED else self._life.on
        return self._record(seen, before.state, since_ns, words(event, timer.elapsed_ns / NS))

    def acknowledge(self, by: str, reason: str, because: int) -> Alert | None:
        """Note that a person took note of what stands; return the record of it, None where nothing changes.

        Parameters
        ----------
        by, reason : str
            Who, and what to write.
        because : int
            Sequence of the command's record.
        """
        previous, since_ns = self._life.state, self._since_ns
        self._life = acknowledge(self._life)
        if self._life.state is previous or since_ns is None:
            return None
        seen = Seen(Finding.NEITHER, because=(because,))
        return self._record(seen, previous, since_ns, reason, by)

    def withdraw(self, reason: str) -> Alert | None:
        """End the watch; return the record of it where something stands."""
        previous, since_ns = self._life.state, self._since_ns
        if previous is AlertState.NORMAL or since_ns is None:
            return None
        self._life = Life()
        return self._record(Seen(Finding.RETURNED), previous, since_ns, reason)

    def _begin(self, before: AlertState, time_ns: int) -> int:
        """Return the begin of the occurrence, a new one where the alert has just left normal."""
        if before is AlertState.NORMAL and self._life.state is not AlertState.NORMAL:
            self._since_ns = time_ns
            self._occurrence = occurrence_id(self.subject.station, self.subject.alert, time_ns)
        elif self._since_ns is None:
            self._since_ns = time_ns
        return self._since_ns

    def _record(self, seen: Seen, previous: AlertState, since_ns: int, reason: str, by: str | None = None) -> Alert:
        subject = self.subject
        told = self._life.determinate
        because = tuple(sorted({*self._begun, *seen.because})) if told else seen.because
        return Alert(
            alert=subject.alert,
            occurrence=self._occurrence,
            condition=subject.condition,
            channel=subject.channel,
            mode=subject.mode,
            quantity=subject.quantity,
            basis=subject.basis,
            value=seen.value,
            value_std=seen.value_std,
            unit=subject.unit,
            low=subject.low,
            high=subject.high,
            baseline=None,
            confidence=subject.confidence,
            probability=seen.probability,
            determinate=told,
            since_ns=since_ns,
            state=self._life.state,
            previous_state=previous,
            priority=subject.priority,
            by=by,
            reason=reason,
            shelved_until_ns=None,
            because=because,
            evidence=(),
        )
