"""A busy daemon on a simulated source, and somebody beside it who writes down all that it publishes."""

from __future__ import annotations

import json
import os
import signal
import socket
import sqlite3
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager
from pathlib import Path
from typing import Any, Self

import zmq
from driftwatch.records import KINDS

LONG_S = 120.0
"""A deadline for what takes a few seconds on a computer that has nothing else to do."""

_HEAD = """
schema = 1
[station]
name = "busy"
[[source]]
name = "model"
kind = "simulated"
rate_hz = 4000
inputs = 2
seed = 5
noise = 0.002
"""

_CHANNEL = """
[[channel]]
name = "bearing {number}"
input = {number}
"""

_RESONATOR = """
[[source.resonator]]
input = {number}
frequency_hz = {frequency}
q = 20.0
level = 0.05
"""

_MODE = """
[[mode]]
name = "at {frequency} Hz"
channel = "bearing {number}"
search_hz = [{low}, {high}]
window_s = 0.5
step_s = 0.05
"""


_TAIL = """
[store]
url = "sqlite:///state/rows.db"
[bus]
publish = "tcp://127.0.0.1:{port}"
control = "tcp://127.0.0.1:{control}"
[daemon]
workers = 1
"""


_LOCK = """
import sqlite3, sys
connection = sqlite3.connect(sys.argv[1], isolation_level=None, timeout=30.0)
connection.execute("BEGIN EXCLUSIVE")
print("locked", flush=True)
sys.stdin.readline()
"""


def busy_config(port: int, control: int) -> str:
    """Return the text of a configuration of two channels with two modes each: 160 records a second."""
    modes = [
        {"number": number, "frequency": frequency, "low": frequency - 80, "high": frequency + 80}
        for number in (1, 2)
        for frequency in (400, 900)
    ]
    resonators = "".join(_RESONATOR.format(**mode) for mode in modes)
    channels = "".join(_CHANNEL.format(number=number) for number in (1, 2))
    followed = "".join(_MODE.format(**mode) for mode in modes)
    return _HEAD + resonators + channels + followed + _TAIL.format(port=port, control=control)


def free_ports(count: int) -> list[int]:
    """Return ports that nobody listens on."""
    sockets = [socket.socket() for _ in range(count)]
    try:
        for one in sockets:
            one.bind(("127.0.0.1", 0))
        return [int(one.getsockname()[1]) for one in sockets]
    finally:
        for one in sockets:
            one.close()


def until(found: Callable[[], Any], what: str, seconds: float = LONG_S) -> Any:
    """Return what is found once it is there and true."""
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        if value := found():
            return value
        time.sleep(0.01)
    raise AssertionError(f"not within {seconds:g} s: {what}")


class Recorder:
    """Subscribes to everything, over every restart of the daemon, and keeps it.

    Attributes
    ----------
    records, beats
        What came, in order, with the time of its arrival on the computer's clock, seconds.
    """

    def __init__(self, endpoint: str) -> None:
        self.records: list[tuple[float, dict[str, Any]]] = []
        self.beats: list[tuple[float, dict[str, Any]]] = []
        self._endpoint = endpoint
        self._ended = threading.Event()
        self._thread = threading.Thread(target=self._listen)
        self._thread.start()

    def _listen(self) -> None:
        with zmq.Context() as context, context.socket(zmq.SUB) as listening:
            listening.setsockopt(zmq.LINGER, 0)
            listening.setsockopt(zmq.RCVHWM, 0)
            listening.setsockopt(zmq.RECONNECT_IVL, 20)
            listening.setsockopt_string(zmq.SUBSCRIBE, "")
            listening.connect(self._endpoint)
            while not self._ended.is_set():
                if listening.poll(50):
                    topic, message = listening.recv_multipart()
                    kept = self.beats if topic == b"heartbeat" else self.records
                    kept.append((time.time(), json.loads(message)))

    def of(self, kind: str, **wanted: Any) -> list[dict[str, Any]]:
        """Return the records of a kind with these values."""
        found = [one for _, one in list(self.records) if one["kind"] == kind]
        return [one for one in found if all(one[name] == value for name, value in wanted.items())]

    def close(self) -> None:
        """Listen no more."""
        self._ended.set()
        self._thread.join()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


class BusyDaemon:
    """``driftwatch run`` as a process in a folder of its own; may be started again and again."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        port, control = free_ports(2)
        self.endpoint = f"tcp://127.0.0.1:{port}"
        self.database = folder / "state" / "rows.db"
        (folder / "busy.toml").write_text(busy_config(port, control), encoding="utf-8")
        self.process: subprocess.Popen[str] | None = None
        self._log = folder / "log.txt"

    def start(self, **environment: str) -> subprocess.Popen[str]:
        """Start it; what it says is in `log`."""
        with self._log.open("a", encoding="utf-8") as log:
            self.process = subprocess.Popen(
                [sys.executable, "-m", "driftwatch", "run", "busy.toml", "--json"],
                cwd=self.folder,
                env={**os.environ, "OMP_NUM_THREADS": "1", "PYTHONFAULTHANDLER": "1", **environment},
                stdout=subprocess.DEVNULL,
                stderr=log,
                text=True,
            )
        return self.process

    @property
    def log(self) -> str:
        """Everything that it said on standard error, over all starts."""
        return self._log.read_text(encoding="utf-8")

    def until(self, found: Callable[[], Any], what: str) -> Any:
        """Return what is found once it is there and true, as long as the daemon runs."""

        def found_or_ended() -> Any:
            if self.process is not None and (status := self.process.poll()) is not None:
                raise AssertionError(f"it ended with status {status} before {what}")
            return found()

        try:
            return until(found_or_ended, what)
        except AssertionError as error:
            if self.process is not None and self.process.poll() is None:
                self.process.send_signal(signal.SIGABRT)  # says where it hangs
                self.process.wait()
            raise AssertionError(f"{error}; it said {self.log[-3000:]}") from error

    def kill(self) -> None:
        """Kill it as nothing can be caught."""
        if self.process is not None:
            self.process.kill()
            self.process.wait()

    def end(self) -> int:
        """Ask it to end; return its exit status."""
        if self.process is None:
            raise RuntimeError("it was not started")
        self.process.send_signal(signal.SIGTERM)
        return self.process.wait(LONG_S)

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.kill()


@contextmanager
def locked(path: Path) -> Iterator[None]:
    """Hold a database in another process."""
    with subprocess.Popen(
        [sys.executable, "-c", _LOCK, path], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    ) as other:
        if other.stdout is None or other.stdout.readline() != "locked\n":
            raise RuntimeError(f"{path} could not be locked")
        try:
            yield
        finally:
            other.communicate("\n")


def stored(path: Path) -> set[tuple[str, int]]:
    """Return run and sequence of every record in a database."""
    with closing(sqlite3.connect(path)) as connection:
        return {
            (run, sequence)
            for kind in KINDS
            for run, sequence in connection.execute(
                f"SELECT run, sequence FROM {kind} JOIN header ON header.id = header"  # noqa: S608 - our own words
            )
        }


def integrity(path: Path) -> str:
    """Return what the library finds wrong in a database; ``ok``: nothing."""
    with closing(sqlite3.connect(path)) as connection:
        found = [str(row[0]) for row in connection.execute("PRAGMA integrity_check")]
        return "; ".join(found) if not connection.execute("PRAGMA foreign_key_check").fetchall() else "foreign keys"
