"""Printing beside a live run: a reader that stops to read, or a terminal that is held, must not stop the run."""

from __future__ import annotations

import os
import queue
import threading
from collections.abc import Callable, Sequence
from contextlib import suppress
from typing import TYPE_CHECKING, Any, Self

import click

from driftwatch.cli.shared import Output

if TYPE_CHECKING:
    from driftwatch.daemon.stop import Stop
    from driftwatch.records import Envelope

MOST_WAITING = 2000
"""Groups of records, and lines, that wait to be printed; what comes then is not printed, only stored and published."""

PATIENCE_S = 5.0
"""How long the end waits for what is still to be printed, seconds."""


class LiveOutput:
    """Prints on a thread of its own, in order.

    Parameters
    ----------
    show
        Prints a group of records.
    stop
        Set when nothing can be printed any more.
    """

    def __init__(self, show: Callable[[Sequence[Envelope]], None], stop: Stop) -> None:
        self._output = Output(show, stop)
        self._waiting: queue.Queue[Callable[[], None] | None] = queue.Queue(MOST_WAITING)
        self._dropped = 0
        self._thread = threading.Thread(target=self._print, name="output", daemon=True)
        self._thread.start()

    def __call__(self, envelopes: Sequence[Envelope]) -> None:
        """Let a group be printed."""
        self._let(lambda: self._output(envelopes))

    def posted(self, function: Callable[..., None]) -> Callable[..., None]:
        """Return a function that lets `function` be called on the printing thread."""

        def post(*arguments: Any) -> None:
            self._let(lambda: function(*arguments))

        return post

    def _let(self, work: Callable[[], None]) -> None:
        try:
            self._waiting.put_nowait(work)
        except queue.Full:
            self._dropped += 1

    def _print(self) -> None:
        while (work := self._waiting.get()) is not None:
            with suppress(OSError):  # standard error is gone, too: nobody is left to be told
                work()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, kind: type[BaseException] | None, *_: object) -> None:
        """Print what is left; leave the process where nobody reads it.

        Raises
        ------
        click.ClickException
            When printing failed, or something was not printed (exit status 1), and nothing else is being raised.
        """
        self._drain()
        if kind is None:
            self._check()

    def _drain(self) -> None:
        try:
            self._waiting.put(None, timeout=PATIENCE_S)
            self._thread.join(PATIENCE_S)
        except queue.Full:
            pass  # told below
        if self._thread.is_alive():
            os.write(2, b"Error: standard output is not read any more; every record is stored and was published\n")
            os._exit(1)  # past the thread that waits for a reader, and past a flush that would wait like it

    def _check(self) -> None:
        self._output.check()
        if self._dropped:
            raise click.ClickException(
                f"standard output: {self._dropped} groups of records were not printed, since it was read too slowly; "
                "every record is stored and was published: see `readings` and `runs`"
            )
