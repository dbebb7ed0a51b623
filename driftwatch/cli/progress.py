"""How far a command has come: a bar on standard error with the speed in times real time and the time left."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from rich.progress import Progress, ProgressColumn


@contextmanager
def progress(length: int | None, rate_hz: int, *, shown: bool = True) -> Iterator[Callable[[int], None]]:
    """Show a bar while the context lasts, where standard error is a terminal; give what moves it.

    Parameters
    ----------
    length
        Samples in all; None: not known.
    rate_hz
        Sample rate, for the speed.
    shown
        False: no bar, terminal or not.

    Yields
    ------
    callable
        To be called with the sample reached.
    """
    with _bar(_speed_column(rate_hz), shown=shown) as bar:
        task = bar.add_task("", total=length)
        yield lambda sample: bar.update(task, completed=sample)


@contextmanager
def working(*, shown: bool = True) -> Iterator[Callable[[int, int], None]]:
    """Show a bar as `progress` does; give what moves it, to be called with what is done and what there is in all."""
    with _bar(shown=shown) as bar:
        task = bar.add_task("", total=None)
        yield lambda done, total: bar.update(task, completed=done, total=total)


def _bar(*more: ProgressColumn, shown: bool) -> Progress:
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

    console = Console(stderr=True)
    return Progress(
        TextColumn("{task.percentage:3.0f} %"),
        BarColumn(),
        *more,
        TimeRemainingColumn(),
        TextColumn("left"),
        console=console,
        transient=True,
        redirect_stdout=sys.stdout.isatty(),  # lines go above the bar; what is printed to a file stays out of this
        disable=not (shown and console.is_terminal),
    )


def _speed_column(rate_hz: int) -> ProgressColumn:
    from rich.progress import ProgressColumn, Task
    from rich.text import Text

    class Speed(ProgressColumn):
        def render(self, task: Task) -> Text:
            speed = task.finished_speed or task.speed
            return Text("" if speed is None else f"{speed / rate_hz:.0f} x real time")

    return Speed()
