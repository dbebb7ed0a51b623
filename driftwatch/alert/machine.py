"""The life of one alert, apart from what drives it: (life, finding) -> (life, event), by stream time alone.

Two layers. `ROWS` is the state model of IEC 62682 / ISA-18.2 as a table (state, event) -> state. Above it `step` turns
findings (violated, returned, neither, cannot tell) into events, through the on and off delays; what a person does is
an event at once. The states and events that are not used yet have their place: a row more in the table, an event more
in `Event`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import Enum, StrEnum

from driftwatch.records import AlertState


class Event(StrEnum):
    """What can move an alert from one state to another."""

    VIOLATED = "violated"  # beyond the limit throughout the on delay
    RETURNED = "returned"  # back inside throughout the off delay
    ACKNOWLEDGED = "acknowledged"  # a person has taken note of it


ROWS: dict[tuple[AlertState, Event], AlertState] = {
    (AlertState.NORMAL, Event.VIOLATED): AlertState.UNACKNOWLEDGED,
    (AlertState.UNACKNOWLEDGED, Event.RETURNED): AlertState.RETURNED_UNACKNOWLEDGED,
    (AlertState.RETURNED_UNACKNOWLEDGED, Event.VIOLATED): AlertState.UNACKNOWLEDGED,
    (AlertState.UNACKNOWLEDGED, Event.ACKNOWLEDGED): AlertState.ACKNOWLEDGED,
    (AlertState.RETURNED_UNACKNOWLEDGED, Event.ACKNOWLEDGED): AlertState.NORMAL,
    (AlertState.ACKNOWLEDGED, Event.RETURNED): AlertState.NORMAL,
}
"""Where each event leads from each state; what is not listed changes nothing."""


def after(state: AlertState, event: Event) -> AlertState:
    """Return the state that an event leads to; the same one where the event means nothing."""
    return ROWS.get((state, event), state)


class Finding(Enum):
    """What one judgement says."""

    VIOLATED = "violated"
    RETURNED = "returned"
    NEITHER = "neither"  # too near to the limit to say either
    CANNOT_TELL = "cannot tell"


@dataclass(frozen=True, slots=True)
class Timer:
    """For how long something has held, counted between judgements that both say so.

    A judgement that says otherwise resets it. One that cannot tell stops it where it is, and the time until the next
    one that can does not count.
    """

    elapsed_ns: int = 0
    last_ns: int | None = None  # stream time of the last judgement that said so; None: stopped

    def advance(self, time_ns: int) -> Timer:
        """Count up to a judgement that says so."""
        if self.last_ns is None:
            return Timer(self.elapsed_ns, time_ns)
        return Timer(self.elapsed_ns + max(time_ns - self.last_ns, 0), max(time_ns, self.last_ns))

    def stop(self) -> Timer:
        """Keep what was counted, and count nothing until the next judgement."""
        return self if self.last_ns is None else Timer(self.elapsed_ns, None)


IDLE = Timer()
"""A timer that counts nothing yet."""


@dataclass(frozen=True, slots=True)
class Delays:
    """How long a violation and a return must last before they count."""

    on_ns: int
    off_ns: int


@dataclass(frozen=True, slots=True)
class Life:
    """Where an alert stands."""

    state: AlertState = AlertState.NORMAL
    determinate: bool = True
    on: Timer = IDLE
    off: Timer = IDLE


_EVENT_OF = {Finding.VIOLATED: Event.VIOLATED, Finding.RETURNED: Event.RETURNED}


def acknowledge(life: Life) -> Life:
    """Return the life after a person took note of it; the same one where there is nothing to take note of.

    Whatever is being timed goes on being timed: to take note of an alert is no judgement.
    """
    state = after(life.state, Event.ACKNOWLEDGED)
    return life if state is life.state else replace(life, state=state)


UNKNOWN = Life(determinate=False)
"""Where an alert begins of which nothing is known before the first judgement."""


def step(life: Life, finding: Finding, time_ns: int, delays: Delays) -> tuple[Life, Event | None]:
    """Return the life after one finding, and the event that it caused.

    Only what can move the alert from where it stands is timed. An event comes at the first finding at which its timer
    has reached its delay. What changes nothing returns the same life.
    """
    if finding is Finding.CANNOT_TELL:
        if not life.determinate:
            return life, None
        return replace(life, determinate=False, on=life.on.stop(), off=life.off.stop()), None
    event = _EVENT_OF.get(finding)
    if event is None or (life.state, event) not in ROWS:
        idle = life.determinate and life.on is IDLE and life.off is IDLE
        return (life if idle else Life(life.state)), None
    return _timed(life, event, time_ns, delays)


def _timed(life: Life, event: Event, time_ns: int, delays: Delays) -> tuple[Life, Event | None]:
    """Time an event that would move the alert; the timer of the other one starts again from zero."""
    if event is Event.VIOLATED:
        on, off = life.on.advance(time_ns), IDLE
        due = on.elapsed_ns >= delays.on_ns
    else:
        on, off = IDLE, life.off.advance(time_ns)
        due = off.elapsed_ns >= delays.off_ns
    return Life(ROWS[life.state, event] if due else life.state, True, on, off), event if due else None
