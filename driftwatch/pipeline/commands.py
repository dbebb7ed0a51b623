"""What a person or a program may ask of a station, and what is written down of it."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import replace

from driftwatch.records import NS, Action, Block, Command, CommandDone, Envelope, Tick, sample_time_ns

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


def acknowledgement(command: Command) -> str:
    """Return the reason that stands in the record of an alert that a command acknowledges."""
    return f"acknowledged by {command.by}" + (f": {command.reason}" if command.reason else "")


def nothing_to_acknowledge(alert: str) -> str:
    """Return the outcome of a command where the alert does not ask to be acknowledged."""
    return f"nothing to acknowledge: {alert} does not ask for it"


def unknown_alert(alert: str) -> str:
    """Return the outcome of a command where no alert has the name."""
    return f"refused: no alert is called {alert!r}"


def again(envelopes: Iterable[Envelope]) -> list[Command]:
    """Return the commands behind records of commands, in order, to be given once more.

    What a station does itself it does again; what a daemon did (reload, stop) keeps the outcome that it had.
    """
    own = {Action.ACKNOWLEDGE, Action.NOTE, Action.COVARIATE}
    return [
        Command(
            envelope.time_ns,
            body.request,
            body.by,
            body.action,
            body.target,
            body.reason,
            body.value,
            body.unit,
            None if body.action in own else body.outcome,
        )
        for envelope in sorted(envelopes, key=lambda envelope: envelope.sequence)
        if isinstance(body := envelope.body, CommandDone)
    ]


def with_commands(
    items: Iterable[Block | Tick], commands: Sequence[Command], rate_hz: int
) -> Iterator[Block | Tick | Command]:
    """Yield a stream with commands in it, each one where it entered: after all that lies before its time.

    A block is cut where a command entered in its midst.

    Parameters
    ----------
    items
        The stream of one source.
    commands
        In the order in which they entered.
    rate_hz
        Its sample rate.
    """
    waiting = list(commands)
    for item in items:
        rest: Block | Tick | None = item
        while rest is not None and waiting and waiting[0].time_ns < _end_ns(rest, rate_hz):
            before, rest = _cut(rest, waiting[0].time_ns, rate_hz)
            if before is not None:
                yield before
            del before
            yield waiting.pop(0)
        if rest is not None:
            yield rest
        del item, rest  # a block may be large: the next one is read only now
    yield from waiting


def _start_ns(block: Block, rate_hz: int) -> int:
    return block.time_ns - sample_time_ns(0, block.first_sample, rate_hz)


def _end_ns(item: Block | Tick, rate_hz: int) -> int:
    """Return the stream time that is reached once an item was taken in."""
    if isinstance(item, Tick):
        return item.time_ns
    return sample_time_ns(_start_ns(item, rate_hz), item.first_sample + item.count, rate_hz)


def _cut(item: Block | Tick, time_ns: int, rate_hz: int) -> tuple[Block | None, Block | Tick | None]:
    """Return what of an item ends at a stream time or before, and what comes after it."""
    if isinstance(item, Tick):
        return None, item
    since_ns = time_ns - _start_ns(item, rate_hz)
    count = ((since_ns + 1) * rate_hz - 1) // NS - item.first_sample  # the most that end no later
    if count <= 0:
        return None, item
    first = item.first_sample + count
    rest = replace(
        item,
        first_sample=first,
        time_ns=sample_time_ns(_start_ns(item, rate_hz), first, rate_hz),
        samples=item.samples[count:],
    )
    return replace(item, samples=item.samples[:count]), rest
