"""Where a process of the daemon begins: ``python -m driftwatch.daemon.process ROLE RING PIPE``, by its parent only."""

from __future__ import annotations

import importlib
import signal
import sys
from contextlib import suppress
from multiprocessing.connection import Connection

from driftwatch.stream.hanging import leave_hung
from driftwatch.stream.ring import Ring

MODULES = {
    "capture": "driftwatch.daemon.capture",
    "tracker": "driftwatch.daemon.tracker",
    "recorder": "driftwatch.daemon.recorder",
}
"""Which module's `work` a role is; imported here, so that a process loads no more than it needs."""


def main(role: str, ring: int, pipe: int) -> None:
    """Receive the order and carry it out."""
    for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
        signal.signal(number, signal.SIG_IGN)  # the parent has them too, and says what is to be done
    module = importlib.import_module(MODULES[role])  # before there is an order: it takes a while
    parent_gone = (EOFError, BrokenPipeError, ConnectionResetError)  # nobody wants any more then
    with Connection(pipe) as connection, Ring(ring) as opened, suppress(*parent_gone):
        module.work(connection.recv(), opened, connection)
    if role == "capture":
        leave_hung(0)  # past the sound library's own ending, which may hang


if __name__ == "__main__":
    main(sys.argv[1], int(sys.argv[2]), int(sys.argv[3]))
