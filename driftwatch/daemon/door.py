"""The daemon's door: its keys, the guard at every handshake, the control port, and who was sent away."""

from __future__ import annotations

import os
import pwd
from typing import TYPE_CHECKING

import zmq

from driftwatch.bus.clerk import Behind
from driftwatch.bus.control import ControlPort
from driftwatch.bus.errors import BusError
from driftwatch.bus.guard import Guard
from driftwatch.bus.keys import KeyFolder
from driftwatch.bus.publisher import Publisher
from driftwatch.config import BEYOND, is_loopback
from driftwatch.config.endpoints import GRANT
from driftwatch.daemon.answers import Answers, Stand
from driftwatch.daemon.commands import CommandDesk

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path
    from typing import Self

    from driftwatch.alert.book import Standing
    from driftwatch.bus.clerk import Progress
    from driftwatch.records import Heartbeat


class Door:
    """Who may hear and command a daemon, and by which ports.

    Parameters
    ----------
    state
        The state folder; the keys lie there.
    told
        Takes a line for the log, and whether it is of a fault; called on several threads.

    The guard runs from the beginning: no port is bound before it. The library's context, with its threads, is made
    here, in the main process; the children are programs of their own, started afresh, and inherit nothing of it.
    """

    def __init__(self, state: Path, told: Callable[[str, bool], None]) -> None:
        self._told = told
        self._keys = KeyFolder(state)
        self._context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self._guard = Guard(self._context, self._keys, told)
        self._port: ControlPort | None = None
        self._publisher: Publisher | None = None  # that is guarded
        self._revocations = 0
        self._answers: Answers | None = None
        self._is_in_use = self._was_told_dead = self._was_told_unheard = False
        self.desk = CommandDesk(self._post)

    # ------------------------------------------------------------------------------------------ opening

    def publisher(self, endpoint: str) -> Publisher:
        """Return the publishing end of the bus: open to everybody on loopback, for keys alone beyond it.

        Raises
        ------
        BusError
            When the endpoint is malformed, taken, or lies beyond loopback and no key was granted.
        """
        if is_loopback(endpoint):
            return Publisher(endpoint, self._context)
        if not self._keys.granted():
            raise BusError(f"got {endpoint!r}; expected {BEYOND}; {GRANT}")
        self._publisher = Publisher(endpoint, self._context, self._keys.daemon().as_bytes)
        self._revocations = self._guard.register.revocations
        return self._publisher

    def open(self, control: str, publish: str) -> str:
        """Make keys where there are none yet, bind the control port, and return where.

        Raises
        ------
        BusError
            When the endpoint is taken, or lies beyond loopback and no key was granted; or the keys cannot be had.
        """
        if not is_loopback(control) and not self._keys.granted():
            raise BusError(f"got {control!r}; expected {BEYOND}; {GRANT}")
        self._keys.ensure(user_name())
        self._port = ControlPort(control, self._context, self._keys.daemon().as_bytes, self._guard)
        self._keys.tell_operator(self._port.endpoint, publish)
        return self._port.endpoint

    def serve(self, store: Path) -> None:
        """Begin to answer; `store` is the database."""
        if self._port is None:
            raise ValueError("the control port was not opened")
        self._is_in_use = True
        self._answers = Answers(store)
        self._port.serve(Behind(self._answers.look, self.desk.submit, self._answers.known, self._guard.note))

    # ------------------------------------------------------------------------------------------ while it runs

    def stands(self, heartbeat: Heartbeat, standing: Standing) -> None:
        """Take in how things stand, for whoever asks."""
        if self._answers is not None:
            self._answers.post(Stand(heartbeat, standing))

    def chore(self) -> None:
        """Once a second: send listeners away whose keys were revoked; tell if nobody answers any more."""
        if self._port is not None and self._port.is_dead and not self._was_told_dead:
            self._was_told_dead = True
            self._told("The control port takes no commands any more, through a fault of the program; restart it", True)
        if self._publisher is None:
            return
        trouble, was_told = self._publisher.trouble, self._was_told_unheard
        self._was_told_unheard = trouble is not None
        if trouble is not None and not was_told:  # for a second by now: a port is free again sooner
            self._told(f"Nothing is published until the port is free again: {trouble}", True)
        revocations = self._guard.register.revocations
        if revocations != self._revocations:
            self._revocations = revocations
            self._publisher.rebind()

    def shut(self) -> None:
        """Answer what waits and close the control port; leave no keys behind if nothing came of the start."""
        if self._port is not None:
            self._port.close()
            self._port = None
        if not self._is_in_use:
            self._keys.discard()

    def close(self) -> None:
        """End the guard; to be called when every port is closed."""
        self.shut()
        self._guard.close()
        self._context.term()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def _post(self, news: Progress) -> None:
        if self._port is not None:
            self._port.post(news)


def user_name() -> str:
    """Return the name by which the operating system knows the user of this process."""
    try:
        return pwd.getpwuid(os.getuid()).pw_name
    except KeyError:
        return f"user {os.getuid()}"
