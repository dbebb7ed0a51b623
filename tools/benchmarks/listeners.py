"""Restarts of a listener: that its file ends with every record of the store, each once and in order.

``driftwatch listen --into`` is started again and again on a real daemon with a simulated source, and ended by SIGKILL
or SIGINT: before it has begun, while it fetches what it missed, or while it listens. Now and then the daemon goes as
well, in both ways, and comes back as a new run.
"""

from __future__ import annotations

import json
import os
import random
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import Self

from driftwatch.bus.wire import encode_json
from driftwatch.store.queries import Reader
from driftwatch.store.since import page

from benchmarks.bars import Row, Size
from benchmarks.live_scene import free_endpoint

RESTARTS, RESTARTS_SMALL = 100, 10
LIMIT_S = 90.0
"""Longest wait for anything: for a busy computer, not a measure."""

_CONFIG = """
schema = 1
[station]
name = "listened to"
[[source]]
name = "model"
kind = "simulated"
rate_hz = 4000
seed = 5
noise = 0.002
pace = 4.0
[[source.resonator]]
frequency_hz = 400.0
q = 30.0
level = 0.05
[[channel]]
name = "drive end"
[[mode]]
name = "rocking"
channel = "drive end"
search_hz = [340.0, 460.0]
window_s = 2.0
step_s = 0.25
[store]
url = "sqlite:///state/rows.db"
[bus]
publish = "{publish}"
control = "{control}"
"""
"""Some 32 records a second."""


@dataclass(frozen=True, slots=True)
class Outcome:
    """What stood in a listener's file and in the store."""

    lines: list[bytes]  # of the file
    stored: list[bytes]  # the same records as the store has them, as lines in its order
    known: int  # so many of them were stored before the last listener was ended: it must have those
    killed: int  # listeners that were killed

    @property
    def missing(self) -> int:
        """Records that the file must hold and does not."""
        return len(set(self.stored[: self.known]) - set(self.lines))

    @property
    def repeated(self) -> int:
        """Lines that are there again."""
        return len(self.lines) - len(set(self.lines))

    @property
    def strange(self) -> int:
        """Lines that the store does not have, or that are not in its order."""
        return sum(line != other for line, other in zip(self.lines, self.stored, strict=False)) + max(
            0, len(self.lines) - len(self.stored)
        )

    @property
    def runs(self) -> int:
        """Runs of the daemon that the file holds records of."""
        return len({json.loads(line)["run"] for line in self.lines})


def run(size: Size) -> Iterator[Row]:
    """Yield what is missing, there twice, or out of order after so many restarts."""
    restarts = RESTARTS if size.full else RESTARTS_SMALL
    with tempfile.TemporaryDirectory() as name:
        found = restarted(Path(name), restarts)
    case = f"{restarts} restarts, {found.killed} of them kills"
    yield Row(case, "runs of the daemon", found.runs, "", None)
    yield Row(case, "records in the file", len(found.lines), f"at least {found.known}", len(found.lines) >= found.known)
    yield Row(case, "missing", found.missing, "none", found.missing == 0)
    yield Row(case, "there twice", found.repeated, "none", found.repeated == 0)
    yield Row(case, "not in the store, or out of order", found.strange, "none", found.strange == 0)


def restarted(folder: Path, restarts: int) -> Outcome:
    """Start and end listeners; seeds 0 to `restarts` - 1 choose how each one goes.

    Raises
    ------
    RuntimeError
        When a process ends by itself, or what is waited for does not come.
    """
    killed = 0
    with _Scene(folder) as scene:
        scene.start_daemon()
        for seed in range(restarts):
            chosen = random.Random(seed)  # noqa: S311 - no secret
            scene.start_listener()
            if seed % 10 in (3, 6):  # the daemon goes while it is listened to, and comes back
                scene.until_it_grows()
                scene.end(scene.daemon, signal.SIGKILL if seed % 10 == 3 else signal.SIGINT)
                scene.start_daemon()
            if chosen.random() < 0.7:  # else the listener goes before it has begun, or as it begins
                scene.until_it_grows()
            time.sleep(chosen.uniform(0.0, 0.8))
            way = chosen.choice([signal.SIGKILL, signal.SIGKILL, signal.SIGINT])
            killed += way is signal.SIGKILL
            scene.end(scene.listener, way)
        scene.start_listener()
        scene.until_it_grows()
        known = scene.stored()
        scene.until(lambda: known[-1] in scene.into.read_bytes())
        scene.end(scene.listener, signal.SIGINT)
        scene.end(scene.daemon, signal.SIGINT)
        return Outcome(scene.into.read_bytes().splitlines(), scene.stored(), len(known), killed)


class _Scene:
    """A daemon, a listener, and their files in a folder."""

    daemon: subprocess.Popen[bytes]
    listener: subprocess.Popen[bytes]

    def __init__(self, folder: Path) -> None:
        self.into = folder / "records.jsonl"
        self._folder = folder
        self._size = 0
        (folder / "live.toml").write_text(
            _CONFIG.format(publish=free_endpoint(), control=free_endpoint()), encoding="utf-8"
        )
        self._stack = ExitStack()
        self._log = self._stack.enter_context((folder / "log").open("wb"))

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self._stack.close()

    def start_daemon(self) -> None:
        """Start the daemon; the store goes on with a new run."""
        self.daemon = self._start("run", "live.toml")

    def start_listener(self) -> None:
        """Start a listener."""
        self._size = self._grown()
        self.listener = self._start("listen", "--config", "live.toml", "--into", self.into.name)

    def until_it_grows(self) -> None:
        """Wait until the file has grown since the listener was started."""
        self.until(lambda: self._grown() > self._size)

    def until(self, true: Callable[[], bool]) -> None:
        """Wait until something is true."""
        deadline = time.monotonic() + LIMIT_S
        while not true():
            if self.listener.poll() is not None or time.monotonic() > deadline:
                raise RuntimeError(f"it did not come, or the listener ended:\n{self._said()}")
            time.sleep(0.02)

    def end(self, process: subprocess.Popen[bytes], number: signal.Signals) -> None:
        """End a process by a signal; one that has only begun to load may be ended by it as it can."""
        process.send_signal(number)
        code = process.wait(LIMIT_S)
        in_order = code == 0 or self._said().rstrip().endswith("KeyboardInterrupt")
        if code != -number and (number is signal.SIGKILL or not in_order):
            raise RuntimeError(f"it ended with {code}:\n{self._said()}")

    def stored(self) -> list[bytes]:
        """Return all records of the store as lines, in its order."""
        found: list[bytes] = []
        run, sequence, more = None, 0, True
        with Reader.open(self._folder / "state" / "rows.db") as reader:
            while more:
                one = page(reader, run, sequence, 1000)
                found += map(encode_json, one.records)
                run, sequence, more = one.records[-1].run, one.records[-1].sequence, one.more
        return found

    def _grown(self) -> int:
        return self.into.stat().st_size if self.into.exists() else 0

    def _said(self) -> str:
        return (self._folder / "log").read_text(encoding="utf-8", errors="replace")[-3000:]

    def _start(self, *words: str) -> subprocess.Popen[bytes]:
        process = subprocess.Popen(
            [sys.executable, "-m", "driftwatch", *words],
            cwd=self._folder,
            env={**os.environ, "OMP_NUM_THREADS": "1"},
            stdout=self._log,
            stderr=self._log,
        )
        self._stack.callback(process.wait)
        self._stack.callback(process.kill)
        return process
