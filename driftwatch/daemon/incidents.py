"""Faults of the daemon itself, from begin to end: one incident each, however often it is said that it lasts."""

from __future__ import annotations

import dataclasses
import time
import uuid
from typing import Any

from driftwatch.records import Fault, Health, Phase


class Incidents:
    """The faults that stand, by a key of the caller's."""

    def __init__(self) -> None:
        self._open: dict[str, Health] = {}
        self._since: dict[str, float] = {}  # monotonic time of the begin, seconds

    def begin(self, key: str, fault: Fault, now_ns: int, detail: str) -> Health | None:
        """Return the begin of a fault at stream time `now_ns`; its going on, where the words are new; else None.

        Stream time may stand still while a fault lasts, therefore its length is counted on the computer's clock.
        """
        known = self._open.get(key)
        if known is not None and known.detail == detail:
            return None
        if known is None:
            self._since[key] = time.monotonic()
            body = _health(fault, Phase.BEGIN, str(uuid.uuid4()), now_ns, detail)
        else:
            body = dataclasses.replace(known, phase=Phase.CONTINUE, seconds=self._seconds(key), detail=detail)
        self._open[key] = body
        return body

    def end(self, key: str, **changes: Any) -> Health | None:
        """Return the end of a fault, with these fields changed; None where it does not stand."""
        known = self._open.pop(key, None)
        if known is None:
            return None
        return dataclasses.replace(known, phase=Phase.END, seconds=self._seconds(key), **changes)

    def end_all(self) -> list[Health]:
        """Return the ends of all faults that stand."""
        return [body for key in list(self._open) if (body := self.end(key)) is not None]

    def _seconds(self, key: str) -> float:
        return time.monotonic() - self._since[key]


def clock_step(now_ns: int, seconds: float, limit_s: float) -> list[Health]:
    """Return begin and end of what is over at once: the computer's clock was set by so many seconds."""
    detail = (
        "the computer's clock was set; stream time counts samples and does not move, and the records of the sample "
        "clock say how far the two are apart"
    )
    begin = dataclasses.replace(
        _health(Fault.CLOCK_STEP, Phase.BEGIN, str(uuid.uuid4()), now_ns, detail),
        value=seconds,
        limit=limit_s,
        unit="s",
    )
    return [begin, dataclasses.replace(begin, phase=Phase.END)]


def _health(fault: Fault, phase: Phase, incident: str, since_ns: int, detail: str) -> Health:
    return Health(
        channel=None,
        fault=fault,
        phase=phase,
        incident=incident,
        since_ns=since_ns,
        seconds=0.0,
        first_sample=None,
        lost_samples=0,
        value=None,
        limit=None,
        unit=None,
        detail=detail,
    )
