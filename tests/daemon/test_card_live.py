"""Through real PortAudio every sample comes as it was played, and live rows are those that a replay of it gives."""

from __future__ import annotations

from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from card_files import (
    RATE,
    Floats,
    Row,
    configuration,
    first_difference,
    ns_of,
    of_the_stream,
    recorded,
    replay,
    write_wav,
)
from live_card import Daemon

from soundrig import Rig

MEASURED_S = 7
"""So many seconds at least are compared."""

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


def run_of_a_file(folder: Path, played: Floats, workers: int) -> Run:
    """Measure an input whose sample 0 is the first one played."""
    config = configuration(folder, device="rigfile", daemon=f"workers = {workers}")
    with Rig() as rig:
        rig.set_file(played.tobytes())
        with Daemon(config, rig.env) as daemon:
            daemon.until(lambda: daemon.reached > MEASURED_S * RATE)
            status = daemon.stop()
            return Run(config, daemon.rows, recorded(config), status)


Runs = dict[int, Future[Run]]
"""By the number of workers."""


@pytest.fixture(scope="module")
def runs(pool: ThreadPoolExecutor, played: Floats, tmp_path_factory: pytest.TempPathFactory) -> Runs:
    return {n: pool.submit(run_of_a_file, tmp_path_factory.mktemp("workers"), played, n) for n in (1, 2)}


@pytest.mark.parametrize("workers", [1, 2])
def test_every_sample_of_the_device_comes_from_the_first_one_on(runs: Runs, played: Floats, workers: int) -> None:
    run = runs[workers].result()
    assert run.status == 0
    ((first, heard),) = run.stretches
    assert (first, len(heard)) == (0, run.samples)
    np.testing.assert_array_equal(heard, played[: run.samples])


@pytest.mark.parametrize("workers", [1, 2])
def test_rows_are_those_of_a_replay_of_the_same_samples(
    runs: Runs, played: Floats, workers: int, tmp_path: Path
) -> None:
    """The recording holds what was played, as a file of its own, and the time of its start."""
    run = runs[workers].result()
    wav = write_wav(tmp_path / "same.wav", played[: run.samples])
    live, again = of_the_stream(run.rows), of_the_stream(replay(run.config, tmp_path, wav, "--start", run.start))
    assert {row["kind"] for row in live} == {"measurement", "track", "alert"}
    assert first_difference(live, again) is None


def test_rows_do_not_depend_on_how_many_processes_measure(runs: Runs) -> None:
    """Two runs of the same samples, by one worker and by two, with each time counted from the run's start."""
    one, two = (from_start(runs[workers].result()) for workers in (1, 2))
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
