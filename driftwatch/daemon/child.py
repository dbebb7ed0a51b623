"""A process of the daemon, seen from the one that started it."""

from __future__ import annotations

import select
import signal
import subprocess
import sys
import tempfile
from contextlib import ExitStack
from multiprocessing.connection import Connection, Pipe
from typing import Any, Literal

Role = Literal["capture", "tracker", "recorder"]

AT_ONCE = 100
"""Messages taken from one child before it is another one's turn."""

KILL_S = 1.0
"""How long it is waited for the end of a process that was killed, seconds."""

LAST_WORDS = 2000
"""Bytes of the end of a process's standard error that are looked at for why it died."""


class Child:
    """A process with a pipe and the ring; it ends when its pipe does, so none outlives this one.

    Parameters
    ----------
    role
        What it does.
    ring
        Descriptor of the ring.

    It waits for its order, the first that it is told.

    Raises
    ------
    OSError
        When the system has no process, memory or descriptor for it.
    """

    def __init__(self, role: Role, ring: int) -> None:
        self.role = role
        self.connection: Connection[Any, Any]
        with ExitStack() as undo:
            self.connection, theirs = Pipe()
            undo.callback(self.connection.close)
            with theirs:
                self._words = undo.enter_context(tempfile.TemporaryFile())
                self._process = subprocess.Popen(  # noqa: S603 - ourselves
                    [sys.executable, "-m", "driftwatch.daemon.process", role, str(ring), str(theirs.fileno())],
                    pass_fds=(ring, theirs.fileno()),
                    stdin=subprocess.DEVNULL,
                    stdout=subprocess.DEVNULL,
                    stderr=self._words,
                    process_group=0,  # Ctrl-C in a terminal is for the parent: it ends its children in order
                )
            undo.pop_all()

    @property
    def pid(self) -> int:
        """Its process number."""
        return self._process.pid

    def tell(self, order: Any) -> bool:
        """Send an order; return whether it could be sent: never to one whose pipe is full, which reads no more."""
        try:
            if not select.select([], [self.connection], [], 0)[1]:
                return False
            self.connection.send(order)
        except OSError:
            return False
        return True

    def is_running(self) -> bool:
        """Say whether it runs."""
        return self._process.poll() is None

    def heard(self) -> tuple[list[Any], bool]:
        """Return what it said since the last time, or the first part of it, and whether it can still say more."""
        said: list[Any] = []
        try:
            while len(said) < AT_ONCE and self.connection.poll(0):
                said.append(self.connection.recv())
        except (EOFError, OSError):
            return said, False
        return said, True

    def kill(self) -> None:
        """End it whatever it is at, and let go of all that it needed.

        One that the system holds on to, since its device or disk hangs, ends when the system lets go of it.
        """
        self._process.kill()
        self.wait(KILL_S)
        self.connection.close()
        self._words.close()

    def wait(self, seconds: float) -> bool:
        """Wait for its end for so many seconds; return whether it came."""
        try:
            self._process.wait(seconds)
        except subprocess.TimeoutExpired:
            return False
        return True

    def why_it_died(self) -> str:
        """Return in words how it ended: by which signal, or with which last line."""
        code = self._process.poll()
        if code is None:
            return "it did not answer"
        if code < 0:
            return f"it was ended by {signal.Signals(-code).name}"
        self._words.seek(0, 2)
        self._words.seek(max(0, self._words.tell() - LAST_WORDS))
        lines = self._words.read().decode(errors="replace").strip().splitlines()
        return f"it ended with status {code}" + (f": {lines[-1].strip()}" if lines else "")
