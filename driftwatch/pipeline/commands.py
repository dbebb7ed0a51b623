"""What a person or a program may ask of a station, and what is written down of it."""

from __future__ import annotations

from enum import StrEnum

from driftwatch.records import Command, CommandDone


class Action(StrEnum):
    """What can be asked."""

    ACKNOWLEDGE = "acknowledge"  # `target` names the alert
    NOTE = "note"  # `reason` is the text; with `target` `HANDOVER` it is meant for the next shift
    COVARIATE = "covariate"  # `target` names it, `value` and `unit` are its value; no value: known to be missing
    RELOAD = "reload"  # the configuration; carried out by the daemon
    STOP = "stop"  # the daemon; carried out by the daemon


HANDOVER = "handover"
"""Target of a note for the next shift."""

DONE = "done"
"""Outcome of a command that did what it asked for."""


def done_of(command: Command, outcome: str) -> CommandDone:
    """Return the body of the record of a command, with what came of it."""
    return CommandDone(
        command.request,
        command.by,
        command.action,
        command.target,
        command.reason,
        command.value,
        command.unit,
        outcome,
    )
