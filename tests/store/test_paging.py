"""A long answer is read a page at a time: nothing is missing or twice, and no transaction pins the log in between."""

from __future__ import annotations

import sqlite3
import uuid
from collections.abc import Callable, Iterator
from contextlib import closing
from dataclasses import replace
from itertools import islice
from pathlib import Path
from typing import Any

import pytest
import sqlalchemy as sa
from driftwatch.records import NS, Envelope, Measurement, Method, Track, TrackStatus
from driftwatch.store import hourly, paging
from driftwatch.store.ahead import log_of
from driftwatch.store.queries import Reader, Wanted
from driftwatch.store.tables import TABLES
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]

HOUR = 3600 * NS
START = 1_767_225_600 * NS
RUNS = [str(uuid.UUID(int=number)) for number in range(1, 5)]


@pytest.fixture
def written(tmp_path: Path, measurement: Make, monkeypatch: pytest.MonkeyPatch) -> tuple[Path, list[Envelope]]:
    """Return a database of four runs whose times interlock and are not in order, and what is in it; pages are short."""
    monkeypatch.setattr(paging, "PAGE_ROWS", 7)
    envelopes = [
        measurement(
            sequence,
            run=run,
            mode=("rocking", "bending")[sequence % 2],
            method=(Method.AMBIENT, Method.RINGDOWN)[sequence % 3 % 2],
            time_ns=START + (sequence * 7919 % 61) * NS,
        )
        for run in RUNS
        for sequence in range(1, 41)
    ]
    with Writer.open(tmp_path / "a.db", "line 3") as writer:
        writer.write(envelopes)
    return tmp_path / "a.db", envelopes


_ASKED: list[dict[str, Any]] = [
    {},
    {"run": RUNS[2]},
    {"run": RUNS[2], "channel": "drive end"},
    {"run": RUNS[1], "channel": "drive end", "mode": "bending"},
    {"channel": "drive end", "mode": "bending"},
    {"method": Method.RINGDOWN},
    {"since_ns": START + 10 * NS, "until_ns": START + 50 * NS},
]


@pytest.mark.parametrize("limit", [None, 1, 7, 8, 30, 1000])
@pytest.mark.parametrize("asked", _ASKED, ids=str)
def test_pages_join_to_the_answer_in_the_order_of_time(
    written: tuple[Path, list[Envelope]], asked: dict[str, Any], limit: int | None
) -> None:
    path, envelopes = written
    expected = sorted((one for one in envelopes if _is_asked(one, asked)), key=_place)
    with Reader.open(path) as reader:
        assert list(reader.records("measurement", Wanted(**asked, limit=limit))) == expected[-(limit or 1000) :]
        first = list(reader.records("measurement", Wanted(**asked, limit=limit, earliest=True)))
        assert first == expected[: limit or 1000]


def _is_asked(envelope: Envelope, asked: dict[str, Any]) -> bool:
    body = envelope.body
    assert isinstance(body, Measurement)
    return (
        asked.get("run", envelope.run) == envelope.run
        and all(asked.get(name, getattr(body, name)) == getattr(body, name) for name in ("channel", "mode", "method"))
        and asked.get("since_ns", 0) <= envelope.time_ns < asked.get("until_ns", 2**62)
    )


def _place(envelope: Envelope) -> tuple[int, int, int]:
    return (envelope.time_ns, RUNS.index(envelope.run), envelope.sequence)


@pytest.mark.parametrize("asked", _ASKED, ids=str)
def test_each_page_is_found_by_an_index_and_nothing_is_sorted(
    written: tuple[Path, list[Envelope]], asked: dict[str, Any]
) -> None:
    """The planner itself says so; what it would say of a sort is stated first."""
    path, _ = written
    with Reader.open(path) as reader, reader._connected() as connection, connection.begin():
        unordered = sa.select(TABLES["measurement"]).order_by(TABLES["measurement"].c.q)
        assert "TEMP B-TREE" in _plan(connection, unordered)
        answer = paging._answer(connection, "measurement", Wanted(**asked))
        for after in (None, (START + 5 * NS, 2, 3)):
            plan = _plan(connection, answer.page(after))
            assert "USING INDEX ix_measurement_" in plan
            assert "TEMP B-TREE" not in plan
            assert after is None or "SEARCH measurement" in plan


def _plan(connection: sa.engine.Connection, statement: sa.Select[Any]) -> str:
    compiled = statement.compile(connection.engine, compile_kwargs={"literal_binds": True})
    return "; ".join(row[3] for row in connection.exec_driver_sql(f"EXPLAIN QUERY PLAN {compiled}"))


def test_what_is_written_while_an_answer_is_read_is_left_out(
    written: tuple[Path, list[Envelope]], measurement: Make
) -> None:
    path, envelopes = written
    with Reader.open(path) as reader, Writer.open(path, "line 3") as writer:
        answer = reader.records("measurement")
        found = list(islice(answer, 10))
        writer.write([measurement(41, time_ns=START + 60 * NS, run=RUNS[0])])
        writer.write([measurement(1, time_ns=START + 60 * NS, run=str(uuid.uuid4()))])
        found += answer
    assert found == sorted(envelopes, key=_place)


def test_an_answer_that_nobody_goes_on_reading_does_not_pin_the_log(
    written: tuple[Path, list[Envelope]], measurement: Make
) -> None:
    path, _ = written
    with Reader.open(path) as reader, Writer.open(path, "line 3") as writer:
        answer = reader.records("measurement")
        next(answer)
        writer.write([measurement(sequence) for sequence in range(41, 2000)])
        with closing(sqlite3.connect(path)) as other:
            assert other.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchone()[0] == 0  # nobody is in the way
        assert log_of(path).stat().st_size == 0
        answer.close()  # type: ignore[attr-defined]


# ---------------------------------------------------------------------------------------------- a point an hour


def _track(measurement: Make, sequence: int, time_ns: int, **changes: Any) -> Envelope:
    values: dict[str, Any] = dict.fromkeys(Track.__dataclass_fields__)
    values |= {
        "channel": "drive end",
        "mode": changes.pop("mode", "rocking"),
        "status": changes.pop("status", TrackStatus.TRACKING),
        "frequency_hz": changes.pop("frequency_hz", 900.0),
    }
    return replace(measurement(sequence, time_ns=time_ns, **changes), body=Track(**values))


@pytest.fixture(scope="module")
def year(tmp_path_factory: pytest.TempPathFactory, measurement: Make) -> Iterator[Reader]:
    """Return a year of points every half hour, in two runs; some hours hold nothing, or nothing usable."""
    rows = []
    for number in range(365 * 24 * 2):
        hour = number // 2
        is_lost = hour % 100 == 50 or (number % 2 == 0 and hour % 7 == 0)
        status, figure = (TrackStatus.LOST, None) if is_lost else (TrackStatus.TRACKING, 900.0)
        if hour % 1000 < 100:
            continue
        run, time_ns = RUNS[hour // 5000], START + number * HOUR // 2 + 5 * NS
        rows.append(_track(measurement, number + 1, time_ns, run=run, status=status, frequency_hz=figure))
        if number % 10 == 0:
            rows.append(_track(measurement, number + 20_000, time_ns, run=run, mode="bending"))
    path = tmp_path_factory.mktemp("year") / "a.db"
    with Writer.open(path, "line 3") as writer:
        writer.write(rows)
    with Reader.open(path) as reader:
        yield reader


def test_a_year_of_hourly_points_is_the_first_usable_one_of_each_hour_by_index(year: Reader) -> None:
    """Every hour that has one, over all runs; the steps of the library grow with the hours asked for, not the rows."""
    expected: dict[int, Envelope] = {}
    for envelope in year.records("track", Wanted(channel="drive end", mode="rocking")):
        if isinstance(envelope.body, Track) and envelope.body.status is TrackStatus.TRACKING:
            expected.setdefault(envelope.time_ns // HOUR, envelope)
    assert 7000 < len(expected) < 365 * 24
    assert list(year.hourly("drive end", "rocking", station="line 3")) == list(expected.values())
    assert list(year.hourly("drive end", "rocking", station="line 4")) == []
    some = list(year.hourly("drive end", "rocking", since_ns=START + 150 * HOUR, until_ns=START + 170 * HOUR))
    assert some == [one for hour, one in expected.items() if START // HOUR + 150 <= hour < START // HOUR + 170]


@pytest.mark.parametrize("statement", [hourly.NEXT, hourly.USABLE])
def test_an_hourly_point_is_sought_in_an_index_and_nothing_is_scanned(year: Reader, statement: str) -> None:
    values = (1, "drive end", "rocking", START, START + HOUR)
    with year._connected() as connection, connection.begin():
        plan = [row[3] for row in connection.exec_driver_sql(f"EXPLAIN QUERY PLAN {statement}", values)]
    sought = "ix_track_about (header=? AND channel=? AND mode=? AND time_ns>? AND time_ns<?)"
    assert any(sought in line and line.startswith("SEARCH track") for line in plan)
    assert not any("SCAN track" in line or "TEMP B-TREE" in line for line in plan)


def test_a_mode_that_was_lost_for_long_costs_no_more_than_so_many_looks(tmp_path: Path, measurement: Make) -> None:
    """In an hour of points a second that are lost, 12 times 50 are looked at, and one within them is found."""
    lost = [
        _track(measurement, second + 1, START + second * NS, status=TrackStatus.LOST, frequency_hz=None)
        for second in range(3600)
    ]
    found = _track(measurement, 1810 + 1, START + 1810 * NS)
    unseen = _track(measurement, 290 + 1, START + 290 * NS)
    lost[1810], lost[290] = found, unseen
    with Writer.open(tmp_path / "a.db", "line 3") as writer:
        writer.write(lost)
    with Reader.open(tmp_path / "a.db") as reader:
        assert list(reader.hourly("drive end", "rocking")) == [found]
