"""The publishing end of the bus: whoever listens hears, nobody is waited for."""

from __future__ import annotations

import errno
from typing import TYPE_CHECKING

import zmq
from pydantic_core import PydanticCustomError

from driftwatch.bus.errors import BusError
from driftwatch.bus.wire import HEARTBEAT, encode_heartbeat, encode_json
from driftwatch.config import check_endpoint
from driftwatch.records import topic_of

if TYPE_CHECKING:
    from collections.abc import Iterable
    from typing import Self

    from driftwatch.records import Envelope, Heartbeat

QUEUED_MESSAGES = 10_000
"""Messages held for a subscriber that does not read, about 5 MB; what comes then is lost to it, and to it alone."""

LINGER_MS = 500
"""How long closing waits for messages under way."""


def checked_endpoint(endpoint: str) -> str:
    """Return an endpoint unchanged if it may be bound.

    Raises
    ------
    BusError
        When it is no ``tcp://HOST:PORT``, or lies beyond loopback.
    """
    # A star stands for any free port: good for binding, though not for a configuration that others must know.
    try:
        check_endpoint(endpoint.removesuffix("*") + "1" if endpoint.endswith(":*") else endpoint)
    except PydanticCustomError as error:
        context = error.context or {}
        raise BusError(f"got {endpoint!r}; expected {context.get('expected')}; {context.get('remedy')}") from None
    return endpoint


class Publisher:
    """A PUB socket; every message is two frames, the topic and one JSON object.

    Parameters
    ----------
    endpoint
        ``tcp://127.0.0.1:PORT``; port ``*`` takes a free one, see `endpoint`.
    context
        Of the socket; left out: its own, ended with it.

    Raises
    ------
    BusError
        When the endpoint is malformed, beyond loopback, or taken.

    Sending never waits: a subscriber that does not read loses messages once `QUEUED_MESSAGES` wait for it, and sees
    that by ``previous``. Not for use by two threads at once.
    """

    def __init__(self, endpoint: str, context: zmq.Context[zmq.Socket[bytes]] | None = None) -> None:
        checked_endpoint(endpoint)
        used = zmq.Context() if context is None else context
        self._owned = used if context is None else None
        self._socket = used.socket(zmq.PUB)
        self._socket.setsockopt(zmq.SNDHWM, QUEUED_MESSAGES)
        self._socket.setsockopt(zmq.LINGER, LINGER_MS)
        self._socket.setsockopt(zmq.IPV6, int(endpoint.startswith("tcp://[")))
        try:
            self._socket.bind(endpoint)
        except zmq.ZMQError as error:
            self.close()
            raise _bind_error(endpoint, error) from None
        self.endpoint: str = self._socket.getsockopt_string(zmq.LAST_ENDPOINT)

    def publish(self, envelopes: Iterable[Envelope]) -> None:
        """Send records in order."""
        for envelope in envelopes:
            self._socket.send_multipart((topic_of(envelope.body).encode(), encode_json(envelope)))

    def heartbeat(self, heartbeat: Heartbeat) -> None:
        """Send a sign of life."""
        self._socket.send_multipart((HEARTBEAT.encode(), encode_heartbeat(heartbeat)))

    def close(self) -> None:
        """Free the endpoint, after `LINGER_MS` at most."""
        self._socket.close()
        if self._owned is not None:
            self._owned.term()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


def _bind_error(endpoint: str, error: zmq.ZMQError) -> BusError:
    if error.errno == errno.EADDRINUSE:
        return BusError(
            f"{endpoint} is taken by another process, perhaps another driftwatch; end that one, "
            "or publish on another port with --publish or [bus] publish"
        )
    return BusError(f"{endpoint} cannot be published on: {error}; expected a free port of this computer")
