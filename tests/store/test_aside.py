"""What is damaged is set aside and never deleted; what was taken away is followed by another that names it."""

from __future__ import annotations

import os
import sqlite3
import subprocess
import sys
from collections.abc import Callable, Iterator
from contextlib import closing
from pathlib import Path

import pytest
from driftwatch.records import Envelope
from driftwatch.store import aside
from driftwatch.store.ahead import log_of
from driftwatch.store.aside import damage_in
from driftwatch.store.errors import (
    CommitError,
    ForeignDatabaseError,
    StoreBusyError,
    StoreUnreachableError,
    Trouble,
    trouble_of,
)
from driftwatch.store.lock import WriterLock
from driftwatch.store.queries import Reader
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "a.db"


def _live(path: Path) -> Writer:
    return Writer.open_live(path, WriterLock(path, "line 3"))


@pytest.fixture
def writer(path: Path, measurement: Make) -> Iterator[Writer]:
    """Return a writer whose rows lie in its log."""
    with _live(path) as opened:
        opened.write([measurement(sequence) for sequence in range(1, 500)])
        yield opened


def _sequences(path: Path) -> list[int]:
    with Reader.open(path) as reader:
        return [one.sequence for one in reader.records("measurement")]


def _predecessors(path: Path) -> list[tuple[str, str]]:
    with closing(sqlite3.connect(path)) as connection:
        return connection.execute("SELECT path, reason FROM predecessor ORDER BY id").fetchall()


def _spoil(path: Path, begin: int = 4096) -> bytes:
    with path.open("r+b") as file:
        file.seek(begin)
        file.write(b"\xa5" * (path.stat().st_size - begin))
    return path.read_bytes()


# ---------------------------------------------------------------------------------------------- damage


def _cut(path: Path) -> None:
    os.truncate(path, path.stat().st_size // 2)


def _schema(path: Path) -> None:
    with path.open("r+b") as file:  # the first page, after the file's header
        file.seek(100)
        file.write(b"\xa5" * 3996)


@pytest.mark.parametrize("spoil", [_cut, _schema])
def test_a_database_that_is_damaged_at_the_start_is_set_aside_as_it_is(
    path: Path, measurement: Make, spoil: Callable[[Path], None]
) -> None:
    with _live(path) as writer:
        writer.write([measurement(sequence) for sequence in range(1, 500)])
    spoil(path)
    spoiled = path.read_bytes()
    with _live(path) as writer:
        (gone,) = writer.set_aside
        writer.write([measurement(1)])
        assert writer.set_aside == ()
    assert Path(gone.path).parent == path.parent
    assert Path(gone.path).name.startswith("a.db.damaged-2")
    assert Path(gone.path).read_bytes() == spoiled
    assert _sequences(path) == [1]
    assert _predecessors(path) == [(gone.path, gone.reason)]


def test_pages_are_looked_through_after_an_unclean_end_only_and_not_for_long(
    path: Path, measurement: Make, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A log beside the file says that its last writer was killed; nothing else would be read at the start."""
    with _live(path) as writer:
        writer.write([measurement(sequence) for sequence in range(1, 500)])
    _spoil(path, path.stat().st_size - 8192)
    assert damage_in(path) is None
    log_of(path).write_bytes(b"\0" * 32)
    assert damage_in(path) is not None
    monkeypatch.setattr(aside, "CHECK_S", -1.0)
    monkeypatch.setattr(aside, "_STEPS", 1)
    assert damage_in(path) is None


def test_a_writer_that_was_killed_leaves_no_damage(path: Path) -> None:
    code = (
        "import os, sys; from driftwatch.store.writer import Writer; "
        "writer = Writer.open(sys.argv[1], 's'); os.kill(os.getpid(), 9)"
    )
    subprocess.run([sys.executable, "-c", code, path], check=False)
    assert damage_in(path) is None


def test_damage_under_way_sets_the_file_and_its_log_aside_and_the_writer_goes_on(
    writer: Writer, path: Path, measurement: Make
) -> None:
    with closing(sqlite3.connect(path, isolation_level=None)) as other:
        other.execute("PRAGMA wal_checkpoint(TRUNCATE)")
        spoiled = _spoil(path)
        other.execute("PRAGMA user_version = 1")  # so that the writer reads its pages again
        with pytest.raises(CommitError, match=r"malformed.*a live run sets it aside.*by itself") as raised:
            writer.write([measurement(500)])
        assert raised.value.trouble is Trouble.DAMAGED
        gone = writer.begin_after_damage(raised.value.cause)
        writer.write([measurement(500)])
    assert _sequences(path) == [500]
    assert _predecessors(path) == [(gone.path, "damaged: database disk image is malformed")]
    assert Path(gone.path).read_bytes() == spoiled
    assert log_of(Path(gone.path)).stat().st_size > 0


# ---------------------------------------------------------------------------------------------- gone


def _gone(writer: Writer, envelope: Envelope) -> None:
    with pytest.raises(CommitError, match=r"deleted, moved or replaced.*put it back: a live run") as raised:
        writer.write([envelope])
    assert raised.value.trouble is Trouble.GONE


def test_a_file_that_is_put_back_is_gone_on_in(writer: Writer, path: Path, measurement: Make) -> None:
    path.rename(path.with_name("moved.db"))
    _gone(writer, measurement(500))
    path.with_name("moved.db").rename(path)
    assert writer.begin_after_loss() is None
    writer.write([measurement(500)])
    assert _sequences(path) == list(range(1, 501))
    assert _predecessors(path) == []


def test_a_file_that_was_moved_keeps_all_its_rows_and_is_named(writer: Writer, path: Path, measurement: Make) -> None:
    """Its last rows lie in the log at the old place; nobody but the writer could fold that into it."""
    moved = path.with_name("moved.db")
    path.rename(moved)
    _gone(writer, measurement(500))
    writer.begin_after_loss()
    writer.write([measurement(500)])
    assert _sequences(path) == [500]
    assert _sequences(moved) == list(range(1, 500))
    assert _predecessors(path) == [(str(moved), "moved, or replaced, while it was written to")]


def test_the_log_of_a_moved_file_that_is_read_is_put_beside_it(writer: Writer, path: Path, measurement: Make) -> None:
    moved = path.with_name("moved.db")
    with closing(sqlite3.connect(path, isolation_level=None)) as other:
        other.execute("BEGIN")
        other.execute("SELECT count(*) FROM measurement").fetchone()
        writer.write([measurement(500)])
        path.rename(moved)
        writer.begin_after_loss()
        writer.write([measurement(501)])
    assert _sequences(path) == [501]
    assert _sequences(moved) == list(range(1, 501))


def test_a_deleted_file_is_followed_by_another_and_its_log_is_kept(
    writer: Writer, path: Path, measurement: Make
) -> None:
    path.unlink()
    log = log_of(path).read_bytes()
    _gone(writer, measurement(500))
    writer.begin_after_loss()
    writer.write([measurement(500)])
    assert _sequences(path) == [500]
    assert _predecessors(path) == [(str(path), "deleted while it was written to; what it held is lost")]
    (kept,) = path.parent.glob("a.db.lost-*-wal")
    assert kept.read_bytes() == log


def test_a_copy_of_ours_in_its_place_is_gone_on_in_without_the_old_ones_log(
    writer: Writer, path: Path, measurement: Make
) -> None:
    """The old log fits the copy as little as any other database: to apply it would damage that."""
    copy = path.with_name("copy.db")
    with Writer.open(copy, "line 3") as other:
        other.write([measurement(1, run="other")])
    copy.rename(path)
    _gone(writer, measurement(500))
    writer.begin_after_loss()
    writer.write([measurement(500)])
    assert sorted(_sequences(path)) == [1, 500]
    with closing(sqlite3.connect(path)) as connection:
        assert connection.execute("PRAGMA integrity_check").fetchall() == [("ok",)]


def test_a_foreign_file_in_its_place_is_left_until_it_is_taken_away(
    writer: Writer, path: Path, measurement: Make
) -> None:
    path.unlink()
    path.write_text("remember the milk\n" * 100)
    with pytest.raises(ForeignDatabaseError, match="left as it is"):
        writer.begin_after_loss()
    assert path.read_text() == "remember the milk\n" * 100
    path.unlink()
    writer.begin_after_loss()
    writer.write([measurement(500)])
    assert _sequences(path) == [500]


def test_a_folder_that_was_taken_away_is_waited_for_and_the_right_to_write_taken_anew(
    tmp_path: Path, measurement: Make
) -> None:
    folder = tmp_path / "state"
    folder.mkdir()
    path = folder / "a.db"
    with _live(path) as writer:
        writer.write([measurement(1)])
        for file in folder.iterdir():
            file.unlink()
        folder.rmdir()
        _gone(writer, measurement(2))
        for _ in range(2):
            with pytest.raises(StoreUnreachableError):
                writer.begin_after_loss()
            _gone(writer, measurement(2))
        folder.mkdir()
        writer.begin_after_loss()
        writer.write([measurement(2)])
        with pytest.raises(StoreBusyError):
            WriterLock(path, "line 4")
    assert _sequences(path) == [2]


# ---------------------------------------------------------------------------------------------- what came


def test_each_error_of_the_library_is_told_apart(writer: Writer, path: Path, measurement: Make) -> None:
    raw = writer._connection.connection.cursor()
    raw.execute("PRAGMA query_only = 1")  # what the library says of a file that may only be read
    with pytest.raises(CommitError, match=r"readonly.*change the permissions") as raised:
        writer.write([measurement(500)])
    assert raised.value.trouble is Trouble.READ_ONLY
    raw.execute("PRAGMA query_only = 0")
    with pytest.raises(CommitError) as raised:
        writer.write([measurement(1)])  # it is there
    assert raised.value.trouble is Trouble.REFUSED
    error = sqlite3.OperationalError("disk I/O error")
    error.sqlite_errorcode = sqlite3.SQLITE_IOERR_WRITE
    assert trouble_of(path, error) is Trouble.DISK
    assert trouble_of(Path("/proc/self/a.db"), error) is Trouble.FULL  # a file system that has no room
