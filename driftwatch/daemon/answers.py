"""What a daemon answers to those who only look: how things stand, and what was stored."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from driftwatch.bus.clerk import LookFailedError
from driftwatch.bus.wire import encode, encode_heartbeat
from driftwatch.records import time_text
from driftwatch.store.errors import StoreError
from driftwatch.store.queries import Reader
from driftwatch.store.requests import command_of
from driftwatch.store.since import page

if TYPE_CHECKING:
    from pathlib import Path

    from driftwatch.alert.book import Standing, StandingAlert
    from driftwatch.bus.clerk import Reply
    from driftwatch.bus.request import Request
    from driftwatch.records import CommandDone, Heartbeat

PAGE_RECORDS = 500
"""Most records in one answer to ``since``."""

BUSY_MS = 200
"""How long a lock on the database is waited for, milliseconds: an asker hears within a second."""

_FAILURES = (StoreError, OSError, ValueError, TypeError)
"""What a look into a store may meet: a row that was damaged may hold a word that is none, or text for a number."""


@dataclass(frozen=True, slots=True)
class Stand:
    """How things stood at a heartbeat."""

    heartbeat: Heartbeat
    standing: Standing


class Answers:
    """Answers looks, on the control port's thread.

    Parameters
    ----------
    store
        The database. It is opened anew for each look: another one may have been begun in its place.
    """

    def __init__(self, store: Path) -> None:
        self._store = store
        self._stand: Stand | None = None

    def post(self, stand: Stand) -> None:
        """Take in how things stand now; called by the main loop."""
        self._stand = stand

    def look(self, request: Request) -> Reply:
        """Return the fields of the reply to a request that changes nothing.

        Raises
        ------
        LookFailedError
            When it cannot be told.
        """
        if request.action == "status":
            return self._status()
        try:
            with Reader.open(self._store, BUSY_MS, beside_writer=True) as reader:
                found = page(reader, request.run, request.sequence, PAGE_RECORDS)
            records = [encode(one) for one in found.records]
        except _FAILURES as error:
            raise LookFailedError(str(error)) from None
        return {"records": records, "more": found.more, "known": found.known}

    def known(self, request: str) -> CommandDone | None:
        """Return the record of a command by the id of its request; None: there is none, or it cannot be told."""
        try:
            with Reader.open(self._store, BUSY_MS, beside_writer=True) as reader:
                return command_of(reader, request)
        except _FAILURES:
            return None  # in trouble: a command that is new must be taken all the same

    def _status(self) -> Reply:
        stand = self._stand
        if stand is None:
            raise LookFailedError("the daemon has only begun; ask again in a second")
        return {
            "heartbeat": json.loads(encode_heartbeat(stand.heartbeat)),
            "standing": [_object(alert) for alert in stand.standing.alerts],
            "cannot_tell": [_object(alert) for alert in stand.standing.cannot_tell],
        }


def _object(alert: StandingAlert) -> dict[str, Any]:
    return {
        "alert": alert.alert,
        "condition": alert.condition.value,
        "state": alert.state.value,
        "determinate": alert.determinate,
        "priority": alert.priority.value,
        "since": None if alert.since_ns is None else time_text(alert.since_ns),
    }
