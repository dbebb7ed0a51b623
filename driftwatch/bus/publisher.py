"""The publishing end of the bus: whoever listens hears, nobody is waited for."""

from __future__ import annotations

import errno
import time
from typing import TYPE_CHECKING

import zmq
from pydantic_core import PydanticCustomError

from driftwatch.bus.errors import BusError
from driftwatch.bus.last_values import LastValues
from driftwatch.bus.wire import HEARTBEAT, encode_heartbeat, encode_json
from driftwatch.config import BEYOND, LOOPBACK, check_endpoint, is_loopback
from driftwatch.records import topic_of

if TYPE_CHECKING:
    from collections.abc import Iterable
    from typing import Self

    from driftwatch.records import Envelope, Heartbeat

_SUBSCRIBES = b"\x01"
"""First byte of the message by which a subscriber adds a prefix."""

QUEUED_MESSAGES = 10_000
"""Messages held for a subscriber that does not read, about 10 MB; what comes then is lost to it, and to it alone."""

LONGEST_PREFIX = 4096
"""Bytes of the longest message that a subscriber may send; it has nothing to send but prefixes of topics."""

MOST_READ = 10_000
"""Subscriptions read at a time, so that no subscriber can keep the publisher from its work."""

HELD_UNREAD = 30
"""Subscriptions of one subscriber that wait to be read; past them the library lets it wait. With more it takes them in
faster than they are read, and holds them all."""

MOST_PREFIXES = 64
"""Different prefixes told apart at a time; where more are asked for, the last value of every topic is sent again."""

HANDSHAKE_MS = 5000
"""How long a connection may take to say who it is: silent ones must not use up what the process may have open."""

LINGER_MS = 500
"""How long closing waits for messages under way."""


def checked_endpoint(endpoint: str, *, guarded: bool = False) -> str:
    """Return an endpoint unchanged if it may be bound; `guarded`: only whoever has a key comes in.

    Raises
    ------
    BusError
        When it is no ``tcp://HOST:PORT``, or lies beyond loopback and is not guarded.
    """
    # A star stands for any free port: good for binding, though not for a configuration that others must know.
    try:
        check_endpoint(endpoint.removesuffix("*") + "1" if endpoint.endswith(":*") else endpoint)
    except PydanticCustomError as error:
        context = error.context or {}
        raise BusError(f"got {endpoint!r}; expected {context.get('expected')}; {context.get('remedy')}") from None
    if not guarded and not is_loopback(endpoint):
        raise BusError(f"got {endpoint!r}; expected {BEYOND}; {LOOPBACK}")
    return endpoint


class Publisher:
    """A publishing socket; every message is two frames, the topic and one JSON object.

    Parameters
    ----------
    endpoint
        ``tcp://127.0.0.1:PORT``; port ``*`` takes a free one, see `endpoint`.
    context
        Of the socket; left out: its own, ended with it.
    server_key
        Public and secret key: whoever listens must have a key that the guard of `context` lets in, and what is sent
        is encrypted. None: whoever reaches the endpoint may listen, so it must lie on loopback.

    Raises
    ------
    BusError
        When the endpoint is malformed, beyond loopback, or taken.

    Sending never waits: a subscriber that does not read loses messages once `QUEUED_MESSAGES` wait for it, and sees
    that by ``previous``. Whoever subscribes gets the last message of each topic asked for again, marked as repeated,
    within `REPEAT_EVERY_S` and the time to the next call of `serve`, `publish` or `heartbeat`. Not for use by two
    threads at once.
    """

    def __init__(
        self,
        endpoint: str,
        context: zmq.Context[zmq.Socket[bytes]] | None = None,
        server_key: tuple[bytes, bytes] | None = None,
    ) -> None:
        checked_endpoint(endpoint, guarded=server_key is not None)
        self._context = zmq.Context() if context is None else context
        self._owned = self._context if context is None else None
        self._server_key = server_key
        self._last = LastValues()
        self._socket = self._new_socket(endpoint)
        try:
            self._socket.bind(endpoint)
        except zmq.ZMQError as error:
            self.close()
            raise _bind_error(endpoint, error) from None
        self.endpoint: str = self._socket.getsockopt_string(zmq.LAST_ENDPOINT)
        self.trouble: BusError | None = None  # why nothing goes out since the last `rebind`; None: it does

    def _new_socket(self, endpoint: str) -> zmq.Socket[bytes]:
        socket = self._context.socket(zmq.XPUB)
        socket.setsockopt(zmq.XPUB_VERBOSE, 1)  # tell of a subscription that somebody else has as well
        socket.setsockopt(zmq.SNDHWM, QUEUED_MESSAGES)
        socket.setsockopt(zmq.RCVHWM, HELD_UNREAD)
        socket.setsockopt(zmq.MAXMSGSIZE, LONGEST_PREFIX)
        socket.setsockopt(zmq.LINGER, LINGER_MS)
        socket.setsockopt(zmq.HANDSHAKE_IVL, HANDSHAKE_MS)
        socket.setsockopt(zmq.IPV6, int(endpoint.startswith("tcp://[")))
        if self._server_key is not None:
            socket.curve_publickey, socket.curve_secretkey = self._server_key
            socket.curve_server = True
            socket.zap_domain = b"publish"
            socket.setsockopt(zmq.ZAP_ENFORCE_DOMAIN, 1)  # where there is no guard nobody is let in
        return socket

    def rebind(self) -> None:
        """Send every listener away and let in anew whoever may come: one who was let in before may be so no more.

        Listeners come back by themselves. What is published before they are back is lost to them, and they see that
        by the numbers; last values they get again. The old socket frees the port a moment after it was closed: what
        is published meanwhile goes nowhere, and `serve` tries again. Nothing here waits; see `trouble`.
        """
        self._socket.close(linger=0)
        self._socket = self._new_socket(self.endpoint)
        self._bind_again()

    def _bind_again(self) -> None:
        try:
            self._socket.bind(self.endpoint)
        except zmq.ZMQError as error:
            self.trouble = _bind_error(self.endpoint, error)
        else:
            self.trouble = None

    def publish(self, envelopes: Iterable[Envelope]) -> None:
        """Send records in order."""
        self.serve()
        for envelope in envelopes:
            topic, message = topic_of(envelope.body).encode(), encode_json(envelope)
            self._socket.send_multipart((topic, message))
            self._last.sent(topic, message)

    def heartbeat(self, heartbeat: Heartbeat) -> None:
        """Send a sign of life."""
        self.serve()
        self._socket.send_multipart((HEARTBEAT.encode(), encode_heartbeat(heartbeat)))

    def serve(self) -> None:
        """Send last values to whoever has subscribed since; to be called every second at least, at any time."""
        if self.trouble is not None:
            self._bind_again()
        if prefixes := self._asked_for():
            self._last.want(*prefixes)
        for frames in self._last.due(time.monotonic()):
            self._socket.send_multipart(frames)

    def _asked_for(self) -> set[bytes]:
        """Return the prefixes that were subscribed to since; past `MOST_PREFIXES` the one of every topic."""
        prefixes: set[bytes] = set()
        for _ in range(MOST_READ):
            try:
                request = self._socket.recv(zmq.NOBLOCK)
            except zmq.Again:
                break
            if request[:1] == _SUBSCRIBES and len(prefixes) <= MOST_PREFIXES:
                prefixes.add(request[1:])
        return prefixes if len(prefixes) <= MOST_PREFIXES else {b""}

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
