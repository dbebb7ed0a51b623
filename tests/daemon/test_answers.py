"""Whoever asks a daemon reads its store in the daemon's own process, and does the writer no harm."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from driftwatch.bus.clerk import LookFailedError
from driftwatch.bus.request import Request
from driftwatch.daemon.answers import PAGE_RECORDS, Answers
from driftwatch.records import Envelope
from driftwatch.store.queries import Reader
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]

PASSING_BY = "import sqlite3, sys; one = sqlite3.connect(sys.argv[1]); one.execute('SELECT * FROM header'); one.close()"


def test_reading_beside_the_writer_leaves_it_its_locks(tmp_path: Path, measurement: Make) -> None:
    """Another program that opens and closes the database would fold and delete the log of a writer without locks, and
    what is written after that would be in no file that has a name."""
    path = tmp_path / "rows.db"
    with Writer.open(path, "bench") as writer:
        writer.write([measurement(1)])
        answers = Answers(path)
        assert len(answers.look(Request("r", "since"))["records"]) == 1
        assert answers.known("r") is None
        subprocess.run([sys.executable, "-c", PASSING_BY, str(path)], check=True)
        assert path.with_name("rows.db-wal").exists()
        writer.write([measurement(2)])
        with Reader.open(path, beside_writer=True) as reader:
            assert [one.sequence for one in reader.records("measurement")] == [1, 2]


def test_since_gives_page_after_page(tmp_path: Path, measurement: Make) -> None:
    path = tmp_path / "rows.db"
    with Writer.open(path, "bench") as writer:
        writer.write([measurement(number) for number in range(1, PAGE_RECORDS + 11)])
        answers = Answers(path)
        first = answers.look(Request("r", "since"))
        assert (len(first["records"]), first["more"]) == (PAGE_RECORDS, True)
        last = first["records"][-1]
        rest = answers.look(Request("r", "since", run=last["run"], sequence=last["sequence"]))
        assert not rest["more"]
        assert [one["sequence"] for one in rest["records"]] == list(range(PAGE_RECORDS + 1, PAGE_RECORDS + 11))


@pytest.mark.parametrize(("column", "value"), [("time_ns", "x'e2e2'"), ("because", "'7'"), ("state", "'calm'")])
def test_a_damaged_row_is_told_and_ends_nothing(tmp_path: Path, alert: Make, column: str, value: str) -> None:
    path = tmp_path / "rows.db"
    with Writer.open(path, "bench") as writer:
        writer.write([alert(1)])
        with writer.transaction() as connection:
            connection.exec_driver_sql(f"UPDATE alert SET {column} = {value}")  # noqa: S608 - our own words
        with pytest.raises(LookFailedError):
            Answers(path).look(Request("r", "since"))


def test_a_current_folder_that_is_gone_keeps_nobody_from_looking(
    tmp_path: Path, measurement: Make, monkeypatch: pytest.MonkeyPatch
) -> None:
    path, gone = tmp_path / "rows.db", tmp_path / "gone"
    gone.mkdir()
    with Writer.open(path, "bench") as writer:
        writer.write([measurement(1)])
        monkeypatch.chdir(gone)
        gone.rmdir()
        assert len(Answers(path).look(Request("r", "since"))["records"]) == 1
        assert Answers(path).known("r") is None


def test_what_cannot_be_told_is_said_and_what_cannot_be_looked_up_counts_as_new(tmp_path: Path) -> None:
    answers = Answers(tmp_path / "rows.db")
    with pytest.raises(LookFailedError, match=r"rows\.db does not exist"):
        answers.look(Request("r", "since"))
    with pytest.raises(LookFailedError, match="only begun; ask again"):
        answers.look(Request("r", "status"))
    assert answers.known("r") is None
