"""Pruning removes what is old, in small steps, and nothing that gives the rest its meaning."""

from __future__ import annotations

import uuid
from collections.abc import Callable
from pathlib import Path

import pytest
from driftwatch.records import NS, AlertState, Baseline, Envelope
from driftwatch.store.queries import Reader
from driftwatch.store.retention import count_old, prune
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]
DAY = 86_400 * NS
NOW = 1_767_225_600 * NS + 200 * DAY


def _left(writer: Writer, kind: str = "measurement") -> list[int]:
    with Reader.open(writer.path) as reader:
        return [envelope.sequence for envelope in reader.records(kind)]


def _prune_all(writer: Writer, rows: int = 1000) -> list[int]:
    steps = []
    while removed := prune(writer, 90.0, NOW, rows):
        steps.append(removed)
    return steps


def test_rows_older_than_the_days_go_and_younger_ones_stay_to_the_nanosecond(tmp_path: Path, measurement: Make) -> None:
    cut = NOW - 90 * DAY
    times = {1: cut - 100 * DAY, 2: cut - 1, 3: cut, 4: NOW}
    with Writer.open(tmp_path / "a.db", "s", clock=lambda: cut - 100 * DAY) as writer:
        writer.write([measurement(sequence, time_ns=time_ns) for sequence, time_ns in times.items()])
        _prune_all(writer)
        assert _left(writer) == [3, 4]


def test_a_replay_of_an_old_recording_stays_as_long_as_a_live_run_of_its_day(tmp_path: Path, measurement: Make) -> None:
    with Writer.open(tmp_path / "a.db", "s", clock=lambda: NOW - 89 * DAY) as writer:
        writer.write([measurement(1, time_ns=NOW - 4000 * DAY)])
        assert _prune_all(writer) == []
        assert _left(writer) == [1]


def test_a_step_is_never_larger_than_asked_for(tmp_path: Path, measurement: Make) -> None:
    with Writer.open(tmp_path / "a.db", "s", clock=lambda: 0) as writer:
        writer.write([measurement(sequence, time_ns=sequence) for sequence in range(1, 26)])
        steps = _prune_all(writer, rows=10)
        assert steps[:3] == [10, 10, 5]
        assert _left(writer) == []


@pytest.mark.parametrize("young", [False, True], ids=["all of the run is old", "the run goes on"])
def test_a_runs_records_and_standing_alerts_go_with_its_last_rows(
    tmp_path: Path, measurement: Make, alert: Make, run_record: Make, young: bool
) -> None:
    rows = [
        run_record(1, time_ns=1),
        measurement(2, time_ns=2),
        alert(3, time_ns=3, alert="a/b/stands"),
        alert(4, time_ns=4, alert="a/b/went"),
        alert(5, time_ns=5, alert="a/b/went", state=AlertState.NORMAL),
        measurement(6, time_ns=NOW if young else 6),
    ]
    with Writer.open(tmp_path / "a.db", "s", clock=lambda: 0) as writer:
        writer.write(rows)
        _prune_all(writer)
        left = {kind: _left(writer, kind) for kind in ("run", "measurement", "alert")}
        assert left == ({"run": [1], "measurement": [6], "alert": [3]} if young else {kind: [] for kind in left})
        with Reader.open(writer.path) as reader:
            assert len(reader.runs()) == young


def test_a_baseline_stays_whatever_its_age_and_its_run_with_it(tmp_path: Path, run_record: Make) -> None:
    baseline = Baseline("drive end", "rocking", None, 1, 900.0, 0.1, 40.0, 1.0, 2000, 0, 1)
    row = run_record(2, time_ns=2)
    with Writer.open(tmp_path / "a.db", "s", clock=lambda: 0) as writer:
        writer.write(
            [run_record(1, time_ns=1), type(row)(**{n: getattr(row, n) for n in row.__slots__} | {"body": baseline})]
        )
        assert _prune_all(writer) == []
        assert (_left(writer, "baseline"), _left(writer, "run")) == ([2], [1])


def test_a_run_may_go_on_after_it_was_pruned_away(tmp_path: Path, measurement: Make) -> None:
    with Writer.open(tmp_path / "a.db", "s", clock=lambda: 0) as writer:
        writer.write([measurement(1, time_ns=1)])
        _prune_all(writer)
        writer.write([measurement(2, time_ns=NOW), measurement(1, run=str(uuid.uuid4()), time_ns=NOW)])
        assert sorted(_left(writer)) == [1, 2]


@pytest.mark.parametrize(("days", "old"), [(1e5, 1), (1e6, 0), (1e9, 0), (1e308, 0)])
def test_rows_that_are_kept_for_longer_than_there_are_times_are_kept_for_ever(
    tmp_path: Path, measurement: Make, days: float, old: int
) -> None:
    """Times reach back to the year 1677."""
    with Writer.open(tmp_path / "a.db", "s", clock=lambda: -(2**63)) as writer:
        writer.write([measurement(1, time_ns=-(2**63)), measurement(2, time_ns=0)])
        with writer.transaction() as connection:
            assert count_old(connection, days, NOW) == old
        assert prune(writer, days, NOW) == old
