"""The command desk: between the control port's thread, which takes requests, and the main loop, which obeys."""

from __future__ import annotations

import queue
from typing import TYPE_CHECKING

from driftwatch.bus.clerk import Progress
from driftwatch.records import Action, Command

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from driftwatch.bus.clerk import Order
    from driftwatch.records import Envelope

MOST_WAITING = 64
"""Orders that wait for the main loop; more are refused."""


class CommandDesk:
    """Hands orders to the main loop, and how far they have come back.

    Parameters
    ----------
    news
        Takes how far an order has come; never waits.

    `submit` is called by the control port's thread, everything else by the main loop.
    """

    def __init__(self, news: Callable[[Progress], None]) -> None:
        self._news = news
        self._orders: queue.Queue[Order] = queue.Queue(MOST_WAITING)
        self._unstored: dict[int, Progress] = {}  # by the sequence of the last record of each
        self._is_ending = False

    def submit(self, order: Order) -> str | None:
        """Take an order; return why not, in words, or None: it was taken."""
        if self._is_ending:
            return "the daemon is ending; nothing was done"
        try:
            self._orders.put_nowait(order)
        except queue.Full:
            return f"{MOST_WAITING} commands wait to be carried out; ask again later"
        return None

    def end(self) -> None:
        """Take no order any more."""
        self._is_ending = True

    def carry_out(self, now_ns: Callable[[], int], feed: Callable[[Command], Sequence[Envelope]]) -> None:
        """Have the waiting orders carried out, in order.

        Parameters
        ----------
        now_ns
            Returns the stream time at which a command enters the stream.
        feed
            Does what a command asks for and returns its records, its own first; they are to be stored together.
        """
        for _ in range(MOST_WAITING):
            try:
                order = self._orders.get_nowait()
            except queue.Empty:
                return
            envelopes = feed(_command_of(order, now_ns()))
            outcome = str(getattr(envelopes[0].body, "outcome", None) or "")
            identity = order.request.request
            self._unstored[envelopes[-1].sequence] = Progress(identity, outcome, stored=True)
            self._news(Progress(identity, outcome, stored=False))

    def stored(self, group: Sequence[Envelope]) -> None:
        """Hear which records are in the store."""
        if not self._unstored:
            return
        for envelope in group:
            news = self._unstored.pop(envelope.sequence, None)
            if news is not None:
                self._news(news)


def _command_of(order: Order, time_ns: int) -> Command:
    request = order.request
    return Command(
        time_ns=time_ns,
        request=request.request,
        by=order.by,
        action=Action(request.action),
        target=request.target,
        reason=request.reason,
        value=request.value,
        unit=request.unit,
    )
