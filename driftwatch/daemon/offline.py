"""A command that writes while no daemon runs: whoever gives it becomes the one writer for a moment."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from driftwatch.alert.machine import Event, after
from driftwatch.daemon.state import StateLock, state_folder
from driftwatch.pipeline.commands import (
    DONE,
    acknowledgement,
    done_of,
    nothing_to_acknowledge,
    unknown_alert,
)
from driftwatch.records import HANDOVER, Action, CommandDone, CovariateValue, Note
from driftwatch.store.errors import StoreUnreachableError
from driftwatch.store.location import database_path
from driftwatch.store.opening import is_there
from driftwatch.store.tail import Tail
from driftwatch.store.writer import Writer

if TYPE_CHECKING:
    from driftwatch.config import Configuration
    from driftwatch.records import Body, Command

OFFLINE = "no daemon was running"
"""Stands in the outcome of what was written without one."""


def carry_out(
    config: Configuration, command: Command, store: str | None = None, utc_ns: Callable[[], int] = time.time_ns
) -> CommandDone:
    """Write down a command, and what it does, at the end of the station's newest run; return the command's record.

    Parameters
    ----------
    config
        Of the daemon that does not run.
    command
        To acknowledge, to note, or to give a value; its time is not looked at.
    store
        The database; None: the configuration's.
    utc_ns
        The wall clock, which dates the records: no samples are counted.

    Raises
    ------
    StateBusyError
        When a daemon runs: it is to be asked instead.
    StoreError
        When the database is not there, holds no run of the station, or cannot be written; it is then unchanged.
    """
    url, station = store or config.store.url, config.station.name
    path = database_path(url, Path.cwd())
    if not is_there(path):
        raise StoreUnreachableError(f"{path} does not exist; expected the database of a daemon that has run before")
    with StateLock(state_folder(config, store), station), Writer.open(url, station) as writer:
        with writer.transaction() as connection:
            tail = Tail.of(connection, station)
            if tail is None:
                raise StoreUnreachableError(
                    f"{path} does not end with a live run of the station {station!r}; expected one, at the end of "
                    "which this is written; start the daemon first, or see the station's name"
                )
            now_ns = utc_ns()
            outcome, bodies = _effect(command, tail)
            done = done_of(command, f"{outcome}; {OFFLINE}")
            records = [tail.add(body, now_ns) for body in (done, *bodies)]
        writer.write(records)
    return done


def _effect(command: Command, tail: Tail) -> tuple[str, list[Body]]:
    """Return what comes of a command, in words, and the bodies of the records that say so."""
    match command.action:
        case Action.ACKNOWLEDGE:
            return _acknowledge(command, tail)
        case Action.NOTE:
            return DONE, [Note(command.by, command.reason or "", command.target == HANDOVER)]
        case Action.COVARIATE:
            return DONE, [CovariateValue(command.target or "", command.value, command.unit or "")]
    return f"refused: {command.action} needs a daemon", []


def _acknowledge(command: Command, tail: Tail) -> tuple[str, list[Body]]:
    name = command.target or ""
    last = tail.alert(name)
    if last is None:
        return unknown_alert(name), []
    state = after(last.state, Event.ACKNOWLEDGED)
    if state is last.state:
        return nothing_to_acknowledge(name), []
    alert = replace(
        last,
        value=None,
        value_std=None,
        probability=None,
        state=state,
        previous_state=last.state,
        by=command.by,
        reason=acknowledgement(command),
        because=(tail.sequence + 1,),  # the command's record
    )
    return DONE, [alert]
