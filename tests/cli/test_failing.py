"""What goes wrong while a recording is read or rows are stored: one line, status 1, and what was stored stays."""

from __future__ import annotations

import os
import resource
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile
from driftwatch.daemon.replay import BLOCK_S
from driftwatch.store.queries import Reader

RATE = 2400

Objects = Callable[[str], list[dict[str, Any]]]


@pytest.fixture
def folder(bench: Any) -> Path:
    """Return the folder, with a configuration that gives 240 records a block and a recording of 5 s in it."""
    found: Path = bench.folder
    bench.tiny(step_s=BLOCK_S / 120)
    _record(found / "good.wav", 5.0)
    return found


def _record(path: Path, seconds: float) -> None:
    samples = 0.1 * np.random.default_rng(0).standard_normal(round(seconds * RATE))
    soundfile.write(path, samples.astype(np.float32), RATE, subtype="FLOAT")


class Stalled:
    """A replay that waits: it has stored its first group, and cannot go on until somebody reads what it prints.

    The first group is larger than what the pipe holds, 64 KiB, so this is certain and takes no timing.
    """

    def __init__(self, bench: Any, *recordings: str, options: tuple[str, ...] = ()) -> None:
        self.process = bench.start("replay", "tiny.toml", *recordings, "--json", "--store", "rows.db", *options)
        assert self.process.stdout is not None
        self.first = self.process.stdout.readline()
        assert self.first, self.process.communicate()[1]
        self.stored = _rows(bench.folder / "rows.db")
        assert self.stored * 450 > 1.5 * 2**16  # no record but the first is shorter than 450 bytes

    def go_on(self) -> tuple[str, str]:
        assert self.process.stdout is not None
        out = self.first + self.process.stdout.read()  # not communicate(), which forgets what readline() has read ahead
        return out, self.process.communicate(timeout=60)[1]


def _rows(path: Path) -> int:
    with Reader.open(path) as reader:
        return sum(reader.runs()[-1].counts.values())


def _failed(stalled: Stalled, objects: Objects, says: str) -> list[dict[str, Any]]:
    """Hold a failure under way to what it is: status 1, one line, nothing but objects; return these."""
    out, err = stalled.go_on()
    assert stalled.process.returncode == 1, err
    assert err.startswith("Error: ")
    assert says in err
    assert len(err.splitlines()) == 1
    records = objects(out)
    assert [one["sequence"] for one in records] == list(range(1, len(records) + 1))
    return records


def test_a_recording_that_shrinks_while_it_is_replayed_ends_the_replay_with_its_rows_stored(
    bench: Any, folder: Path, objects: Objects
) -> None:
    _record(folder / "long.wav", 3 * BLOCK_S)
    stalled = Stalled(bench, "long.wav")
    os.truncate(folder / "long.wav", round(1.5 * BLOCK_S * RATE * 4))  # its header counts too
    records = _failed(stalled, objects, "long.wav: reading stopped at ")
    assert records[-1]["kind"] == "run"
    assert records[-1]["reason"].startswith("failed: long.wav: reading stopped")
    assert _rows(folder / "rows.db") == len(records)


def test_a_recording_that_vanishes_before_its_turn_ends_the_replay_with_its_rows_stored(
    bench: Any, folder: Path, objects: Objects
) -> None:
    _record(folder / "long.wav", 1.5 * BLOCK_S)
    ended = (folder / "long.wav").stat().st_mtime
    os.utime(folder / "good.wav", (ended + 5.0, ended + 5.0))  # so that the two join by their dates
    stalled = Stalled(bench, "long.wav", "good.wav")
    (folder / "good.wav").unlink()
    records = _failed(stalled, objects, "good.wav: reading stopped at 0.000 s")
    assert records[-1]["samples"] == 1.5 * BLOCK_S * RATE
    assert _rows(folder / "rows.db") == len(records)


def test_a_database_taken_away_under_way_ends_the_replay_and_the_rows_in_it_stay(
    bench: Any, folder: Path, objects: Objects
) -> None:
    _record(folder / "long.wav", 3 * BLOCK_S)
    stalled = Stalled(bench, "long.wav")
    (folder / "rows.db").rename(folder / "moved.db")
    records = _failed(stalled, objects, "the file was deleted, moved or replaced since it was opened; expected to find")
    assert len(records) == stalled.stored  # nothing was told that is not stored
    assert not (folder / "rows.db").exists()
    (folder / "moved.db").rename(folder / "rows.db")  # as the line says: where its log still lies
    assert _rows(folder / "rows.db") == stalled.stored


def test_a_disk_that_fills_under_way_ends_the_replay_and_the_rows_stay(
    bench: Any, folder: Path, objects: Objects
) -> None:
    _record(folder / "long.wav", 3 * BLOCK_S)
    stalled = Stalled(bench, "long.wav")
    largest = max(path.stat().st_size for path in folder.glob("rows.db*"))
    resource.prlimit(stalled.process.pid, resource.RLIMIT_FSIZE, (largest, largest))
    records = _failed(stalled, objects, "rows.db: nothing of this group was stored: disk I/O error; the disk does not")
    assert len(records) == stalled.stored
    assert _rows(folder / "rows.db") == stalled.stored
