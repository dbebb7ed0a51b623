"""A real daemon that takes commands, and a network of two computers to watch what goes between them."""

from __future__ import annotations

import json
import os
import shutil
import signal
import socket
import subprocess
import sys
import threading
import uuid
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any, Self

from driftwatch.bus.client import Asker
from driftwatch.bus.keys import KeyFolder
from ordered import LONG_S, until

Row = dict[str, Any]

TEXT = """
schema = 1
[station]
name = "bench"
[[source]]
name = "model"
kind = "simulated"
rate_hz = 2000
seed = 5
noise = 0.002
[[source.resonator]]
frequency_hz = 380.0
q = 30.0
level = 0.05
[[channel]]
name = "drive end"
[[mode]]
name = "rocking"
channel = "drive end"
search_hz = [340.0, 460.0]
window_s = 1.0
step_s = 0.25
[[mode.band]]
name = "low"
low = {low}
on_delay_s = 0.5
off_delay_s = 1.0
[store]
url = "sqlite:///state/rows.db"
[bus]
publish = "tcp://{host}:{publish}"
control = "tcp://{host}:{control}"
"""
"""A mode at 380 Hz, under its limit of 400 Hz."""


class Obeyed:
    """``driftwatch run --json`` as a process, with what it prints.

    Parameters
    ----------
    folder
        Where it runs.
    host
        Where its ports are bound.
    prefix
        Words before the command, such as those that start it in a network of its own.
    """

    def __init__(self, folder: Path, host: str = "127.0.0.1", prefix: Sequence[str] = ()) -> None:
        self.path = folder / "bench.toml"
        with socket.socket() as one, socket.socket() as other:
            for each in (one, other):
                each.bind(("127.0.0.1", 0))
            self._ports = {"publish": one.getsockname()[1], "control": other.getsockname()[1]}
        self._host = host
        self._prefix = list(prefix)
        self.keys = KeyFolder(folder / "state")
        self.rows: list[Row] = []
        self.lines: list[str] = []

    def write(self, low: float = 400.0) -> None:
        self.path.write_text(TEXT.format(low=low, host=self._host, **self._ports), encoding="utf-8")

    def endpoint(self, which: str) -> str:
        return f"tcp://{self._host}:{self._ports[which]}"

    def __enter__(self) -> Self:
        self.process = subprocess.Popen(
            [*self._prefix, sys.executable, "-m", "driftwatch", "run", str(self.path), "--json"],
            cwd=self.path.parent,
            env={**os.environ, "OMP_NUM_THREADS": "1"},
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        self._threads = [
            threading.Thread(
                target=self._read, args=(self.process.stdout, lambda one: self.rows.append(json.loads(one)))
            ),
            threading.Thread(target=self._read, args=(self.process.stderr, self.lines.append)),
        ]
        for thread in self._threads:
            thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self.process.kill()
        self.process.wait()
        for thread in self._threads:
            thread.join()

    @staticmethod
    def _read(stream: Any, take: Any) -> None:
        with stream:
            for line in stream:
                take(line)

    def of(self, kind: str, **wanted: Any) -> list[Row]:
        """Return what was printed of a kind, with these values."""
        rows = [row for row in list(self.rows) if row["kind"] == kind]
        return [row for row in rows if all(row[name] == value for name, value in wanted.items())]

    def wait_for(self, kind: str, **wanted: Any) -> Row:
        return dict(until(lambda: self.of(kind, **wanted), f"a {kind} with {wanted}")[0])

    def told(self, words: str) -> str:
        """Return the line of standard error that holds the words, once it is there."""
        return str(until(lambda: [line for line in list(self.lines) if words in line], f"it says {words!r}")[0])

    def asker(self, key: Path | None = None) -> Asker:
        return Asker(self.endpoint("control"), key or self.keys.operator_path, 20.0)

    def end(self) -> None:
        """End it in good order."""
        self.process.send_signal(signal.SIGTERM)
        assert self.process.wait(LONG_S) == 0
        for thread in self._threads:
            thread.join()


def settled(asker: Asker, action: str, **fields: Any) -> dict[str, Any]:
    """Return what came of a command once it is stored: a busy computer may take longer than the first answer does."""
    fields.setdefault("request", str(uuid.uuid4()))

    def final() -> Any:
        reply = asker.ask(action, **fields)
        is_final = reply.get("stored", True) and reply.get("fault") != "rate"  # those before may have asked a lot
        return reply if is_final else None

    return dict(until(final, f"{action} is stored"))


# ---------------------------------------------------------------------------------------------- a network of two


def _ip(*words: str) -> None:
    subprocess.run(["ip", *words], check=True, capture_output=True)


def no_networks() -> str | None:
    """Return why no networks can be made here; None: they can."""
    if shutil.which("ip") is None:
        return "no command ip here"
    name = f"dw{os.getpid()}t"
    try:
        _ip("netns", "add", name)
        _ip("netns", "del", name)
    except subprocess.CalledProcessError as error:
        return f"ip netns: {error.stderr.decode(errors='replace').strip()}"
    return None


NEAR, FAR = "10.99.77.1", "10.99.77.2"
"""Addresses of the two computers."""


@contextmanager
def two_computers() -> Iterator[tuple[list[str], list[str]]]:
    """Give the words that start a program on each of two computers, `NEAR` and `FAR`, joined by one cable."""
    one, two = (f"dw{os.getpid()}{letter}" for letter in "ab")
    try:
        for name in (one, two):
            _ip("netns", "add", name)
        _ip("link", "add", one, "netns", one, "type", "veth", "peer", "name", two, "netns", two)
        for name, address in ((one, NEAR), (two, FAR)):
            _ip("-n", name, "addr", "add", f"{address}/24", "dev", name)
            _ip("-n", name, "link", "set", name, "up")
            _ip("-n", name, "link", "set", "lo", "up")
        yield ["ip", "netns", "exec", one], ["ip", "netns", "exec", two]
    finally:
        for name in (one, two):
            subprocess.run(["ip", "netns", "del", name], check=False, capture_output=True)
