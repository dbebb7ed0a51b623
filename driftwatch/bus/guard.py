"""Who is let in: asked at every handshake, and again for every request, so that a revoked key is out at once."""

from __future__ import annotations

import threading
import time
from typing import TYPE_CHECKING

from zmq.auth.thread import ThreadAuthenticator

from driftwatch.bus.errors import KeysError, NoKeyError
from driftwatch.bus.keys import Granted
from driftwatch.bus.sparing import SparseLog

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path
    from typing import Self

    import zmq

    from driftwatch.bus.keys import KeyFolder

CONTROL, PUBLISH = "control", "publish"
"""Domains: what a key wants to come in to."""

LOG_EVERY_S = 5.0
"""Time between two lines of the log about the same thing, seconds."""

_Signature = tuple[int, int, int] | None


class Register:
    """The keys that may come in now, read again whenever a file of theirs was changed.

    Parameters
    ----------
    keys
        Where they lie.
    told
        Takes a line for the log, and whether it is of a fault.

    While the list cannot be read nobody of it is let in. Serves several threads.
    """

    def __init__(self, keys: KeyFolder, told: Callable[[str, bool], None]) -> None:
        self._keys = keys
        self._told = told
        self._lock = threading.Lock()
        self._seen: tuple[_Signature, _Signature] | None = (None, None)  # None: not wholly read
        self._faults: set[str] = set()  # that were told
        self._holders: dict[str, Granted] = {}
        self._revocations = 0

    def holder(self, public: str) -> Granted | None:
        """Return whose key it is; None: nobody's who may come in."""
        with self._lock:
            self._refresh()
            return self._holders.get(public)

    @property
    def revocations(self) -> int:
        """How often keys went out of the list."""
        with self._lock:
            self._refresh()
            return self._revocations

    def _refresh(self) -> None:
        seen = (_signature(self._keys.granted_path), _signature(self._keys.operator_path))
        if seen == self._seen:
            return
        before, faults = self._holders, set[str]()
        self._holders = {one.public: one for one in (*self._operator(faults), *self._granted(faults))}
        self._seen = None if faults else seen  # it may have been for want of a descriptor: read again at the next look
        for fault in sorted(faults - self._faults):
            self._told(fault, True)
        self._faults = faults
        gone = sorted(one.name for public, one in before.items() if public not in self._holders)
        if gone:
            self._revocations += 1
            self._told(f"No longer let in: {', '.join(gone)}", False)

    def _granted(self, faults: set[str]) -> tuple[Granted, ...]:
        try:
            return self._keys.granted()
        except KeysError as error:
            faults.add(f"No granted key is let in: {error}")
            return ()

    def _operator(self, faults: set[str]) -> tuple[Granted, ...]:
        try:
            key = self._keys.operator()
        except NoKeyError:
            return ()  # it is made later in the start
        except KeysError as error:
            faults.add(f"The user's own key is not let in: {error}")
            return ()
        return (Granted(key.name, key.role, key.public, 0),)


def _signature(path: Path) -> _Signature:
    """Return what changes when a file is exchanged or opened to others; None: there is none."""
    try:
        found = path.stat()
    except OSError:
        return None
    return (found.st_ino, found.st_ctime_ns, found.st_mode)


class Guard:
    """Answers the library's question whether a key may come in (ZAP, ZeroMQ RFC 27), on a thread of its own.

    Parameters
    ----------
    context
        Whose sockets it guards: those with a server's key. It must run before the first of them is bound.
    keys
        Who may come in.
    told
        Takes a line for the log, and whether it is of a fault; called on several threads.
    """

    def __init__(
        self, context: zmq.Context[zmq.Socket[bytes]], keys: KeyFolder, told: Callable[[str, bool], None]
    ) -> None:
        self.register = Register(keys, told)
        self._told = told
        self._log = SparseLog(LOG_EVERY_S)
        self._log_lock = threading.Lock()
        self._zap = ThreadAuthenticator(context)
        self._zap.start()
        for domain in (CONTROL, PUBLISH):
            self._zap.configure_curve_callback(domain, self)

    def callback(self, domain: str, key: bytes) -> bool:
        """Say whether a public key may come in; the library calls it at a handshake."""
        public = key.decode("ascii", "replace")
        if self.register.holder(public) is not None:
            return True
        what = "give commands" if domain == CONTROL else "listen"
        self.note(f"unknown {domain}", f"Refused: a key that is not granted wanted to {what} ({public[:8]}...)")
        return False

    def note(self, kind: str, text: str) -> None:
        """Tell what may happen often: at most a line every `LOG_EVERY_S` of each kind."""
        with self._log_lock:
            line = self._log.note(kind, text, time.monotonic())
        if line is not None:
            self._told(line, True)

    def tell_due(self) -> None:
        """Tell what was held back; to be called every second or so."""
        with self._log_lock:
            lines = self._log.due(time.monotonic())
        for line in lines:
            self._told(line, True)

    def close(self) -> None:
        """End the thread; nobody new comes in."""
        self._zap.stop()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()
