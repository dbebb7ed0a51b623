"""Asking a daemon: the other end of the control port."""

from __future__ import annotations

import json
import time
import uuid
from typing import TYPE_CHECKING, Any

import zmq
from zmq.utils.monitor import parse_monitor_message

from driftwatch.bus.errors import AskError, KeyRefusedError, NoDaemonError
from driftwatch.bus.keys import ClientKey

if TYPE_CHECKING:
    from pathlib import Path
    from typing import Self

TIMEOUT_S = 5.0
"""Longest wait for a reply, seconds; a daemon answers within one."""

_EVENTS = (
    zmq.EVENT_CONNECTED
    | zmq.EVENT_HANDSHAKE_SUCCEEDED
    | zmq.EVENT_HANDSHAKE_FAILED_AUTH
    | zmq.EVENT_HANDSHAKE_FAILED_PROTOCOL
    | zmq.EVENT_HANDSHAKE_FAILED_NO_DETAIL
)
_MOST_BYTES = 64_000_000


class Asker:
    """A connection to a daemon's control port.

    Parameters
    ----------
    endpoint
        Where it takes commands; None: what stands in the key's file.
    key_file
        Of the key to come in with, see `ClientKey`.
    timeout_s
        Longest wait for each reply, seconds.

    Raises
    ------
    KeysError
        When there is no such file (`NoKeyError`), or it holds no key, or others may read it.
    AskError
        When neither tells an endpoint, or it is malformed.
    """

    def __init__(self, endpoint: str | None, key_file: Path, timeout_s: float = TIMEOUT_S) -> None:
        key = ClientKey.read(key_file)
        self.endpoint = endpoint or key.control or ""
        if not self.endpoint:
            raise AskError(
                f"{key_file} does not tell where the daemon takes commands, for it has not run yet; expected "
                "tcp://HOST:PORT; start it, or name its configuration with --config"
            )
        self.name = key.name
        self._key_file = key_file
        self._timeout_s = timeout_s
        self._context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self._socket = self._context.socket(zmq.DEALER)
        self._socket.curve_publickey, self._socket.curve_secretkey = key.public.encode(), key.secret.encode()
        self._socket.curve_serverkey = key.daemon.encode()
        self._socket.setsockopt(zmq.LINGER, 0)
        self._socket.setsockopt(zmq.MAXMSGSIZE, _MOST_BYTES)
        self._socket.setsockopt(zmq.IPV6, int(self.endpoint.startswith("tcp://[")))
        self._monitor = self._socket.get_monitor_socket(_EVENTS)
        self._seen = 0  # events of the connection so far
        try:
            self._socket.connect(reachable(self.endpoint))
        except zmq.ZMQError as error:
            self.close()
            raise AskError(f"{self.endpoint!r} cannot be asked: {error}; expected tcp://HOST:PORT") from None

    def ask(self, action: str, *, request: str | None = None, **fields: Any) -> dict[str, Any]:
        """Ask for something and return the reply: ``ok``, ``outcome`` in words, ``stored``, and what was asked for.

        Parameters
        ----------
        action
            status, since, acknowledge, note, covariate, reload or stop.
        request
            Id of the request: the same again is not done again and gets the same reply; None: a new one.
        fields
            ``by``, ``target``, ``reason``, ``value``, ``unit``, ``run``, ``sequence``; None is left out.

        Raises
        ------
        KeyRefusedError
            When the daemon does not let the key in, now or any more.
        NoDaemonError
            When nobody answers in time.
        """
        identity = request or str(uuid.uuid4())
        said = {"request": identity, "action": action} | {k: v for k, v in fields.items() if v is not None}
        self._socket.send(json.dumps(said).encode())
        end = time.monotonic() + self._timeout_s
        while True:
            reply = self._next(end)
            if reply.get("fault") == "key":
                raise self._refused()
            if reply.get("request") in (identity, None):
                return reply

    def _next(self, end: float) -> dict[str, Any]:
        """Return the next reply, whichever request it answers."""
        poller = zmq.Poller()
        poller.register(self._socket, zmq.POLLIN)
        poller.register(self._monitor, zmq.POLLIN)
        while (left := end - time.monotonic()) > 0:
            ready = dict(poller.poll(int(left * 1000) + 1))
            if self._monitor in ready:
                self._hear_monitor()
            if self._socket in ready:
                return self._object(self._socket.recv())
        raise self._silence()

    def _hear_monitor(self) -> None:
        event = int(parse_monitor_message(self._monitor.recv_multipart())["event"])
        self._seen |= event
        if event == zmq.EVENT_HANDSHAKE_FAILED_AUTH:
            raise self._refused()

    def _object(self, raw: bytes) -> dict[str, Any]:
        try:
            found = json.loads(raw)
        except ValueError:
            found = None
        if not isinstance(found, dict):
            raise AskError(f"{self.endpoint} answered {raw[:60]!r}; expected a daemon of driftwatch there")
        return found

    def _refused(self) -> KeyRefusedError:
        return KeyRefusedError(
            f"{self.endpoint} does not let in the key {self.name!r} of {self._key_file}; it was revoked, or is of "
            "another daemon; have one granted with `driftwatch keys grant NAME --role look|operate` where it runs"
        )

    def _silence(self) -> AskError:
        """Return what it means that nothing came in time."""
        waited = f"within {self._timeout_s:g} s"
        if self._seen & zmq.EVENT_HANDSHAKE_SUCCEEDED:
            return NoDaemonError(
                f"the daemon at {self.endpoint} did not answer {waited}; it is starting, or too busy; the same request "
                "again is not done twice"
            )
        if self._seen & zmq.EVENT_CONNECTED:
            return KeyRefusedError(
                f"something is at {self.endpoint}, but no daemon with the key that stands in {self._key_file}; "
                "check the endpoint, or have a new key granted where the daemon runs"
            )
        return NoDaemonError(
            f"nobody answers at {self.endpoint} {waited}; expected a running daemon; start it with "
            "`driftwatch run CONFIG`, or check the endpoint"
        )

    def close(self) -> None:
        """End the connection."""
        self._socket.disable_monitor()
        self._monitor.close(linger=0)
        self._socket.close()
        self._context.term()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


def reachable(endpoint: str) -> str:
    """Return where to go for an endpoint that is bound on every interface: to this computer."""
    for every, one in (("//*:", "//127.0.0.1:"), ("//0.0.0.0:", "//127.0.0.1:"), ("//[::]:", "//[::1]:")):
        endpoint = endpoint.replace(every, one)
    return endpoint
