"""The control port: a socket and a thread that drive a `Clerk`.

What a stranger can do is bounded: whoever has no granted key gets no farther than the handshake, which must be done
within `HANDSHAKE_MS`; whoever has one may send messages of a few frames, none larger than `LARGEST_FRAME`, and all of
them together no more than `FRAMES_PER_S`: more wait in their own computers, not in this one.
"""

from __future__ import annotations

import errno
import json
import socket
import threading
import time
from collections import deque
from contextlib import suppress
from typing import TYPE_CHECKING, NamedTuple

import zmq

from driftwatch.bus.clerk import Clerk
from driftwatch.bus.errors import BusError
from driftwatch.bus.guard import CONTROL
from driftwatch.bus.publisher import HANDSHAKE_MS, checked_endpoint
from driftwatch.bus.sparing import Allowance

if TYPE_CHECKING:
    from collections.abc import Iterable
    from typing import Self

    from driftwatch.bus.clerk import Behind, Progress, Reply
    from driftwatch.bus.guard import Guard

LARGEST_FRAME = 65_536
"""Bytes; whoever sends a larger one is disconnected."""

WAITING_MESSAGES = 100
"""Held for, and from, one connection; replies that are not read beyond that are lost to it."""

FRAMES_PER_S, FRAMES_AT_ONCE = 2000.0, 200.0
"""Messages that are looked at, of all connections together: a flood must not take the processor from the daemon."""

PAUSE_S = 0.001
"""Time between two messages in a flood."""

LOOK_MS = 100
"""Longest time between two looks at what is due."""

LINGER_MS = 500
"""How long closing waits for replies under way."""


class Sender(NamedTuple):
    """Where a reply goes."""

    connection: bytes  # as the socket numbers it
    delimiter: tuple[bytes, ...]  # the empty frame before the message, where one came


class ControlPort:
    """A ROUTER socket that only granted keys come in to.

    Parameters
    ----------
    endpoint
        ``tcp://HOST:PORT``; port ``*`` takes a free one, see `endpoint`.
    context
        The one that `guard` guards.
    server_key
        The daemon's public and secret key.
    guard
        Tells whose a key is.

    Raises
    ------
    BusError
        When the endpoint is malformed or taken.

    Requests that come before `serve` wait.
    """

    def __init__(
        self, endpoint: str, context: zmq.Context[zmq.Socket[bytes]], server_key: tuple[bytes, bytes], guard: Guard
    ) -> None:
        checked_endpoint(endpoint, guarded=True)
        self._guard = guard
        self._news: deque[Progress] = deque()
        self._closing = False
        self._thread: threading.Thread | None = None
        self._bell, self._ring = socket.socketpair()
        self._bell.setblocking(False)
        self._ring.setblocking(False)
        self._socket = context.socket(zmq.ROUTER)
        try:
            _prepare(self._socket, endpoint, server_key)
            self._socket.bind(endpoint)
        except zmq.ZMQError as error:
            self.close()
            raise _bind_error(endpoint, error) from None
        self.endpoint: str = self._socket.getsockopt_string(zmq.LAST_ENDPOINT)

    def serve(self, behind: Behind) -> None:
        """Begin to answer, on a thread of its own."""
        # The socket is the thread's alone from here on; starting a thread hands it over safely.
        clerk: Clerk[Sender] = Clerk(behind)
        self._thread = threading.Thread(target=self._run, args=(clerk,), name="control", daemon=True)
        self._thread.start()

    @property
    def is_dead(self) -> bool:
        """Whether the thread ended although nobody asked it to."""
        return self._thread is not None and not self._closing and not self._thread.is_alive()

    def post(self, news: Progress) -> None:
        """Take in how far an order has come; from any thread, never waits."""
        self._news.append(news)
        self._wake()

    def close(self) -> None:
        """Answer what waits, and free the endpoint, after `LINGER_MS` at most."""
        self._closing = True
        self._wake()
        if self._thread is not None:
            self._thread.join()
        self._socket.close()
        self._bell.close()
        self._ring.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def _wake(self) -> None:
        with suppress(BlockingIOError):  # it was rung often enough
            self._ring.send(b"\0")

    # ------------------------------------------------------------------------------------------ the thread

    def _run(self, clerk: Clerk[Sender]) -> None:
        poller = zmq.Poller()
        poller.register(self._socket, zmq.POLLIN)
        poller.register(self._bell, zmq.POLLIN)
        allowance = Allowance(FRAMES_PER_S, FRAMES_AT_ONCE)
        while not self._closing:
            poller.poll(LOOK_MS)
            self._hear_bell()
            self._receive(clerk, allowance)
            while self._news:
                self._send(clerk.progress(self._news.popleft()))
            self._send(clerk.due(time.monotonic()))
            self._guard.tell_due()
        while self._news:
            self._send(clerk.progress(self._news.popleft()))
        self._send(clerk.close())

    def _hear_bell(self) -> None:
        with suppress(BlockingIOError):
            while self._bell.recv(4096):
                pass

    def _receive(self, clerk: Clerk[Sender], allowance: Allowance) -> None:
        """Take in what came, as much as may be looked at before everything else has its turn."""
        for _ in range(int(FRAMES_AT_ONCE)):
            try:
                frames = self._socket.recv_multipart(zmq.DONTWAIT, copy=False)
            except zmq.Again:
                return
            now = time.monotonic()
            self._take(clerk, frames, now)
            if not allowance.take(now):
                time.sleep(PAUSE_S)  # the next ones wait where they come from
                return

    def _take(self, clerk: Clerk[Sender], frames: list[zmq.Frame], now: float) -> None:
        connection, *rest = frames
        if not rest:
            return  # the connection's number alone: nobody said anything
        sender = Sender(connection.bytes, (b"",) if len(rest) > 1 and not rest[0].bytes else ())
        holder = self._guard.register.holder(_user_of(rest[-1]))
        raw = rest[-1].bytes if len(rest) == 1 + len(sender.delimiter) else _several(rest)
        self._send(clerk.hear(sender, holder, raw, now))

    def _send(self, replies: Iterable[tuple[Sender, Reply]]) -> None:
        for sender, reply in replies:
            # In ASCII: a file's name in a message may hold what is no text.
            raw = json.dumps(reply, allow_nan=False, separators=(",", ":")).encode("ascii")
            # Whoever went, or does not read, loses the reply; nobody waits.
            with suppress(zmq.Again):
                self._socket.send_multipart((sender.connection, *sender.delimiter, raw), zmq.DONTWAIT)


def _user_of(frame: zmq.Frame) -> str:
    """Return the public key that the handshake found, as the guard's thread named it."""
    try:
        return str(frame.get("User-Id"))
    except zmq.ZMQError:
        return ""


def _several(frames: list[zmq.Frame]) -> bytes:
    """Return something that is no request and says what came."""
    return b"%d frames" % len(frames)


def _prepare(router: zmq.Socket[bytes], endpoint: str, server_key: tuple[bytes, bytes]) -> None:
    router.curve_publickey, router.curve_secretkey = server_key
    router.curve_server = True
    router.zap_domain = CONTROL.encode()
    router.setsockopt(zmq.ZAP_ENFORCE_DOMAIN, 1)  # without a guard nobody comes in
    router.setsockopt(zmq.IPV6, int(endpoint.startswith("tcp://[")))
    router.setsockopt(zmq.MAXMSGSIZE, LARGEST_FRAME)
    router.setsockopt(zmq.HANDSHAKE_IVL, HANDSHAKE_MS)
    router.setsockopt(zmq.RCVHWM, WAITING_MESSAGES)
    router.setsockopt(zmq.SNDHWM, WAITING_MESSAGES)
    router.setsockopt(zmq.LINGER, LINGER_MS)
    router.setsockopt(zmq.HEARTBEAT_IVL, 10_000)  # a connection whose other end is gone is ended,
    router.setsockopt(zmq.HEARTBEAT_TIMEOUT, 30_000)  # or they would add up


def _bind_error(endpoint: str, error: zmq.ZMQError) -> BusError:
    if error.errno == errno.EADDRINUSE:
        return BusError(
            f"{endpoint} is taken by another process, perhaps another driftwatch; end that one, "
            "or take commands on another port with [bus] control"
        )
    return BusError(f"{endpoint} cannot take commands: {error}; expected a free port of this computer")
