"""What can go wrong on the bus.

::

    BusError                  the endpoint cannot be used
    ├── WireError             a message is no record of ours
    ├── KeysError             keys cannot be had, or are open to others
    │   └── NoKeyError        there is no such file
    └── AskError              a daemon could not be asked
        ├── NoDaemonError     nobody answers at the endpoint
        └── KeyRefusedError   the daemon does not let this key in
"""

from __future__ import annotations


class BusError(Exception):
    """The endpoint is taken, malformed or not allowed."""


class WireError(BusError):
    """A message does not follow the wire's encoding."""


class KeysError(BusError):
    """Keys cannot be read or written, or others may read them."""


class NoKeyError(KeysError):
    """There is no key where it was looked for."""


class AskError(BusError):
    """A daemon could not be asked."""


class NoDaemonError(AskError):
    """Nobody answers at the endpoint."""


class KeyRefusedError(AskError):
    """The daemon does not let this key in."""
