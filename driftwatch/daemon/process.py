"""Where a process of the daemon begins: ``python -m driftwatch.daemon.process ROLE RING PIPE``, by its parent only."""

from __future__ import annotations

import importlib
import signal
import sys
from multiprocessing.connection import Connection

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
    with Connection(pipe) as connection, Ring(ring) as opened:
        try:
            module = importlib.import_module(MODULES[role])  # before there is an order: it takes a while
            module.work(connection.recv(), opened, connection)
        except (EOFError, BrokenPipeError, ConnectionResetError):
            return  # the parent is gone: nobody wants any more


if __name__ == "__main__":
    main(sys.argv[1], int(sys.argv[2]), int(sys.argv[3]))
