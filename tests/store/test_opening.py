"""A file that is not ours is refused with its remedy and left as it is, down to the byte."""

from __future__ import annotations

import os
import sqlite3
from collections.abc import Callable, Iterator
from contextlib import closing
from pathlib import Path

import pytest
from driftwatch.records import Envelope
from driftwatch.store import opening
from driftwatch.store.errors import ForeignDatabaseError, OtherSchemaError, StoreError, StoreUnreachableError
from driftwatch.store.location import database_path
from driftwatch.store.queries import Reader
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]


def _foreign(path: Path, journal: str) -> None:
    with closing(sqlite3.connect(path)) as connection:
        connection.execute(f"PRAGMA journal_mode = {journal}")
        connection.execute("CREATE TABLE measurement (a, b)")
        connection.execute("INSERT INTO measurement VALUES (1, 2)")
        connection.commit()


def _untouched(folder: Path, work: Callable[[], object], error: type[StoreError], match: str) -> None:
    before = {file.name: file.read_bytes() for file in folder.iterdir()}
    with pytest.raises(error, match=match):
        work()
    assert {file.name: file.read_bytes() for file in folder.iterdir()} == before


@pytest.mark.parametrize("journal", ["DELETE", "WAL"])
@pytest.mark.parametrize("opened", [lambda path: Writer.open(path, "s"), Reader.open], ids=["writer", "reader"])
def test_another_programs_database_is_refused_unchanged(
    tmp_path: Path, journal: str, opened: Callable[[Path], object]
) -> None:
    _foreign(tmp_path / "other.db", journal)
    _untouched(
        tmp_path, lambda: opened(tmp_path / "other.db"), ForeignDatabaseError, "the tables measurement.*name another"
    )


@pytest.mark.parametrize("opened", [lambda path: Writer.open(path, "s"), Reader.open], ids=["writer", "reader"])
def test_a_file_that_is_no_database_is_refused_unchanged(tmp_path: Path, opened: Callable[[Path], object]) -> None:
    (tmp_path / "notes.db").write_text("remember the milk\n" * 100)
    _untouched(
        tmp_path, lambda: opened(tmp_path / "notes.db"), ForeignDatabaseError, "not a database.*name another file"
    )


@pytest.mark.parametrize("opened", [lambda path: Writer.open(path, "s"), Reader.open], ids=["writer", "reader"])
def test_a_newer_schema_is_refused_with_the_remedy(tmp_path: Path, opened: Callable[[Path], object]) -> None:
    path = tmp_path / "future.db"
    Writer.open(path, "s").close()
    with closing(sqlite3.connect(path)) as connection:
        connection.execute("UPDATE alembic_version SET version_num = '9001'")
        connection.commit()
    before = path.read_bytes()
    with pytest.raises(OtherSchemaError, match=r"schema 9001, expected at most 0003.*install that version"):
        opened(path)
    assert path.read_bytes() == before


def test_a_reader_refuses_a_database_without_tables_and_says_how_they_come(tmp_path: Path) -> None:
    path = tmp_path / "empty.db"
    path.touch()
    with pytest.raises(OtherSchemaError, match=r"schema none.*when `driftwatch run`"):
        Reader.open(path)


def test_an_empty_file_becomes_a_database(tmp_path: Path) -> None:
    path = tmp_path / "empty.db"
    path.touch()
    Writer.open(path, "s").close()
    Reader.open(path).close()


def test_a_database_that_is_missing_is_no_database_to_read(tmp_path: Path) -> None:
    _untouched(tmp_path, lambda: Reader.open(tmp_path / "none.db"), StoreUnreachableError, "does not exist; expected")


def test_a_folder_is_no_database(tmp_path: Path) -> None:
    _untouched(tmp_path, lambda: Writer.open(tmp_path, "s"), StoreUnreachableError, "is a folder; expected a database")


def test_a_missing_folder_is_named(tmp_path: Path) -> None:
    path = tmp_path / "none" / "a.db"
    _untouched(
        tmp_path, lambda: Writer.open(path, "s"), StoreUnreachableError, "a.db.*No such file or directory; see that"
    )


@pytest.fixture
def powerless(tmp_path: Path) -> Iterator[Path]:
    """Return a folder that may be read but not written to, also where the tests run as root."""
    folder = tmp_path / "locked"
    folder.mkdir()
    for parent in (folder, *folder.parents[:3]):  # pytest makes them for its own user only
        parent.chmod(parent.stat().st_mode | 0o055)
    user = os.geteuid()
    yield folder
    os.seteuid(user)
    folder.chmod(0o755)


def _give_up_power(folder: Path) -> None:
    folder.chmod(0o555)
    if os.geteuid() == 0:
        os.seteuid(65_534)


def test_a_folder_that_may_not_be_written_to_is_refused(powerless: Path) -> None:
    _give_up_power(powerless)
    _untouched(powerless, lambda: Writer.open(powerless / "a.db", "s"), StoreUnreachableError, "Permission denied")


def test_a_database_that_may_only_be_read_is_read(powerless: Path, measurement: Make) -> None:
    path = powerless / "a.db"
    with Writer.open(path, "s") as writer:
        writer.write([measurement(1)])
    _give_up_power(powerless)
    with Reader.open(path) as reader:
        assert list(reader.records("measurement")) == [measurement(1)]


def test_a_database_that_a_reader_keeps_from_its_log_is_refused_with_the_remedy(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Write-ahead logging cannot begin while another program reads in the old way."""
    path = tmp_path / "a.db"
    Writer.open(path, "s").close()
    monkeypatch.setattr(opening, "BUSY_MS", 50)
    with closing(sqlite3.connect(path, isolation_level=None)) as reading:
        reading.execute("PRAGMA journal_mode = DELETE")
        reading.execute("BEGIN")
        reading.execute("SELECT * FROM header").fetchall()
        with pytest.raises(StoreUnreachableError, match="locked; another program holds the database"):
            Writer.open(path, "s")
    Writer.open(path, "s").close()


@pytest.mark.parametrize("records", [2, 5000], ids=["in its schema", "in its rows"])
def test_a_damaged_database_is_an_error_that_says_what_to_do(tmp_path: Path, measurement: Make, records: int) -> None:
    path = tmp_path / "a.db"
    with Writer.open(path, "s") as writer:
        writer.write([measurement(sequence) for sequence in range(1, records)])
    raw = bytearray(path.read_bytes())
    middle = len(raw) // 2
    raw[middle:] = bytes(len(raw) - middle)
    path.write_bytes(raw)
    with (
        pytest.raises(StoreError, match="malformed; the database is damaged; keep the file"),
        Reader.open(path) as reader,
    ):
        list(reader.records("measurement"))


@pytest.mark.parametrize(
    ("url", "path"),
    [
        ("sqlite:///driftwatch.db", "/home/driftwatch.db"),
        ("sqlite:////var/lib/driftwatch.db", "/var/lib/driftwatch.db"),
        ("data/a.db", "/home/data/a.db"),
        ("/var/a.db", "/var/a.db"),
    ],
)
def test_a_url_or_path_is_relative_to_its_base(url: str, path: str) -> None:
    assert database_path(url, Path("/home")) == Path(path)


@pytest.mark.parametrize("url", ["postgresql://host/db", "", "sqlite:///", "sqlite:///:memory:", ":memory:"])
def test_a_url_that_names_no_file_is_refused(url: str) -> None:
    with pytest.raises(StoreUnreachableError, match="expected a path or sqlite:///PATH"):
        database_path(url, Path("/home"))
