"""What sound cards and processes do to a daemon in weeks, done to the real one in half a minute each."""

from __future__ import annotations

import os
import signal
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from card_files import (
    LIMIT_S,
    Floats,
    Row,
    configuration,
    health,
    recorded,
    stored,
)
from live_card import Beat, Daemon

from soundrig import Rig

FLAG = "stall"
"""While this file is there, the callback of every capturing process stands still."""

STAND_IN = f"""
import os, sys, time
if "driftwatch.daemon.process" in sys.orig_argv and "capture" in sys.orig_argv:
    from driftwatch.stream.ring import Ring
    take = Ring.take
    def stalled(self, *arguments):
        while os.path.exists(os.path.join(os.path.dirname(__file__), "{FLAG}")):
            time.sleep(0.01)
        take(self, *arguments)
    Ring.take = stalled
"""
"""A stand-in for a computer too busy for the callback alone: all else is real."""

Cause = Callable[[Rig, Daemon, Path], None]


# ---------------------------------------------------------------------------------------------- the causes


def server_killed(rig: Rig, daemon: Daemon, wav: Path) -> None:
    rig.kill()
    time.sleep(5.0)
    rig.start()
    rig.play(wav)


def server_stopped(seconds: float) -> Cause:
    def cause(rig: Rig, daemon: Daemon, wav: Path) -> None:
        rig.stop()
        time.sleep(seconds)
        rig.cont()

    return cause


def sink_away(rig: Rig, daemon: Daemon, wav: Path) -> None:
    rig.unload_sink()
    time.sleep(3.0)
    rig.load_sink()
    rig.play(wav)


def capture_killed(rig: Rig, daemon: Daemon, wav: Path) -> None:
    os.kill(daemon.pid_of("capture"), signal.SIGKILL)


def capture_stopped_2_s(rig: Rig, daemon: Daemon, wav: Path) -> None:
    pid = daemon.pid_of("capture")
    os.kill(pid, signal.SIGSTOP)
    time.sleep(2.0)
    os.kill(pid, signal.SIGCONT)


def stopped(role: str) -> Cause:
    """Stop a process for as long as it takes until it is found out and ended."""

    def cause(rig: Rig, daemon: Daemon, wav: Path) -> None:
        pid = daemon.pid_of(role)
        os.kill(pid, signal.SIGSTOP)
        deadline = time.monotonic() + LIMIT_S
        while pid in daemon.processes() and time.monotonic() < deadline:
            time.sleep(0.02)
        assert pid not in daemon.processes(), "nobody found out"

    return cause


def callback_stalled(rig: Rig, daemon: Daemon, wav: Path) -> None:
    flag = daemon.config.parent / FLAG
    flag.touch()
    time.sleep(15.0)
    flag.unlink()


@dataclass(frozen=True, slots=True)
class Scenario:
    """What happens, and what may come of it."""

    cause: Cause
    faults: tuple[str, ...] = ("device",)  # the incident's, one of them; none: nothing is lost
    is_gap: bool = True  # samples are missing
    plays_on: bool = True  # the player, so that the samples tell what was lost
    workers: int = 1
    queue_s: float = 60.0
    """Long, so that on a busy computer no worker is late; one that is stopped is found out after half of it."""


SCENARIOS = {
    "callback stalled 15 s": Scenario(callback_stalled),
    "capture stopped": Scenario(stopped("capture"), ("process",)),
    "server stopped 10 s": Scenario(server_stopped(10.0), plays_on=False),
    "server killed for 5 s": Scenario(server_killed, plays_on=False),
    "tracker stopped": Scenario(stopped("tracker"), ("process",), is_gap=False, workers=2, queue_s=20.0),
    "sink unloaded and loaded": Scenario(sink_away, plays_on=False),
    "server stopped 3 s": Scenario(server_stopped(3.0), (), is_gap=False, plays_on=False),
    "capture stopped 2 s": Scenario(capture_stopped_2_s, (), is_gap=False),
    "capture killed": Scenario(capture_killed, ("process",), workers=2),
}


# ---------------------------------------------------------------------------------------------- driving them


@dataclass(frozen=True, slots=True)
class Outcome:
    """What came of a scenario."""

    scenario: Scenario
    config: Path
    rows: list[Row]
    came: list[float]
    beats: list[Beat]
    began: float  # monotonic: the cause ...
    ended: float  # ... and its end
    ended_ns: int  # the same, UTC
    starting_s: float  # how long the daemon took from its start to its first row, which tells how busy the computer is
    stretches: list[tuple[int, Floats]]  # recorded
    sequences: list[int]  # stored
    status: int
    left: dict[int, str]  # processes, after the end
    errors: list[str]

    @property
    def incidents(self) -> list[Row]:
        return [row for row in self.rows if row["kind"] == "health"]

    @property
    def told(self) -> float:
        """When the end of the incident was told, monotonic."""
        return next(came for row, came in zip(self.rows, self.came, strict=True) if health(row, "end"))

    @property
    def gap_end(self) -> int:
        """Stream index of the first sample after the gap."""
        end = self.incidents[-1]
        return int(end["first_sample"]) + int(end["lost_samples"])


def play_out(name: str, folder: Path, wav: Path) -> Outcome:
    scenario = SCENARIOS[name]
    (folder / "sitecustomize.py").write_text(STAND_IN)
    config = configuration(folder, daemon=f"workers = {scenario.workers}\nqueue_s = {scenario.queue_s}")
    with Rig() as rig:
        env = rig.env | ({"PYTHONPATH": str(folder)} if scenario.cause is callback_stalled else {})
        rig.play(wav)
        started = time.monotonic()
        with Daemon(config, env) as daemon:
            daemon.measuring()
            daemon.more_beats(3)
            began, seen = time.monotonic(), len(daemon.rows)
            scenario.cause(rig, daemon, wav)
            ended, ended_ns = time.monotonic(), time.time_ns()
            first = daemon.reached
            if scenario.faults:
                end = daemon.rows[daemon.row(lambda row: health(row, "end"), seen)]
                first = int(end["first_sample"] or first) + int(end["lost_samples"])
            daemon.measuring(first)
            daemon.more_beats(1 if scenario.plays_on else 5)
            status = daemon.stop()
            return Outcome(
                scenario, config, daemon.rows, daemon.came, daemon.beats,
                began, ended, ended_ns, daemon.came[0] - started,
                recorded(config), stored(config), status, daemon.processes(), daemon.errors,
            )  # fmt: skip
