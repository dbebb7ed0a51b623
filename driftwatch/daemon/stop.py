"""The wish to end, as a signal handler may utter it."""

from __future__ import annotations

from contextlib import suppress
from queue import Empty, SimpleQueue


class Stop:
    """A flag that a signal handler may set while the very thread that it interrupts waits for it.

    A ``threading.Event`` takes a lock both to wait and to be set, and a handler runs inside whatever the main thread
    is at: the lock may be its own, and it would wait for itself for ever. A ``SimpleQueue`` may be put into there.
    """

    def __init__(self) -> None:
        self._is_set = False
        self._bell: SimpleQueue[None] = SimpleQueue()

    def set(self) -> None:
        """Ask for the end."""
        self._is_set = True
        self._bell.put(None)

    def clear(self) -> None:
        """Take the wish back, once it is being fulfilled."""
        self._is_set = False

    def is_set(self) -> bool:
        """Say whether the end was asked for."""
        return self._is_set

    def wait(self, seconds: float) -> bool:
        """Wait until the end is asked for, for so many seconds at most; return whether it was."""
        if not self._is_set:
            with suppress(Empty):
                self._bell.get(timeout=seconds)
        return self._is_set
