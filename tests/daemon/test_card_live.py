"""Through real PortAudio every sample comes as it was played, and live rows are those that a replay of it gives."""

from __future__ import annotations

import os
import signal
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from card_files import RATE, Floats, Row, configuration, health, ns_of, place_in, recorded, replay, write_wav
from live_card import Daemon

from soundrig import Rig

MEASURED_S = 7
"""So many seconds at least are compared."""

OF_THE_STREAM = ("measurement", "track", "alert", "health")
"""Kinds of rows that samples and configuration alone decide."""

OF_THE_RUN = ("run", "origin", "sequence", "previous", "time_quality")
"""What two runs may have different."""

TIMES = ("time", "since", "last_measurement", "shelved_until")


@dataclass(frozen=True, slots=True)
class Run:
    """A live run that ended."""

    config: Path
    rows: list[Row]
    stretches: list[tuple[int, Floats]]
    status: int

    @property
    def start(self) -> str:
        """Time of sample 0."""
        return str(self.rows[0]["time"])

    @property
    def samples(self) -> int:
        """Where the stream ended."""
        return int(self.rows[-1]["samples"])


def run_with_a_gap(folder: Path, wav: Path) -> Run:
    """Measure with two workers what is played, and kill what captures on the way."""
    config = configuration(folder, daemon="workers = 2")
    with Rig() as rig:
        rig.play(wav)
        with Daemon(config, rig.env) as daemon:
            daemon.row(lambda row: row["kind"] == "alert" and row["state"] != "normal")
            os.kill(daemon.pid_of("capture"), signal.SIGKILL)
            end = daemon.rows[daemon.row(lambda row: health(row, "end"))]
            daemon.measuring(end["first_sample"] + end["lost_samples"] + RATE)
            status = daemon.stop()
            return Run(config, daemon.rows, recorded(config), status)


def run_of_a_file(folder: Path, played: Floats, workers: int) -> Run:
    """Measure an input whose sample 0 is the first one played."""
    config = configuration(folder, device="rigfile", daemon=f"workers = {workers}")
    with Rig() as rig:
        rig.set_file(played.tobytes())
        with Daemon(config, rig.env) as daemon:
            daemon.until(lambda: daemon.reached > MEASURED_S * RATE)
            status = daemon.stop()
            return Run(config, daemon.rows, recorded(config), status)


def of_the_stream(rows: list[Row]) -> list[dict[str, Any]]:
    """Return what samples and configuration alone decide; rows that others point to by their place among these."""
    chosen = [row for row in rows if row["kind"] in OF_THE_STREAM]
    places = {row["sequence"]: place for place, row in enumerate(chosen)}
    return [
        {name: _value(name, value, places) for name, value in row.items() if name not in OF_THE_RUN} for row in chosen
    ]


def _value(name: str, value: Any, places: dict[int, int]) -> Any:
    return [places[one] for one in value] if name == "because" and value is not None else value


def kinds_of(rows: list[dict[str, Any]]) -> set[str]:
    return {row["kind"] for row in rows}


def first_difference(ours: list[dict[str, Any]], theirs: list[dict[str, Any]]) -> str | None:
    """Return the first row that differs; None: they are equal. (A comparison of whole lists tells too much.)"""
    for one, other in zip(ours, theirs, strict=False):
        if one != other:
            return str({name: (one[name], other.get(name)) for name in one if one[name] != other.get(name)})
    return None if len(ours) == len(theirs) else f"{len(ours)} rows against {len(theirs)}"


@dataclass(frozen=True, slots=True)
class Runs:
    with_a_gap: Future[Run]
    of_a_file: dict[int, Future[Run]]  # by the number of workers


@pytest.fixture(scope="module")
def runs(pool: ThreadPoolExecutor, wav: Path, played: Floats, tmp_path_factory: pytest.TempPathFactory) -> Runs:
    folders = [tmp_path_factory.mktemp(name) for name in ("gap", "one", "two")]
    gap = pool.submit(run_with_a_gap, folders[0], wav)
    return Runs(gap, {n: pool.submit(run_of_a_file, folders[n], played, n) for n in (1, 2)})


@pytest.mark.parametrize("workers", [1, 2])
def test_every_sample_of_the_device_comes_from_the_first_one_on(runs: Runs, played: Floats, workers: int) -> None:
    run = runs.of_a_file[workers].result()
    assert run.status == 0
    ((first, heard),) = run.stretches
    assert (first, len(heard)) == (0, run.samples)
    np.testing.assert_array_equal(heard, played[: run.samples])


def test_a_played_recording_comes_bit_by_bit_on_both_sides_of_a_gap(runs: Runs, played: Floats) -> None:
    run = runs.with_a_gap.result()
    assert run.status == 0
    assert len(run.stretches) == 2
    for _, heard in run.stretches:
        place = place_in(played, heard[:16])
        np.testing.assert_array_equal(heard, played[place : place + len(heard)])
    assert run.stretches[-1][0] + len(run.stretches[-1][1]) == run.samples


@pytest.mark.parametrize("workers", [1, 2])
def test_rows_are_those_of_a_replay_of_the_same_samples(
    runs: Runs, played: Floats, workers: int, tmp_path: Path
) -> None:
    """The recording holds what was played, as a file of its own, and the time of its start."""
    run = runs.of_a_file[workers].result()
    wav = write_wav(tmp_path / "same.wav", played[: run.samples])
    live, again = of_the_stream(run.rows), of_the_stream(replay(run.config, tmp_path, wav, "--start", run.start))
    assert kinds_of(live) == {"measurement", "track", "alert"}
    assert first_difference(live, again) is None


def test_rows_are_those_of_a_replay_of_the_segments_gap_and_all(runs: Runs, tmp_path: Path) -> None:
    run = runs.with_a_gap.result()
    segments = run.config.parent / "state" / "recordings"
    live, again = of_the_stream(run.rows), of_the_stream(replay(run.config, tmp_path, segments))
    assert kinds_of(live) == set(OF_THE_STREAM)
    assert first_difference(live, again) is None


def test_rows_do_not_depend_on_how_many_processes_measure(runs: Runs) -> None:
    """Two runs of the same samples, by one worker and by two, with each time counted from the run's start."""
    one, two = (from_start(runs.of_a_file[workers].result()) for workers in (1, 2))
    common = min(len(one), len(two)) - 20  # at its end a run tells what it then cannot wait for any more
    assert common > 60
    assert first_difference(one[:common], two[:common]) is None


def from_start(run: Run) -> list[dict[str, Any]]:
    """Return the rows with times from the start; how an occurrence is named depends on when it was."""
    begin = ns_of(run.start)
    return [
        {
            name: ns_of(value) - begin if name in TIMES and value else value
            for name, value in row.items()
            if name != "occurrence"
        }
        for row in of_the_stream(run.rows)
    ]
