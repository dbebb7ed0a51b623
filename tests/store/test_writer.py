"""The writer stores groups whole or not at all, alone, and what it stored comes back equal."""

from __future__ import annotations

import math
import os
import sqlite3
import subprocess
import sys
import time
import uuid
from collections.abc import Callable, Iterator
from contextlib import closing
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from driftwatch.records import KINDS, Envelope, Level, Measurement
from driftwatch.store import opening
from driftwatch.store.errors import CommitError, StoreBusyError, Trouble
from driftwatch.store.queries import Reader, Wanted
from driftwatch.store.rows import form_of
from driftwatch.store.writer import Writer
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

Make = Callable[..., Envelope]


@pytest.fixture
def database(tmp_path: Path) -> Path:
    return tmp_path / "driftwatch.db"


@pytest.fixture
def writer(database: Path) -> Iterator[Writer]:
    with Writer.open(database, "line 3") as opened:
        yield opened


@pytest.fixture(scope="module")
def kept(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Writer]:
    with Writer.open(tmp_path_factory.mktemp("kept") / "driftwatch.db", "line 3") as opened:
        yield opened


def _all(path: Path, kind: str = "measurement", **wanted: Any) -> list[Envelope]:
    with Reader.open(path) as reader:
        return list(reader.records(kind, Wanted(**wanted)))


@given(data=st.data())
@settings(deadline=None, max_examples=60, suppress_health_check=[HealthCheck.too_slow])
def test_what_is_written_comes_back_equal(kept: Writer, any_envelope: st.SearchStrategy[Envelope], data: Any) -> None:
    run = str(uuid.uuid4())
    drawn = data.draw(st.lists(any_envelope, min_size=1, max_size=12))
    written = [replace(envelope, run=run, sequence=number) for number, envelope in enumerate(drawn, 1)]
    kept.write(written)
    with Reader.open(kept.path) as reader:
        found = [envelope for kind in KINDS for envelope in reader.records(kind, Wanted(run=run))]
    assert sorted(found, key=lambda envelope: envelope.sequence) == written


def test_a_figure_that_is_not_finite_comes_back_as_unknown(writer: Writer, measurement: Make) -> None:
    level = Level("drive end", 1.0, math.nan, 2.0, 2.0, 3.0, (10.0, 1000.0), "m/s2")
    writer.write([measurement(1, q=math.nan), replace(measurement(2), body=level)])
    (stored,) = _all(writer.path)
    assert isinstance(stored.body, Measurement)
    assert stored.body.q is None
    (stored,) = _all(writer.path, "level")
    assert isinstance(stored.body, Level)
    assert math.isnan(stored.body.rms)  # this field must hold a number


def test_a_group_that_fails_leaves_nothing_and_the_writer_goes_on(writer: Writer, measurement: Make) -> None:
    writer.write([measurement(1)])
    other = str(uuid.uuid4())
    with pytest.raises(CommitError, match="nothing of this group was stored"):
        writer.write([measurement(1, run=other), measurement(2), measurement(1)])  # sequence 1 is there
    assert [envelope.sequence for envelope in _all(writer.path)] == [1]
    writer.write([measurement(2), measurement(1, run=other)])  # the other run is registered anew
    assert len(_all(writer.path)) == 3


def test_a_run_goes_on_in_the_same_database_after_it_was_opened_again(database: Path, measurement: Make) -> None:
    for sequence in (1, 2):
        with Writer.open(database, "line 3") as writer:
            writer.write([measurement(sequence)])
    with Reader.open(database) as reader:
        (run,) = reader.runs()
    assert run.counts == {"measurement": 2}


def test_a_second_writer_is_refused_and_told_who_writes(writer: Writer) -> None:
    code = "import sys; from driftwatch.store.writer import Writer; Writer.open(sys.argv[1], 'line 4')"
    done = subprocess.run([sys.executable, "-c", code, writer.path], capture_output=True, text=True, check=False)
    assert "StoreBusyError" in done.stderr
    with pytest.raises(StoreBusyError, match=rf"process {os.getpid()} \(station 'line 3'\)"):
        Writer.open(writer.path, "line 4")


def test_the_right_to_write_ends_with_a_killed_process(database: Path) -> None:
    code = "import os, sys; from driftwatch.store.writer import Writer; "
    code += "writer = Writer.open(sys.argv[1], 's'); os.kill(os.getpid(), 9)"
    assert subprocess.run([sys.executable, "-c", code, database], check=False).returncode == -9
    Writer.open(database, "line 3").close()


def test_a_group_with_an_alert_waits_for_the_disk_and_others_do_not(
    writer: Writer, measurement: Make, alert: Make
) -> None:
    levels = []
    for group in ([measurement(1)], [alert(2), measurement(3)], [measurement(4)]):
        writer.write(group)
        levels.append(writer._connection.exec_driver_sql("PRAGMA synchronous").scalar())
        writer._connection.rollback()
    normal, full = 1, 2
    assert levels == [normal, full, normal]


def test_a_locked_database_fails_the_group_and_the_next_one_passes(
    database: Path, measurement: Make, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(opening, "BUSY_MS", 50)
    with Writer.open(database, "line 3") as writer, closing(sqlite3.connect(database, isolation_level=None)) as other:
        other.execute("BEGIN IMMEDIATE")
        with pytest.raises(CommitError, match="locked; another program holds the database"):
            writer.write([measurement(1)])
        other.execute("ROLLBACK")
        writer.write([measurement(1)])
        assert len(_all(database)) == 1


def test_a_full_disk_fails_the_group_keeps_what_was_there_and_has_a_way_back(writer: Writer, measurement: Make) -> None:
    writer.write([measurement(1)])
    raw = writer._connection.connection.cursor()
    pages = raw.execute("PRAGMA page_count").fetchone()[0]
    raw.execute(f"PRAGMA max_page_count = {pages}")  # what the database reports is what a full disk makes it report
    group = [measurement(sequence) for sequence in range(2, 500)]
    with pytest.raises(CommitError, match="full; the disk is full; free some space"):
        writer.write(group)
    assert len(_all(writer.path)) == 1
    raw.execute("PRAGMA max_page_count = 1000000")
    writer.write(group)
    assert len(_all(writer.path)) == 499


def test_an_empty_group_is_no_transaction(writer: Writer) -> None:
    writer.write([])
    assert _all(writer.path) == []


def test_storing_costs_little_more_than_the_driver_alone(tmp_path: Path, measurement: Make) -> None:
    """The median of five pairs of processor times, first group of a new database, is about 1.6."""
    group = [measurement(sequence) for sequence in range(1, 2001)]
    rows = [form_of("measurement").row(1, envelope) for envelope in group]
    insert = f"INSERT INTO measurement VALUES ({','.join('?' * len(rows[0]))})"  # noqa: S608
    ratios = []
    for number in range(5):
        with Writer.open(tmp_path / f"{number}.db", "s") as writer:
            ours = _processor_time(lambda writer=writer: writer.write(group))
        path = tmp_path / f"{number} bare.db"
        Writer.open(path, "s").close()
        with closing(sqlite3.connect(path, isolation_level=None)) as bare:
            bare.execute("BEGIN IMMEDIATE")
            bare.execute("INSERT INTO header VALUES (1, 'r', 's', 'replay', 'file', 0)")
            ratios.append(ours / _processor_time(lambda bare=bare: (bare.executemany(insert, rows), bare.commit())))
    assert sorted(ratios)[2] < 3.0


def _processor_time(work: Callable[[], object]) -> float:
    begin = time.process_time()
    work()
    return time.process_time() - begin


@pytest.mark.parametrize("changes", [{"mode": "rock\udce9"}, {"samples": 2**63}], ids=["no text", "too large"])
def test_a_value_that_no_row_can_hold_is_refused_and_the_writer_stays_usable(
    writer: Writer, measurement: Make, changes: dict[str, object]
) -> None:
    with pytest.raises(CommitError) as raised:
        writer.write([measurement(1), measurement(2, **changes)])
    assert raised.value.trouble is Trouble.REFUSED
    writer.write([measurement(1)])
    assert len(_all(writer.path)) == 1


def test_a_roll_back_that_fails_is_done_before_the_next_group(writer: Writer, measurement: Make) -> None:
    writer.write([measurement(1)])
    driver = writer._connection.connection.driver_connection

    def authorize(what: int, operation: str | None, *_: object) -> int:
        is_back = (what, operation) == (sqlite3.SQLITE_TRANSACTION, "ROLLBACK")
        return sqlite3.SQLITE_DENY if is_back else sqlite3.SQLITE_OK

    driver.set_authorizer(authorize)
    with pytest.raises(CommitError, match="UNIQUE"):
        writer.write([measurement(2), measurement(1)])
    with pytest.raises(CommitError, match="not authorized"), writer.transaction():
        raise ValueError("no error of the library")
    driver.set_authorizer(None)
    writer.write([measurement(3)])
    assert [one.sequence for one in _all(writer.path)] == [1, 3]
