"""How things stand in a run is found by index: the last word on everything, and nothing else."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
import sqlalchemy as sa
from driftwatch.records import (
    NS,
    Envelope,
    Fault,
    Health,
    Origin,
    Phase,
    TimeQuality,
    Track,
    TrackStatus,
    fields_of,
)
from driftwatch.store import latest
from driftwatch.store.queries import Reader
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]
RUN = "5f0e8f0e-1111-4222-8333-123456789abc"
START_NS = 1_767_225_600 * NS


def _wrapped(sequence: int, body: Any, quality: TimeQuality = TimeQuality.FILE) -> Envelope:
    return Envelope("line 3", RUN, Origin.REPLAY, sequence, None, START_NS + sequence * NS, quality, body)


def _track(sequence: int, channel: str, mode: str, quality: TimeQuality = TimeQuality.FILE) -> Envelope:
    values: dict[str, Any] = {field.name: None for field in fields_of(Track)}
    track = Track(**(values | {"channel": channel, "mode": mode, "status": TrackStatus.TRACKING}))
    return _wrapped(sequence, track, quality)


def _fault(sequence: int, incident: str, phase: Phase) -> Envelope:
    values: dict[str, Any] = {field.name: None for field in fields_of(Health)}
    values |= {"fault": Fault.GAP, "phase": phase, "incident": incident, "since_ns": START_NS}
    return _wrapped(sequence, Health(**(values | {"seconds": 0.0, "lost_samples": 0})))


@pytest.fixture
def records(measurement: Make, alert: Make, run_record: Make) -> list[Envelope]:
    """Return a run of three modes on two channels with three alerts and three incidents."""
    return [
        run_record(1),
        *(_track(2 + number, "ab"[number % 2], "xy"[number // 2 % 2]) for number in range(12)),
        alert(14, alert="a/x/low"),
        alert(15, alert="a/x/low", reason="later"),
        alert(16, alert="b/y/high"),
        _fault(17, "one", Phase.BEGIN),
        _fault(18, "two", Phase.BEGIN),
        _fault(19, "two", Phase.CONTINUE),
        _fault(20, "one", Phase.END),
        _track(21, "b", "y", TimeQuality.SYNCHRONISED),  # the run's time quality changes
        measurement(22, time_quality=TimeQuality.SYNCHRONISED),
    ]


def _written(tmp_path: Path, records: list[Envelope]) -> Path:
    path = tmp_path / "a.db"
    with Writer.open(path, "line 3") as writer:
        writer.write(records)
    return path


def test_the_last_word_on_everything_is_found(tmp_path: Path, records: list[Envelope], run_record: Make) -> None:
    other = run_record(1, run="another")
    with Reader.open(_written(tmp_path, [*records, other])) as reader:
        found = reader.latest(RUN)
        newest = reader.latest()
        assert reader.latest("nobody") is None
    assert found is not None
    assert (found.station, found.origin, found.whole) == ("line 3", Origin.REPLAY, True)
    assert (found.sequence, found.time_ns) == (22, START_NS + 22 * NS)
    # the last of b/y before the change stands before the one after it: who takes both keeps the later
    assert [one.sequence for one in found.records] == [1, 10, 11, 12, 13, 15, 16, 19, 21]
    assert newest is not None
    assert newest.records == (other,)


def test_what_came_after_a_record_is_found(
    tmp_path: Path, records: list[Envelope], monkeypatch: pytest.MonkeyPatch
) -> None:
    with Reader.open(_written(tmp_path, records)) as reader:
        found = reader.latest(RUN, after=15)
        assert found is not None
        assert not found.whole
        assert list(found.records) == records[15:21]  # no measurement
        monkeypatch.setattr(latest, "MOST_NEW", 5)
        found = reader.latest(RUN, after=15)
        assert found is not None
        assert found.whole  # too much came: from the begin


def test_an_empty_database_has_no_last_word(tmp_path: Path) -> None:
    with Reader.open(_written(tmp_path, [])) as reader:
        assert reader.latest() is None


def test_no_table_of_many_rows_is_read_through(tmp_path: Path, records: list[Envelope]) -> None:
    """Every statement on tracks and alerts names the columns of an index up to where it looks: SQLite says so."""
    with Reader.open(_written(tmp_path, records)) as reader:
        asked: list[tuple[str, Any]] = []
        sa.event.listen(
            reader._engine,
            "before_cursor_execute",
            lambda _c, _u, text, values, _x, _m: asked.append((text, values)),
        )
        reader.latest(RUN)
        told = list(asked)
        with reader._engine.begin() as connection:
            for text, values in told:
                if "FROM track" not in text and "FROM alert" not in text:
                    continue
                plan = connection.exec_driver_sql(f"EXPLAIN QUERY PLAN {text}", values).all()
                steps = [row[3] for row in plan]
                assert not any("TEMP B-TREE" in step for step in steps), (text, steps)
                assert not any(step.startswith(("SCAN track", "SCAN alert")) for step in steps), (text, steps)
                assert "(track.channel, track.mode) >" not in text
