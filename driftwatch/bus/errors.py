"""What can go wrong on the bus.

::

    BusError          the endpoint cannot be used
    └── WireError     a message is no record of ours
"""

from __future__ import annotations


class BusError(Exception):
    """The endpoint is taken, malformed or not allowed."""


class WireError(BusError):
    """A message does not follow the wire's encoding."""
