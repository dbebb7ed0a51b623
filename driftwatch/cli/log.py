"""The lines that a run says of itself, beside what it measures: on standard error, as much as is asked for."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from driftwatch.cli.view import RunView

LEVELS = ("debug", "info", "warning", "error")


class Log:
    """Says what a run is at.

    Parameters
    ----------
    level
        One of `LEVELS`: from which on lines are said.
    view
        What is drawn on the terminal, if anything is: it shows the lines then, so that they do not tear it.
    """

    def __init__(self, level: str, view: RunView | None) -> None:
        self._view = view
        self.level(level)

    def level(self, level: str) -> None:
        """Say lines from another level on."""
        self._least = LEVELS.index(level)

    def told(self, text: str, fault: bool) -> None:
        """Take a line; one of a fault is a warning, any other is for information."""
        is_said = LEVELS.index("warning" if fault else "info") >= self._least
        if self._view is not None and self._view.is_drawn:
            if is_said or not fault:  # what was over is taken off whether or not that is said
                self._view.status(text if fault else "")
        elif is_said:
            click.echo(text, err=True)
