"""What sound cards and processes do to a daemon in weeks, done to the real one: each is one gap, told once, and over.

The cause of each scenario ends at a known instant. Where the player plays on meanwhile, how much was lost is known
from where in the played recording the samples before and after stand; where the sound server itself stood still or
died, from stream time against UTC.
"""

from __future__ import annotations

import math
import os
import signal
import time
from collections.abc import Callable
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from live_card import (
    BLOCK,
    LIMIT_S,
    NS,
    RATE,
    TRUTH,
    WINDOW_S,
    Beat,
    Daemon,
    Floats,
    Row,
    configuration,
    health,
    ns_of,
    place_in,
    recorded,
    stored,
    usable,
)

from soundrig import Rig

FLOWS_S = 5.0
"""So soon after the end of a cause samples must flow."""

SETTLED_S = 1.0
"""So much later than a window's length after the first sample the first measurement must be usable."""

EXACT = BLOCK
"""How wrong the length of a gap may be, samples."""

JITTER_S = 0.02
"""How much the smallest lag of a few heartbeats may move: the server's own period, cut into blocks of another one."""

SIGMAS = 5.0
"""A usable reading further off than this is wrong. A right one is with probability 6e-7; in all scenarios together
there are about 800, each of frequency and Q: a false alarm in 1000 runs at most."""

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


def killed(role: str) -> Cause:
    def cause(rig: Rig, daemon: Daemon, wav: Path) -> None:
        os.kill(daemon.pid_of(role), signal.SIGKILL)

    return cause


def capture_stopped_2_s(rig: Rig, daemon: Daemon, wav: Path) -> None:
    pid = daemon.pid_of("capture")
    os.kill(pid, signal.SIGSTOP)
    time.sleep(2.0)
    os.kill(pid, signal.SIGCONT)


def stopped(role: str) -> Cause:
    """Stop a process for as long as it takes until it is found out and ended, or 15 s."""

    def cause(rig: Rig, daemon: Daemon, wav: Path) -> None:
        pid = daemon.pid_of(role)
        os.kill(pid, signal.SIGSTOP)
        deadline = time.monotonic() + 15.0
        while pid in daemon.processes() and time.monotonic() < deadline:
            time.sleep(0.02)
        if pid in daemon.processes():
            os.kill(pid, signal.SIGCONT)

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


SCENARIOS = {
    "callback stalled 15 s": Scenario(callback_stalled),
    "capture stopped": Scenario(stopped("capture"), ("process",)),
    "server stopped 10 s": Scenario(server_stopped(10.0), plays_on=False),
    "server killed for 5 s": Scenario(server_killed, plays_on=False),
    "tracker stopped": Scenario(stopped("tracker"), ("process",), is_gap=False, workers=2),
    "sink unloaded and loaded": Scenario(sink_away, plays_on=False),
    "server stopped 3 s": Scenario(server_stopped(3.0), (), is_gap=False, plays_on=False),
    "capture stopped 2 s": Scenario(capture_stopped_2_s, (), is_gap=False),
    "capture killed": Scenario(killed("capture"), ("process",), workers=2),
    "tracker killed": Scenario(killed("tracker"), ("process",), is_gap=False, workers=2),
}


# ---------------------------------------------------------------------------------------------- driving them


@dataclass(frozen=True, slots=True)
class Outcome:
    """What came of a scenario."""

    scenario: Scenario
    rows: list[Row]
    came: list[float]
    beats: list[Beat]
    began: float  # monotonic: the cause ...
    ended: float  # ... and its end
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
    config = configuration(folder, daemon=f"workers = {scenario.workers}\nqueue_s = 10.0")
    with Rig() as rig:
        env = rig.env | ({"PYTHONPATH": str(folder)} if scenario.cause is callback_stalled else {})
        rig.play(wav)
        with Daemon(config, env) as daemon:
            daemon.measuring()
            daemon.more_beats(3)
            began, seen = time.monotonic(), len(daemon.rows)
            scenario.cause(rig, daemon, wav)
            ended = time.monotonic()
            first = daemon.reached
            if scenario.faults:
                end = daemon.rows[daemon.row(lambda row: health(row, "end"), seen)]
                first = int(end["first_sample"] or first) + int(end["lost_samples"])
            daemon.measuring(first)
            daemon.more_beats(1 if scenario.plays_on else 5)
            status = daemon.stop()
            return Outcome(
                scenario, daemon.rows, daemon.came, daemon.beats, began, ended,
                recorded(config), stored(config), status, daemon.processes(), daemon.errors,
            )  # fmt: skip


@pytest.fixture(scope="module")
def outcomes(
    pool: ThreadPoolExecutor, wav: Path, tmp_path_factory: pytest.TempPathFactory
) -> dict[str, Future[Outcome]]:
    """Return what comes of every scenario, the longest begun first."""
    folder = tmp_path_factory.mktemp("failures")
    folders = {name: folder / name.replace(" ", "-") for name in SCENARIOS}
    for one in folders.values():
        one.mkdir()
    return {name: pool.submit(play_out, name, folders[name], wav) for name in SCENARIOS}


@pytest.fixture(params=SCENARIOS, scope="module")
def outcome(request: pytest.FixtureRequest, outcomes: dict[str, Future[Outcome]]) -> Outcome:
    return outcomes[request.param].result()


# ---------------------------------------------------------------------------------------------- what must come of it


def test_samples_flow_within_5_s_of_the_end_of_the_cause(outcome: Outcome) -> None:
    """Where some are missing, when the end of the gap is told; else by the last sample known at each heartbeat."""
    if outcome.scenario.is_gap:
        flows = outcome.told - outcome.ended
    else:
        flows = min(after for beat in outcome.beats if (after := beat.came - beat.age_s - outcome.ended) > 0)
    assert flows <= FLOWS_S


def test_the_first_usable_measurement_comes_a_window_and_a_second_later_at_most(outcome: Outcome) -> None:
    """Counted in samples from the end of the gap, and on the clock from when that was told."""
    if not outcome.scenario.is_gap:
        pytest.skip("nothing is missing")
    for channel in TRUTH:
        row, came = next(
            (row, came)
            for row, came in zip(outcome.rows, outcome.came, strict=True)
            if usable(row, channel, outcome.gap_end)
        )
        assert row["first_sample"] + row["samples"] - outcome.gap_end <= (WINDOW_S + SETTLED_S) * RATE
        assert came - outcome.told <= WINDOW_S + SETTLED_S


def test_each_cause_is_one_incident_with_one_begin_and_one_end(outcome: Outcome) -> None:
    if not outcome.scenario.faults:
        assert not outcome.incidents
        return
    phases = [row["phase"] for row in outcome.incidents if row["phase"] != "continue"]
    assert phases == ["begin", "end"], outcome.incidents
    assert len({row["incident"] for row in outcome.incidents}) == 1
    assert {row["fault"] for row in outcome.incidents} <= set(outcome.scenario.faults)
    assert (outcome.incidents[-1]["lost_samples"] > 0) == outcome.scenario.is_gap


def test_the_gap_is_where_and_as_long_as_it_is_told_to_be(outcome: Outcome, played: Floats) -> None:
    """Told, recorded and dated alike."""
    if not outcome.scenario.is_gap:
        assert len(outcome.stretches) == 1
        return
    (first, before), (after, _) = outcome.stretches
    end = outcome.incidents[-1]
    assert first == 0
    assert end["first_sample"] == len(before)
    assert outcome.gap_end == after
    assert end["seconds"] == end["lost_samples"] / RATE
    assert ns_of(end["since"]) == ns_of(outcome.rows[0]["time"]) + len(before) * NS // RATE
    assert ns_of(end["time"]) == ns_of(end["since"]) + end["lost_samples"] * NS // RATE


def test_what_is_told_to_be_missing_is_missing_and_nothing_else(outcome: Outcome, played: Floats) -> None:
    """The samples stand in the recording bit by bit, and between two stretches as many are missing as is told."""
    if not outcome.scenario.plays_on:
        pytest.skip("the player stood still as well")
    places = []
    for _, heard in outcome.stretches:
        places.append(place_in(played, heard[:16]))
        np.testing.assert_array_equal(heard, played[places[-1] : places[-1] + len(heard)])
    if outcome.scenario.is_gap:
        lost = places[1] - places[0] - len(outcome.stretches[0][1])
        assert abs(outcome.incidents[-1]["lost_samples"] - lost) <= EXACT


def test_stream_time_is_where_it_was_against_utc(outcome: Outcome) -> None:
    if outcome.scenario.plays_on:
        pytest.skip("the samples themselves say more")
    before = min(beat.lag_s for beat in outcome.beats if beat.came < outcome.began)
    after = min(beat.lag_s for beat in outcome.beats[-5:])
    assert abs(after - before) <= EXACT / RATE + JITTER_S


def test_no_reading_is_wrong(outcome: Outcome) -> None:
    """Of samples in which the player was silent, so that there is no truth, none is judged."""
    judged = 0
    for row in outcome.rows:
        if row["kind"] != "measurement" or not row["usable"] or is_silent(outcome.stretches, row):
            continue
        frequency_hz, q = TRUTH[row["channel"]]
        assert abs(row["frequency_hz"] - frequency_hz) <= SIGMAS * row["frequency_std_hz"], row
        assert abs(math.log(row["q"] / q)) <= SIGMAS * row["q_std"] / row["q"], row
        judged += 1
    assert judged >= 8


def is_silent(stretches: list[tuple[int, Floats]], row: Row) -> bool:
    """Say whether a measurement saw a stretch of zeros: the player had stopped, or had not begun."""
    first, samples = row["first_sample"], row["samples"]
    begin, recorded = next(one for one in reversed(stretches) if one[0] <= first)
    seen = recorded[first - begin : first - begin + samples]
    assert len(seen) == samples, "a usable measurement of samples that were not recorded"
    return bool((~seen.any(axis=1)).sum() > BLOCK)


def test_it_ends_well_with_every_row_told_and_stored(outcome: Outcome) -> None:
    assert outcome.status == 0, outcome.errors
    numbers = [row["sequence"] for row in outcome.rows]
    assert numbers == list(range(1, len(numbers) + 1))
    assert outcome.sequences == numbers
    assert (outcome.rows[-1]["kind"], outcome.rows[-1]["reason"]) == ("run", "stopped")


def test_no_process_is_left_behind(outcome: Outcome) -> None:
    assert outcome.left == {}


def test_no_process_outlives_a_main_process_that_was_killed(rig: Rig, wav: Path, tmp_path: Path) -> None:
    """The rows told until then are whole, and all of them are in the store."""
    config = configuration(tmp_path, daemon="workers = 2")
    with Daemon(config, rig.env) as daemon:
        rig.play(wav)
        daemon.measuring()
        assert sorted(daemon.processes().values()) == ["capture", "recorder", "run", "tracker", "tracker"]
        daemon.process.kill()
        daemon.process.wait()
        deadline = time.monotonic() + LIMIT_S
        while daemon.processes():
            assert time.monotonic() < deadline, f"left behind: {daemon.processes()}"
            time.sleep(0.05)
        numbers = [row["sequence"] for row in daemon.rows]
        assert numbers == list(range(1, len(numbers) + 1))
        kept = stored(config)
        assert kept == list(range(1, len(kept) + 1))
        assert len(kept) >= len(numbers)
