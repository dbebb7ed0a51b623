"""The live daemon on a virtual sound card, as tests drive it: the real program, what it says, and its processes."""

from __future__ import annotations

import contextlib
import json
import os
import signal
import subprocess
import threading
import time
import uuid
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Self

import zmq
from card_files import LIMIT_S, NS, PROGRAM, TRUTH, Row, ns_of, usable


@dataclass(frozen=True, slots=True)
class Beat:
    """A heartbeat from the bus."""

    came: float  # monotonic, s
    lag_s: float  # UTC at which the last sample arrived, less its stream time
    age_s: float


class Daemon:
    """``driftwatch run CONFIG --json`` as a process of its own; entering starts it, leaving ends all that is left.

    Parameters
    ----------
    config
        The configuration.
    env
        Its environment: of the sound card that it is to see.
    """

    def __init__(self, config: Path, env: dict[str, str]) -> None:
        self.config = config
        self.rows: list[Row] = []
        self.came: list[float] = []  # monotonic time of each row
        self.errors: list[str] = []
        self.beats: list[Beat] = []
        self._mark = f"CARD_TEST={uuid.uuid4()}"
        name, _, value = self._mark.partition("=")
        self._env = env | {name: value, "OMP_NUM_THREADS": "1"}
        self._news = threading.Condition()
        self._gone = False

    def __enter__(self) -> Self:
        self.process = subprocess.Popen(
            [*PROGRAM, "run", str(self.config), "--json"],
            env=self._env, cwd=self.config.parent,
            stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.PIPE,
        )  # fmt: skip
        self._threads = [threading.Thread(target=one) for one in (self._read_rows, self._read_errors, self._listen)]
        for thread in self._threads:
            thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self.process.kill()
        for pid in self.processes():
            with contextlib.suppress(ProcessLookupError):
                os.kill(pid, signal.SIGKILL)
        self.process.wait()
        self._gone = True
        for thread in self._threads:
            thread.join()

    def _read_rows(self) -> None:
        assert self.process.stdout is not None
        with self.process.stdout as lines:
            for line in lines:
                if not line.endswith(b"\n"):
                    break  # it was killed in the midst of it
                with self._news:
                    self.rows.append(json.loads(line))
                    self.came.append(time.monotonic())
                    self._news.notify_all()

    def _read_errors(self) -> None:
        assert self.process.stderr is not None
        with self.process.stderr as lines:
            for line in lines:
                with self._news:
                    self.errors.append(line.decode().rstrip("\n"))
                    self._news.notify_all()

    def _listen(self) -> None:
        endpoint = next(line for line in self.config.read_text().splitlines() if line.startswith("publish"))
        with zmq.Context() as context, context.socket(zmq.SUB) as socket:
            socket.setsockopt(zmq.SUBSCRIBE, b"heartbeat")
            socket.connect(endpoint.split('"')[1])
            while not self._gone:
                if not socket.poll(100):
                    continue
                text = socket.recv_multipart()[1]
                utc_s, came = time.time(), time.monotonic()
                row = json.loads(text)
                age_s = row["sample_age_s"]
                if age_s is not None:
                    with self._news:
                        self.beats.append(Beat(came, utc_s - age_s - ns_of(row["time"]) / NS, age_s))
                        self._news.notify_all()

    # ------------------------------------------------------------------------------------------ waiting

    def until(self, true: Callable[[], Any], seconds: float = LIMIT_S) -> Any:
        """Wait until something is true of what was said; return it."""
        with self._news:
            assert self._news.wait_for(true, seconds), self._so_far()
            return true()

    def row(self, true: Callable[[Row], bool], since: int = 0) -> int:
        """Wait for a row for which something is true; return its place."""
        return int(self.until(lambda: [i for i in range(since, len(self.rows)) if true(self.rows[i])])[0])

    def _so_far(self) -> str:
        kinds = [row["kind"] + (f" {row['phase']}" if "phase" in row else "") for row in self.rows]
        return f"it did not come; so far: {kinds[-20:]}, {self.errors[-5:]}"

    def measuring(self, first: int = 0) -> int:
        """Wait for a usable measurement of each mode in samples from index `first` on; return the later one's place."""
        return max(self.row(lambda row, c=channel: usable(row, c, first)) for channel in TRUTH)  # type: ignore[misc]

    @property
    def reached(self) -> int:
        """Stream index up to which measurements were told."""
        return max(
            (row["first_sample"] + row["samples"] for row in self.rows if row["kind"] == "measurement"), default=0
        )

    def more_beats(self, count: int) -> None:
        """Wait for so many heartbeats from now on."""
        wanted = len(self.beats) + count
        self.until(lambda: len(self.beats) >= wanted)

    # ------------------------------------------------------------------------------------------ its processes

    def processes(self) -> dict[int, str]:
        """Return the processes of this daemon that live, the main one too, and what each is for."""
        found = {}
        for folder in Path("/proc").glob("[0-9]*"):
            with contextlib.suppress(OSError):
                if self._mark.encode() in (folder / "environ").read_bytes().split(b"\0"):
                    words = (folder / "cmdline").read_bytes().decode().split("\0")
                    is_child = "driftwatch.daemon.process" in words
                    found[int(folder.name)] = words[words.index("driftwatch.daemon.process") + 1] if is_child else "run"
        return found

    def pid_of(self, role: str) -> int:
        """Return the first process of a role, for which it may have to be waited."""
        deadline = time.monotonic() + LIMIT_S
        while not (pids := sorted(pid for pid, what in self.processes().items() if what == role)):
            assert time.monotonic() < deadline, f"no {role} runs"
            time.sleep(0.02)
        return pids[0]

    def stop(self, number: signal.Signals = signal.SIGINT) -> int:
        """Ask it to end; return its exit status, once all it said was read."""
        self.process.send_signal(number)
        status = self.process.wait(LIMIT_S)
        for thread in self._threads[:2]:
            thread.join()
        return status
