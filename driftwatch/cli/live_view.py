"""What a run shows on a terminal: how things stand, worst first, redrawn in place, with the news scrolling above."""

from __future__ import annotations

import sys
import time
from collections import deque
from collections.abc import Callable, Iterable, Sequence
from typing import TYPE_CHECKING

from driftwatch.cli.board import Board
from driftwatch.cli.rows import Entry, entries, fitted, head, wrapped
from driftwatch.cli.view import RunView

if TYPE_CHECKING:
    from rich.console import Console
    from rich.live import Live
    from rich.text import Text

    from driftwatch.records import Envelope, Heartbeat

REDRAW_S = 0.25
"""Shortest time between two redrawings, seconds; records come more often."""

NEWS_KEPT = 50
"""News that are told again when the terminal changes its width, at most."""

_NEWS_SHARE = 4
"""One line in so many of the terminal is left to the news."""


def on_terminal() -> bool:
    """Say whether standard output is a terminal in which lines can be redrawn."""
    from rich.console import Console

    console = Console()
    return console.is_terminal and not console.is_dumb_terminal and sys.stdout.isatty()


def chosen_view(modes: Iterable[tuple[str, str]], every_s: float | None) -> RunView:
    """Return the view for where standard output goes: drawn on a terminal, lines elsewhere; to be closed."""
    return LiveView(modes, every_s) if on_terminal() else RunView(modes, every_s)


def screen_of(board: Board, width: int, height: int, state: str = "") -> list[Entry]:
    """Return a board as entries that fit into so many columns and lines."""
    top = [*head(board), *([Entry("state", (state,), "bold")] if state else [])]
    above = [wrapped(entry, width) for entry in top if entry.lines != ("",)]
    room = height - sum(len(entry.lines) for entry in above)
    if room < height // 2:  # what stands is worth more than how the daemon does
        above = above[:1]
        room = height - len(above[0].lines)
    return [*above, *fitted(entries(board, width), width, max(room, 1))]


class Pane:
    """The lower part of a terminal, redrawn in place; what is told goes above it and scrolls away.

    Nothing is drawn by another thread, and nothing at all before the first `draw`.
    """

    def __init__(self) -> None:
        from rich.console import Console

        self.console: Console = Console(highlight=False, markup=False, emoji=False)
        self._live: Live | None = None
        self._news: deque[tuple[str, str | None]] = deque(maxlen=NEWS_KEPT)
        self._width = 0

    @property
    def size(self) -> tuple[int, int]:
        """Columns and lines that can be drawn in; the terminal is asked each time, for it can change."""
        width, height = self.console.size
        return max(width, 20), max(height - 1, 3)

    def draw(self, found: Sequence[Entry]) -> None:
        """Show these entries instead of what was shown."""
        from rich.console import Group

        width = self.console.size.width
        if self._live is not None and width != self._width:
            self._begin_anew()
        self._width = width
        self._started().update(Group(*(_text(line, entry.colour) for entry in found for line in entry.lines)))
        self._started().refresh()

    def print(self, found: Sequence[Entry]) -> None:
        """Print entries once, for good, however many lines they take."""
        for entry in found:
            self._print("\n".join(entry.lines), entry.colour)

    def tell(self, lines: str, colour: str | None) -> None:
        """Print lines above, for good."""
        self._news.append((lines, colour))
        self._print(lines, colour)

    def close(self, *, keep: bool) -> None:
        """Give the terminal back, with or without what was drawn last."""
        if self._live is not None:
            self._live.transient = not keep
            self._live.stop()
            self._live = None

    def _started(self) -> Live:
        from rich.live import Live

        if self._live is None:
            self._live = Live(console=self.console, auto_refresh=False, transient=True)
            self._live.start()
        return self._live

    def _begin_anew(self) -> None:
        """Clear the screen and tell the latest news again: a terminal that has changed its width has moved lines."""
        self.close(keep=False)
        self.console.clear()
        for lines, colour in list(self._news)[-self.console.size.height // 2 :]:
            self._print(lines, colour)

    def _print(self, lines: str, colour: str | None) -> None:
        from rich.text import Text

        self.console.print(Text(lines, style=_style(colour)), soft_wrap=True)


class LiveView(RunView):
    """Shows a run on a terminal; made, fed and asked for its summary like `RunView`.

    Parameters
    ----------
    modes
        Channel and mode of each mode, in the order of the configuration.
    every_s
        Of no use here: how things stand is always shown.
    clock
        Monotonic seconds, for the pace of redrawing alone.
    """

    def __init__(
        self,
        modes: Iterable[tuple[str, str]],
        every_s: float | None = None,  # noqa: ARG002 - the parameters of RunView
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        known = list(modes)
        super().__init__(known, None)
        self.board = Board(known)
        self._pane = Pane()
        self._clock = clock
        self._drawn_at = -REDRAW_S
        self._closed = False
        self._gone: OSError | None = None  # what a sign of life met, for `show` to raise

    @property
    def is_drawn(self) -> bool:
        """It is."""
        return True

    def show(self, envelopes: Sequence[Envelope]) -> None:
        """Take a group of records: tell news, redraw what stands.

        Raises
        ------
        OSError
            When the terminal is gone, also where only a sign of life found that out.
        """
        if self._gone is not None:
            gone, self._gone = self._gone, None
            raise gone
        self.board.take(envelopes)
        super().show(envelopes)
        self._redraw()

    def beat(self, heartbeat: Heartbeat) -> None:
        """Take a sign of life: ages go on while nothing is measured."""
        self.board.beat(heartbeat)
        self._redraw_now()

    def status(self, text: str) -> None:
        """Show what the run itself does, such as wait for its device, until it is told anew; empty: nothing."""
        self._state = text
        self._redraw_now()

    def close(self) -> None:
        """Give the terminal back; what stands is said by the summary."""
        self._closed = True
        self._pane.close(keep=False)

    def _redraw_now(self) -> None:
        """Redraw for a sign of life, whose giver must not suffer from a terminal that is gone: `show` tells of that."""
        try:
            self._redraw(now=True)
        except OSError as error:
            self._gone = error

    def _redraw(self, *, now: bool = False) -> None:
        if self._closed or not (now or self._clock() - self._drawn_at >= REDRAW_S):
            return
        self._drawn_at = self._clock()
        width, height = self._pane.size
        rule = Entry("rule", ("─" * width,), "dim")  # between the news and what stands
        found = screen_of(self.board, width, height - height // _NEWS_SHARE - 1, self._state)
        self._pane.draw([rule, *found])

    def _put(self, lines: str, colour: str | None = None) -> None:
        self._pane.tell(lines, colour)


def _text(line: str, colour: str | None) -> Text:
    from rich.text import Text

    return Text(line, style=_style(colour), no_wrap=True, overflow="ellipsis")


def _style(colour: str | None) -> str:
    return "bold red" if colour == "red" else colour or ""
