"""A daemon live on a played recording, and what a subscriber hears of it."""

from __future__ import annotations

import math
import os
import signal
import subprocess
import sys
import time
from collections.abc import Mapping, Sequence
from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path
from typing import Self

import numpy as np
import zmq
from driftwatch.stream.instants import instant_ns
from numpy.typing import NDArray

from benchmarks.live_scene import LiveScene, Player, card, free_endpoint
from benchmarks.processes import daemon_processes, machine_busy_s, processor_s
from benchmarks.scene import RATE_HZ
from soundrig import Rig

STARTING_S = 60.0
"""Longest wait for the first reading, and for the end."""


@dataclass
class Heard:
    """What a run's subscriber has."""

    wall_s: float = 0.0  # of the stretch in which cost was measured
    shares: dict[str, float] = field(default_factory=dict)  # per cent of one core, by process
    others: dict[str, float] = field(default_factory=dict)  # the same of what is no part of the daemon
    messages: list[tuple[int, bytes]] = field(default_factory=list)  # when it was heard, and what
    began_ns: int = 0  # begin of the stretch
    notes: NDArray[np.int64] = field(default_factory=lambda: np.empty((0, 4), np.int64))
    ran_dry: int = 0  # times that the player had nothing to play
    restarted: bool = False  # a process was another one at the end


class Listener:
    """A subscriber to all that a daemon publishes; the daemon may begin later."""

    def __init__(self, endpoint: str) -> None:
        self._context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self._socket = self._context.socket(zmq.SUB)
        self._socket.setsockopt(zmq.LINGER, 0)
        self._socket.setsockopt(zmq.RCVHWM, 0)  # what was not yet read may wait, however much it is
        self._socket.setsockopt(zmq.SUBSCRIBE, b"")
        self._socket.connect(endpoint)

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self._socket.close()
        self._context.term()

    def next(self, seconds: float) -> tuple[int, bytes, bytes] | None:
        """Return when the next message came (`instant_ns`), its topic, and it; None: none came for so long.

        What is sent again for whoever came late is not counted.
        """
        while seconds > 0 and self._socket.poll(math.ceil(1e3 * seconds)):
            topic, message = self._socket.recv_multipart()
            if not message.endswith(b',"repeated":true}'):
                return instant_ns(), topic, message
        return None


def listened(folder: Path, scene: LiveScene, more: str, seconds: float, warm_up_s: float) -> Heard:
    """Run the daemon on what is played, with further tables in its configuration, and listen for so long.

    Raises
    ------
    RuntimeError
        When it does not begin to measure, or ends before its time or with a fault.
    """
    endpoint = free_endpoint()
    (folder / "live.toml").write_text(scene.config(card(scene.channels), endpoint, more), encoding="utf-8")
    heard = Heard()
    with ExitStack() as stack:
        rig = stack.enter_context(Rig(rate_hz=RATE_HZ, inputs=scene.channels))
        player = stack.enter_context(Player(rig, scene.loop(), folder))
        listener = stack.enter_context(Listener(endpoint))
        daemon = start(stack, ["benchmarks.live_daemon", "live.toml", "notes"], folder, rig.env)
        _until_measured(heard, listener, daemon)
        _listen(heard, listener, warm_up_s)
        _measure(heard, listener, seconds, daemon.pid, {"sound server": (rig.pid,), "player": player.pids})
        heard.ran_dry = player.ran_dry
        daemon.send_signal(signal.SIGINT)
        while (code := daemon.poll()) is None:
            _listen(heard, listener, 0.2)
        _listen(heard, listener, 0.2)
        if code != 0:
            raise RuntimeError(f"the daemon ended with {code}:\n{(folder / 'daemon.log').read_text(errors='replace')}")
    heard.notes = np.fromfile(folder / "notes", np.int64).reshape(-1, 4)
    return heard


def start(stack: ExitStack, module: Sequence[str], folder: Path, env: Mapping[str, str]) -> subprocess.Popen[bytes]:
    """Start a module as a program in a folder, with what it says in ``daemon.log``; it ends with the stack."""
    paths = {"PYTHONPATH": str(Path(__file__).parent.parent)}
    threads = {"OMP_NUM_THREADS": os.environ.get("OMP_NUM_THREADS", "1")}
    log = stack.enter_context((folder / "daemon.log").open("wb"))
    daemon = subprocess.Popen(
        [sys.executable, "-m", *module],
        cwd=folder,
        env={**env, **paths, **threads},
        stdout=subprocess.DEVNULL,
        stderr=log,
    )
    stack.callback(daemon.wait)
    stack.callback(daemon.kill)
    return daemon


def _until_measured(heard: Heard, listener: Listener, daemon: subprocess.Popen[bytes]) -> None:
    until = time.monotonic() + STARTING_S
    while time.monotonic() < until and daemon.poll() is None:
        came = listener.next(0.2)
        if came is not None:
            heard.messages.append((came[0], came[2]))
            if came[1].startswith(b"measurement/"):
                return
    raise RuntimeError(f"the daemon measured nothing within {STARTING_S:.0f} s; expected a reading of every mode")


def _listen(heard: Heard, listener: Listener, seconds: float) -> None:
    until = time.monotonic() + seconds
    while (left := until - time.monotonic()) > 0:
        came = listener.next(left)
        if came is not None:
            heard.messages.append((came[0], came[2]))


def _measure(
    heard: Heard, listener: Listener, seconds: float, daemon: int, others: Mapping[str, tuple[int, ...]]
) -> None:
    """Listen for so long, and see what each process spends meanwhile."""
    processes = daemon_processes(daemon)
    watched = {**{name: (pid,) for name, pid in processes.items()}, **others}
    began, heard.began_ns = time.monotonic(), instant_ns()
    busy = machine_busy_s()
    before = {name: sum(map(processor_s, pids)) for name, pids in watched.items()}
    _listen(heard, listener, seconds)
    heard.wall_s = time.monotonic() - began
    heard.restarted = daemon_processes(daemon) != processes
    if heard.restarted:
        return
    per_cent = 100 / heard.wall_s
    shares = {name: per_cent * (sum(map(processor_s, pids)) - before[name]) for name, pids in watched.items()}
    heard.shares = {name: shares[name] for name in processes}
    heard.others = {name: shares[name] for name in others}
    heard.others["all else on this machine"] = per_cent * (machine_busy_s() - busy) - sum(shares.values())
