"""A running daemon under hostile frames: whether it is up and answers, what its memory does, how long its user waits.

What is sent comes in rounds of the same mixture: noise, broken and deeply nested JSON, and messages of many frames from
a key that may come in, of which one connection never reads an answer; frames that are too large; a key that may only
look and asks for commands; keys that are not known; and raw connections that send garbage, or nothing, to both ports.
"""

from __future__ import annotations

import json
import os
import random
import signal
import socket
import tempfile
import threading
import time
from collections.abc import Iterator
from contextlib import ExitStack, suppress
from dataclasses import dataclass, field
from pathlib import Path
from typing import Self

import zmq
from driftwatch.bus.client import Asker
from driftwatch.bus.control import LARGEST_FRAME
from driftwatch.bus.errors import BusError
from driftwatch.bus.keys import ClientKey, KeyFolder, Role

from benchmarks.bars import Row, Size
from benchmarks.live_run import STARTING_S, start
from benchmarks.live_scene import free_endpoint
from benchmarks.processes import daemon_processes, resident_mb

FRAMES = 100_000
ROUNDS = 20
WARM_UP_ROUNDS = 8
"""Rounds before memory counts: the daemon's own start, and buffers that fill once, are no growth."""

IN_SMALL = 10
"""The regular run sends so many times less."""

LIMIT_MB = 5.0
"""Most growth of the main process from the warm-up to the end, 1e6 bytes."""

LIMIT_S = 1.0
"""Longest that the daemon's user may wait for an answer."""

SILENT = 50
"""Raw connections that say nothing, in each round."""

PIECES = 10
"""Of garbage on a raw connection, at most: it is closed by then."""

SCENE = """
schema = 1
[station]
name = "besieged"
[[source]]
name = "model"
kind = "simulated"
rate_hz = 4000
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
[store]
url = "sqlite:///state/rows.db"
[bus]
publish = "{publish}"
control = "{control}"
"""

SHARES = {"noise": 0.30, "broken": 0.15, "deep": 0.10, "many": 0.10, "forbidden": 0.045, "raw": 0.295}
LARGE, STRANGE = 0.005, 0.005
"""Parts of a round; the last two each take a connection of their own."""


@dataclass
class Course:
    """What was seen."""

    sent: int = 0
    resident_mb: list[float] = field(default_factory=list)  # of the main process, after each round
    waits_s: list[float] = field(default_factory=list)  # of the daemon's user, all the while
    unanswered: int = 0
    answered_after: bool = False
    same_processes: bool = False
    log_lines: int = 0


def run(size: Size) -> Iterator[Row]:
    """Yield whether the daemon is up, what its memory did, and how long its user waited."""
    frames = FRAMES if size.full else FRAMES // IN_SMALL
    with tempfile.TemporaryDirectory() as name:
        course = besieged(Path(name), frames)
    case = f"{course.sent} hostile frames"
    up = course.answered_after and course.same_processes
    grown = course.resident_mb[-1] - course.resident_mb[WARM_UP_ROUNDS - 1]
    yield Row(case, "up and answers afterwards", float(up), "1", up)
    yield Row(case, "main process, MB", course.resident_mb[-1], "", None)
    yield Row(case, "its growth after the warm-up, MB", grown, f"under {LIMIT_MB:.0f}", grown < LIMIT_MB)
    yield Row(
        case, "the user's longest wait, s", max(course.waits_s), f"under {LIMIT_S:.0f}", max(course.waits_s) < LIMIT_S
    )
    yield Row(case, "the user's requests without answer", course.unanswered, "0", course.unanswered == 0)
    yield Row(case, "lines in the log", course.log_lines, "", None)


def besieged(folder: Path, frames: int) -> Course:
    """Run a daemon, send it so many hostile frames, and end it.

    Raises
    ------
    RuntimeError
        When it does not come up, or ends with a fault.
    """
    publish, control = free_endpoint(), free_endpoint()
    (folder / "scene.toml").write_text(SCENE.format(publish=publish, control=control), encoding="utf-8")
    (folder / "state").mkdir(0o700)
    keys = KeyFolder(folder / "state")
    keys.ensure("user")
    course = Course()
    with ExitStack() as stack:
        daemon = start(stack, ["driftwatch", "run", "scene.toml"], folder, os.environ)
        _until_up(control, keys)
        processes = daemon_processes(daemon.pid)
        user = stack.enter_context(User(control, keys, course))
        host = stack.enter_context(Host(folder, keys, publish, control))
        for _ in range(ROUNDS):
            course.sent += host.round(frames // ROUNDS)
            course.resident_mb.append(resident_mb(daemon.pid))
        user.end()
        host.end()
        course.answered_after = _answers(control, keys)
        course.same_processes = daemon_processes(daemon.pid) == processes
        daemon.send_signal(signal.SIGINT)
        said = (folder / "daemon.log").read_text(errors="replace")
        if daemon.wait(STARTING_S) != 0:
            raise RuntimeError(f"the daemon ended with {daemon.returncode}:\n{said}")
        course.log_lines = len(said.splitlines())
    return course


def _until_up(control: str, keys: KeyFolder) -> None:
    until = time.monotonic() + STARTING_S
    while time.monotonic() < until:
        if _answers(control, keys):
            return
    raise RuntimeError(f"the daemon did not answer within {STARTING_S:.0f} s")


def _answers(control: str, keys: KeyFolder) -> bool:
    with Asker(control, keys.operator_path) as asker, suppress(BusError):
        return bool(asker.ask("status")["ok"])
    return False


class User:
    """The daemon's own user, who asks four times a second how things stand."""

    def __init__(self, control: str, keys: KeyFolder, course: Course) -> None:
        self._place = control, keys.operator_path
        self._course = course
        self._over = threading.Event()
        self._thread = threading.Thread(target=self._ask)

    def __enter__(self) -> Self:
        self._thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self.end()

    def end(self) -> None:
        """Ask no more."""
        self._over.set()
        self._thread.join()

    def _ask(self) -> None:
        with Asker(*self._place) as asker:
            while not self._over.wait(0.25):
                began = time.monotonic()
                try:
                    asker.ask("status")
                except BusError:
                    self._course.unanswered += 1
                self._course.waits_s.append(time.monotonic() - began)


class Host:
    """The hostile ones."""

    def __init__(self, folder: Path, keys: KeyFolder, publish: str, control: str) -> None:
        self._random = random.Random(4)  # noqa: S311 - no secret
        self._ports = [int(endpoint.rpartition(":")[2]) for endpoint in (publish, control)]
        self._control = control
        self._context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self._inside = keys.grant("inside", Role.OPERATE, 0, (control, publish), folder / "inside.key")
        self._looker = keys.grant("looker", Role.LOOK, 0, (control, publish), folder / "looker.key")
        self._reads, self._deaf = self._dealer(self._inside), self._dealer(self._inside)
        self._looks = self._dealer(self._looker)
        self._silent: list[socket.socket] = []

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.end()

    def end(self) -> None:
        """Go away."""
        self._hang_up()
        self._context.destroy(linger=0)

    def round(self, frames: int) -> int:
        """Send a round of so many frames, in any order; return how many were sent."""
        self._hang_up()
        self._silent = [self._raw() for _ in range(SILENT)]
        kinds = [kind for kind, share in SHARES.items() for _ in range(round(share * frames))]
        self._random.shuffle(kinds)
        raws = kinds.count("raw")
        for kind in kinds:
            if kind != "raw":
                self._send(kind)
        for _ in range(raws // PIECES):
            self._garbage()
        alone = round(LARGE * frames), round(STRANGE * frames)
        self._alone(*alone)
        return len(kinds) + sum(alone)

    def _send(self, kind: str) -> None:
        if kind == "forbidden":
            target = self._looks
            frames = [json.dumps({"request": "x", "action": "stop", "reason": kind}).encode()]
        else:
            target = self._random.choice((self._reads, self._deaf))
            frames = self._frames(kind)
        target.send_multipart(frames)
        for reader in (self._reads, self._looks):
            while reader.poll(0):
                reader.recv_multipart()

    def _frames(self, kind: str) -> list[bytes]:
        noise = self._random.randbytes
        if kind == "deep":
            return [self._random.choice((b"[", b'{"a":')) * self._random.randrange(100, 2000)]
        if kind == "broken":
            good = json.dumps({"request": "x", "action": "note", "reason": "x" * self._random.randrange(200)}).encode()
            place = self._random.randrange(len(good))
            return [good[:place] + noise(1) + good[place + 1 + self._random.randrange(3) :]]
        count = self._random.randrange(2, 20) if kind == "many" else 1
        return [noise(self._random.randrange(200)) for _ in range(count)]

    def _raw(self) -> socket.socket:
        return socket.create_connection(("127.0.0.1", self._random.choice(self._ports)))

    def _garbage(self) -> None:
        begin = self._random.choice((b"", b"\xff" + bytes(8) + b"\x7f", b"GET / HTTP/1.1\r\n"))
        with suppress(OSError), self._raw() as one:  # it is thrown out sooner or later
            one.sendall(begin)
            for _ in range(PIECES):
                one.sendall(self._random.randbytes(self._random.randrange(1, 2000)))

    def _alone(self, large: int, strange: int) -> None:
        """Send what ends a connection, each on one of its own."""
        for _ in range(large):
            one = self._dealer(self._inside)
            one.send(self._random.randbytes(LARGEST_FRAME + self._random.randrange(1, 100_000)))
            one.poll(10)
            one.close()
        for _ in range(strange):
            one = self._dealer(self._inside, known=False)
            one.send(b'{"request": "x", "action": "stop"}')
            one.poll(10)
            one.close()

    def _dealer(self, key: ClientKey, *, known: bool = True) -> zmq.Socket[bytes]:
        found = self._context.socket(zmq.DEALER)
        found.linger = 0
        found.curve_publickey, found.curve_secretkey = key.public.encode(), key.secret.encode()
        if not known:
            found.curve_publickey, found.curve_secretkey = zmq.curve_keypair()
        found.curve_serverkey = key.daemon.encode()
        found.connect(self._control)
        return found

    def _hang_up(self) -> None:
        for one in self._silent:
            one.close()
        self._silent = []
