"""What several commands do alike: read a configuration, print records, end in good order, tell known errors."""

from __future__ import annotations

import os
import shlex
import shutil
import signal
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import AbstractContextManager, contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, NoReturn

import click

if TYPE_CHECKING:
    from driftwatch.config import Configuration, Problem
    from driftwatch.daemon.stop import Stop
    from driftwatch.records import Envelope

CAUTION = (
    "driftwatch advises; it is no protective system. Where a failure can hurt someone a qualified person decides, "
    "and trips and guards work without it."
)


def typed(*words: str) -> str:
    """Return a command of this program as a person types it where it was started."""
    return shlex.join([_program(), *words])


def _program() -> str:
    """Return the program's name where the shell finds it by that, else the path that it was started by."""
    started, found = Path(sys.argv[0]), shutil.which("driftwatch")
    if started.name != "driftwatch" or not started.exists() or (found and started.samefile(found)):
        return "driftwatch"
    here = Path.cwd()
    return str(started.relative_to(here) if started.is_relative_to(here) else started)


def told_time(context: click.Context, parameter: click.Parameter, text: str | None) -> int | None:
    """Return the UTC nanoseconds of a time on the command line; click's callback of an option."""
    from driftwatch.records import parse_time

    try:
        return None if text is None else parse_time(text)
    except ValueError as error:
        raise click.BadParameter(str(error), context, parameter) from None


def refuse(lines: Sequence[object]) -> NoReturn:
    """Print what is wrong, a line each, and leave with exit status 2: nothing was started."""
    for line in lines:
        click.echo(f"Error: {line}", err=True)
    sys.exit(2)


def load_served(path: str | Path, *, live: bool) -> Configuration:
    """Return a configuration that this version can serve; leave with every problem otherwise."""
    from driftwatch.config import ConfigError, load, unserved

    try:
        config = load(path)
    except ConfigError as error:
        refuse(error.problems)
    problems = unserved(config, live=live)
    if problems:
        refuse(problems)
    return config


def refuse_misfit(config: Configuration, rate_hz: int, inputs: int) -> None:
    """Leave with every problem when a configuration does not fit samples of this rate and so many inputs."""
    from driftwatch.config import check_rate

    problems: list[Problem] = check_rate(config, rate_hz, inputs)
    if problems:
        refuse(problems)


def print_json(envelopes: Sequence[Envelope]) -> None:
    """Print records to standard output, one JSON object a line."""
    from driftwatch.bus.wire import encode_json

    out = sys.stdout.buffer
    out.writelines(encode_json(envelope) + b"\n" for envelope in envelopes)
    out.flush()


def stopped_by_signal() -> AbstractContextManager[Stop]:
    """Give what SIGINT and SIGTERM set, so that the work ends in good order."""
    return _set_by(signal.SIGINT, signal.SIGTERM)


def hung_up() -> AbstractContextManager[Stop]:
    """Give what SIGHUP sets: the wish that the configuration be read again."""
    return _set_by(signal.SIGHUP)


@contextmanager
def _set_by(*signals: signal.Signals) -> Iterator[Stop]:
    from driftwatch.daemon.stop import Stop

    stop = Stop()
    before = {number: signal.signal(number, lambda *_: stop.set()) for number in signals}
    try:
        yield stop
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


class Output:
    """What prints records, as long as standard output takes them.

    Parameters
    ----------
    show
        Prints a group of records.
    stop
        Set when nothing can be printed any more, since ``head`` has had enough or a disk is full: the work then ends
        in good order.
    """

    def __init__(self, show: Callable[[Sequence[Envelope]], None], stop: Stop) -> None:
        self._show = show
        self._stop = stop
        self._error: OSError | None = None

    @property
    def is_lost(self) -> bool:
        """Whether nothing can be printed any more."""
        return self._error is not None

    def __call__(self, envelopes: Sequence[Envelope]) -> None:
        """Print a group, or nothing any more."""
        try:
            self._show(envelopes)
        except OSError as error:
            drop_output()
            self._error = error
            self._stop.set()

    def check(self) -> None:
        """Raise when printing failed; that a reader has had enough is no failure.

        Raises
        ------
        click.ClickException
            With what came, what was expected, and what to do (exit status 1).
        """
        if self._error is not None and not isinstance(self._error, BrokenPipeError):
            raise click.ClickException(
                f"standard output: {self._error.strerror or self._error}; expected to print every record there; "
                "make room; what was read until then is stored"
            )


def drop_output() -> None:
    """Send what is still printed nowhere; what is left in the buffer must go somewhere when the program ends."""
    with Path(os.devnull).open("wb") as nowhere:
        os.dup2(nowhere.fileno(), sys.stdout.fileno())


@contextmanager
def nothing_started() -> Iterator[None]:
    """Turn the known errors of opening things into exit status 2."""
    from driftwatch.bus.errors import BusError
    from driftwatch.daemon.state import StateError
    from driftwatch.store.errors import StoreError
    from driftwatch.stream.source import SourceRefusedError

    try:
        yield
    except SourceRefusedError as error:
        refuse(error.problems)
    except (BusError, StateError, StoreError) as error:
        refuse([error])


@contextmanager
def work_failed() -> Iterator[None]:
    """Turn the known errors of work under way into one line and exit status 1."""
    from driftwatch.bus.errors import BusError
    from driftwatch.store.errors import StoreError
    from driftwatch.stream.source import StreamError

    try:
        yield
    except (BusError, StoreError, StreamError) as error:
        raise click.ClickException(str(error)) from error
