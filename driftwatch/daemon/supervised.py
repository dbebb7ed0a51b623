"""A process that is started again whenever it dies or hangs."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from driftwatch.daemon.child import Child, Role
from driftwatch.daemon.restarts import Restarts

STARTING_S = 15.0
"""How long a process may take until its first sign of life, seconds."""


class Supervised:
    """One process of the daemon, by what it is for.

    Parameters
    ----------
    role
        What it does.
    ring
        Descriptor of the ring.
    order
        Returns what it is to do, asked for at each start; None: that is not known yet, and it is to wait for it.
    patience_s
        How long it may show no progress although there is work, seconds; None: for ever.
    """

    def __init__(self, role: Role, ring: int, order: Callable[[], Any | None], patience_s: float | None) -> None:
        self.role = role
        self.restarts = Restarts()
        self.child: Child | None = None
        self._ring = ring
        self._order = order
        self._patience_s = patience_s
        self._due = 0.0  # monotonic time of the next start
        self._is_wanted = True
        self._progress: int | None = None
        self._moved = 0.0  # when that was seen to change
        self._has_moved = False  # since it was started
        self._is_ordered = False
        self._not_started: str | None = None  # why not, until it is told

    def start_if_due(self, now: float) -> None:
        """Start it if it does not run and should, and give it its order once that is known."""
        if self.child is None and self._is_wanted and now >= self._due:
            try:
                self.child = Child(self.role, self._ring)
            except OSError as error:  # no memory, no descriptor, no process left: that may pass
                self._due = now + self.restarts.died(now)
                self._not_started = f"it could not be started: {error.strerror or error}"
                return
            self._progress, self._moved, self._has_moved, self._is_ordered = None, now, False, False
        if self.child is not None and not self._is_ordered:
            order = self._order()
            self._is_ordered = order is not None and self.child.tell(order)

    def heard(self, now: float) -> tuple[list[Any], str | None]:
        """Return what it said, and why it died, if it did: it is then started again in a while."""
        if self.child is None:
            why, self._not_started = self._not_started, None
            return [], why
        said, can_say_more = self.child.heard()
        if can_say_more and self.child.is_running():
            return said, None
        self.child.wait(1.0)  # the pipe closes a moment before the process has ended
        while can_say_more:  # what it said before it died counts
            more, can_say_more = self.child.heard()
            said += more
            can_say_more = can_say_more and bool(more)
        return said, self._bury(now, self.child.why_it_died())

    def hangs(self, now: float, progress: int, *, is_idle: bool) -> str | None:
        """Kill it if it shows no progress although there is work; return why, if so."""
        if self.child is None or self._patience_s is None:
            return None
        if is_idle or progress != self._progress:
            self._has_moved = self._has_moved or (self._progress is not None and progress != self._progress)
            self._progress, self._moved = progress, now
            return None
        patience = self._patience_s if self._has_moved else max(STARTING_S, self._patience_s)
        return self._kill(now) if now - self._moved > patience else None

    def _kill(self, now: float) -> str:
        return self._bury(now, f"it did nothing for {now - self._moved:.0f} s and was killed")

    def _bury(self, now: float, why: str) -> str:
        if self.child is not None:
            self.child.kill()
        self.child = None
        self._due = now + self.restarts.died(now)
        return why

    def is_looping(self, now: float) -> bool:
        """Say whether it dies again and again."""
        return self.restarts.is_looping(now)

    def dismiss(self) -> None:
        """Do not start it again."""
        self._is_wanted = False

    def tell(self, message: Any) -> None:
        """Send it something, if it runs."""
        if self.child is not None:
            self.child.tell(message)

    def end(self, seconds: float) -> bool:
        """Wait for its end, then kill it; return whether it ended by itself."""
        self.dismiss()
        if self.child is None:
            return True
        ended = self.child.wait(max(0.0, seconds))
        self.child.kill()
        self.child = None
        return ended
