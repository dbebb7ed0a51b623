"""A committed row survives SIGKILL at any instant, and a busy daemon that is killed starts again by itself."""

from __future__ import annotations

import random
import signal
import sqlite3
import subprocess
import sys
import time
from contextlib import closing
from pathlib import Path

import pytest
from driftwatch.store.queries import Reader, Wanted

from benchmarks.kills import LOST_S, killed

KILLS = 20
LANES = 2

GROUP = 40
WRITERS = 3

_WRITER = f"""
import sys
from driftwatch.records import CovariateValue, Envelope, Level, Origin, TimeQuality
from driftwatch.store.writer import Writer

run = sys.argv[2]
level = Level("drive end", 1.0, 1.0, 2.0, 2.0, 3.0, (10.0, 1000.0), "m/s2")
speed = CovariateValue("speed", 1480.0, "1/min")
writer = Writer.open(sys.argv[1], "line 3")
sequence = 0
while True:
    group = []
    for _ in range({GROUP}):
        sequence += 1
        body = level if sequence % 2 else speed
        group.append(Envelope("line 3", run, Origin.LIVE, sequence, None, sequence, TimeQuality.FREE, body))
    writer.write(group)
    print(sequence, flush=True)  # told only after the commit
"""


def _killed_after(database: Path, run: str, seconds: float) -> int:
    """Start a writer, kill it some time after its first commit, return the last sequence that it reported."""
    with subprocess.Popen([sys.executable, "-c", _WRITER, database, run], stdout=subprocess.PIPE, text=True) as process:
        assert process.stdout is not None
        first = process.stdout.readline()
        time.sleep(seconds)
        process.send_signal(signal.SIGKILL)
        whole = [line for line in process.stdout.read().splitlines(keepends=True) if line.endswith("\n")]
    assert process.returncode == -signal.SIGKILL
    return int((whole or [first])[-1])


def test_whatever_was_reported_as_committed_is_there_after_sigkill(tmp_path: Path) -> None:
    database = tmp_path / "driftwatch.db"
    moments = random.Random(0)  # noqa: S311 - when to kill, no secret
    for number in range(WRITERS):
        run = f"run-{number}"
        reported = _killed_after(database, run, moments.uniform(0.0, 0.3))
        with Reader.open(database) as reader:
            found = [row.sequence for kind in ("level", "covariate") for row in reader.records(kind, Wanted(run=run))]
        assert len(found) >= reported
        assert sorted(found) == list(range(1, len(found) + 1))  # without holes
        assert len(found) % GROUP == 0  # whole groups only
    with closing(sqlite3.connect(database)) as connection:
        assert connection.execute("PRAGMA integrity_check").fetchall() == [("ok",)]
        assert connection.execute("PRAGMA foreign_key_check").fetchall() == []


@pytest.mark.timeout(600)
def test_whatever_was_published_is_stored_after_sigkill_and_the_daemon_starts_again(tmp_path: Path) -> None:
    """20 kills at random instants; each next start is on the database that the kill left, with nobody's help.

    Integrity is checked after each, no run has a hole, and no reading is lost that was known more than a second before.
    """
    lanes = killed(tmp_path, KILLS, LANES)
    assert sum(one.kills for one in lanes) == KILLS
    assert sum(one.published for one in lanes) > 20 * KILLS
    assert [one.missing for one in lanes] == [0] * LANES
    assert [one.holes for one in lanes] == [0] * LANES
    assert [one.damage for one in lanes] == [[]] * LANES
    assert max(seconds for one in lanes for seconds in one.lost_s) <= LOST_S
