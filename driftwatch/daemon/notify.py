"""What the daemon tells the service manager that started it: sd_notify, in the standard library.

The service manager names a unix datagram socket in ``NOTIFY_SOCKET``; each datagram holds lines ``NAME=value``. Where
the variable is not there, nobody asked, and nothing is sent.

**What the watchdog is for.** A measuring process may live and not measure: a callback that fell silent, a queue that
nobody reads. So ``WATCHDOG=1`` says not "I live" but "samples came since I last said so" (`ServiceManager.alive`), and
a daemon whose samples stand still for a whole interval is ended and started anew.

**What it is not for.** A device that is gone does not come back by a restart: it would only cost the run, the tracks
and the timers of its alerts, again and again for as long as the device is away. While the daemon knows that the device
is gone and tries to open it, it says no ``WATCHDOG=1`` either, for no samples come. Instead it asks for more time with
``WATCHDOG_USEC`` (`ServiceManager.waiting`), which begins a new, longer interval, and it asks again only when another
attempt was made. So a daemon that waits is left alone for as long as it tries, one that hangs while it waits is
restarted as well, if later, and the first samples put the old interval back. The gap meanwhile is told by the health
record and the alert of no data.
"""

from __future__ import annotations

import os
import socket
import time
from collections.abc import Mapping
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from typing import Self

PATIENCE_S = 1.0
"""Longest wait for a service manager whose queue is full, where a message must not be lost, seconds."""

WAITING_FACTOR = 5
"""While a device is waited for, the watchdog's interval is so many times as long: attempts are made with back-off."""

LONGEST_STATUS = 500
"""Bytes of a status; a datagram of more than 4096 bytes is thrown away by the service manager."""

_US = 1_000_000


class ServiceManager:
    """The line to the service manager; without one every call does nothing.

    Every method returns whether a message was sent and taken.

    Parameters
    ----------
    environment
        Where ``NOTIFY_SOCKET``, ``WATCHDOG_USEC`` and ``WATCHDOG_PID`` stand; the process's own if left out. The
        daemon's children inherit the variables and must not use them: only the main process is listened to.

    Attributes
    ----------
    interval_s
        The watchdog's interval in seconds; None: there is no watchdog, or it is meant for another process.
    warnings
        What stands in the environment and cannot be used, each in one line; empty in practice.
    """

    def __init__(self, environment: Mapping[str, str] | None = None) -> None:
        environment = os.environ if environment is None else environment
        found: list[str] = []
        self._address = _address(environment, found)
        self.interval_s = _interval_s(environment, found) if self._address else None
        self.warnings = tuple(found)
        self._socket = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) if self._address else None
        self._samples = 0  # and the next two: as of the last message of the watchdog that was sent
        self._attempts = 0
        self._said: float | None = None  # monotonic seconds
        self._is_longer = False  # the interval, since a device is waited for

    def ready(self, status: str) -> bool:
        """Tell that the start, or a reload, is done: it measures, or it waits for its device as it was told to."""
        return self._tell("READY=1", _status(status), patience_s=PATIENCE_S)

    def status(self, text: str) -> bool:
        """Tell in one line what the daemon is at; for people, and lost rather than waited for."""
        return self._tell(_status(text))

    def reloading(self) -> bool:
        """Tell that a reload begins; `ready` must follow, whether it was taken or refused."""
        return self._tell(
            "RELOADING=1",
            f"MONOTONIC_USEC={time.clock_gettime_ns(time.CLOCK_MONOTONIC) // 1000}",
            patience_s=PATIENCE_S,
        )

    def stopping(self, status: str = "") -> bool:
        """Tell that the end begins."""
        return self._tell("STOPPING=1", *([_status(status)] if status else []), patience_s=PATIENCE_S)

    def alive(self, now_monotonic: float, samples: int) -> bool:
        """Feed the watchdog if samples came since it was last fed; a quarter of the interval apart at least.

        Parameters
        ----------
        now_monotonic
            Monotonic time in seconds.
        samples
            How many samples came since the start of the daemon. Samples that came, not stream time: a gap is no sign
            of life.
        """
        if not self._is_due(now_monotonic) and not self._is_longer:
            return False
        if samples <= self._samples or self.interval_s is None:
            return False
        shorter = [f"WATCHDOG_USEC={round(self.interval_s * _US)}"] if self._is_longer else []
        if not self._tell("WATCHDOG=1", *shorter):
            return False  # and it is tried again at the next call
        self._samples, self._said, self._is_longer = samples, now_monotonic, False
        return True

    def waiting(self, now_monotonic: float, attempts: int) -> bool:
        """Ask for a longer interval while a device that is known to be gone is waited for.

        Parameters
        ----------
        now_monotonic
            Monotonic time in seconds.
        attempts
            How many attempts to open it were made since the start of the daemon. Asked for only if they advanced, a
            quarter of the interval apart at least: whoever makes no attempt does not wait, but hangs.
        """
        if self.interval_s is None or attempts <= self._attempts or not self._is_due(now_monotonic):
            return False
        if not self._tell(f"WATCHDOG_USEC={round(WAITING_FACTOR * self.interval_s * _US)}"):
            return False
        self._attempts, self._said, self._is_longer = attempts, now_monotonic, True
        return True

    def _is_due(self, now: float) -> bool:
        return self._said is None or (self.interval_s is not None and now - self._said >= self.interval_s / 4)

    def _tell(self, *lines: str, patience_s: float = 0.0) -> bool:
        """Send one datagram; False where nobody listens, or nobody took it in time."""
        if self._socket is None or self._address is None:
            return False
        self._socket.settimeout(patience_s)  # 0: never waits
        try:
            self._socket.sendto("\n".join(lines).encode(), self._address)
        except OSError:  # its queue is full, or it is just starting anew: nothing that a measurement should end for
            return False
        return True

    def close(self) -> None:
        """Let go of the socket; nothing is sent any more."""
        if self._socket is not None:
            self._socket.close()
            self._socket = None

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


def _status(text: str) -> str:
    """Return a status line; a line break in it would be an assignment of its own."""
    line = "".join(mark if mark.isprintable() else " " for mark in text)
    return f"STATUS={line.encode(errors='replace')[:LONGEST_STATUS].decode(errors='ignore')}"


def _address(environment: Mapping[str, str], warnings: list[str]) -> str | None:
    """Return the socket's address as Python takes it; ``@`` stands for the zero byte of an abstract name."""
    name = environment.get("NOTIFY_SOCKET", "")
    if not name:
        return None
    if name[0] not in "/@" or len(name) == 1:
        warnings.append(
            f"NOTIFY_SOCKET: got {name!a}; expected a path from the root on, or an abstract name after @; "
            "the service manager is told nothing"
        )
        return None
    return "\0" + name[1:] if name[0] == "@" else name


def _interval_s(environment: Mapping[str, str], warnings: list[str]) -> float | None:
    """Return the watchdog's interval, None where there is none for this process."""
    text, pid = environment.get("WATCHDOG_USEC", ""), environment.get("WATCHDOG_PID", "")
    if not text or (pid and pid != str(os.getpid())):
        return None
    if not (text.isascii() and text.isdigit() and int(text) > 0):
        warnings.append(
            f"WATCHDOG_USEC: got {text!a}; expected a whole number of microseconds over 0; the watchdog is not fed"
        )
        return None
    return int(text) / _US
