"""The write-ahead log is folded now and then, kept small, and whoever keeps it from that is told."""

from __future__ import annotations

import sqlite3
from collections.abc import Callable, Iterator
from contextlib import closing
from pathlib import Path

import pytest
from driftwatch.daemon.keeper import Keeper
from driftwatch.records import Envelope, Fault
from driftwatch.store import ahead
from driftwatch.store.ahead import log_of, size_of
from driftwatch.store.lock import WriterLock
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]

BOUND = 400_000


@pytest.fixture(autouse=True)
def _small(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(ahead, "LOG_BYTES", BOUND)
    monkeypatch.setattr(ahead, "KEPT_BYTES", BOUND // 4)
    monkeypatch.setattr(ahead, "FOLD_COMMITS", 10)


@pytest.fixture
def writer(tmp_path: Path) -> Iterator[Writer]:
    path = tmp_path / "a.db"
    with Writer.open_live(path, WriterLock(path, "line 3")) as opened:
        yield opened


def _write(writer: Writer, measurement: Make, groups: range) -> list[int]:
    """Write groups of ten and return the size of the log after each."""
    sizes = []
    for group in groups:
        writer.write([measurement(10 * group + number) for number in range(10)])
        sizes.append(size_of(log_of(writer.path)))
    return sizes


def test_the_log_stays_small_however_much_is_written(writer: Writer, measurement: Make) -> None:
    sizes = _write(writer, measurement, range(200))
    assert max(sizes) < 1.5 * BOUND
    assert writer.pinned_bytes == 0
    assert writer.path.stat().st_size > 2 * max(sizes) / 3  # it is folded while it is written to


def test_a_reader_that_pins_the_log_is_told_as_a_fault_and_the_log_is_emptied_when_it_ends(
    writer: Writer, measurement: Make
) -> None:
    keeper = Keeper(writer, is_patient=True)
    with closing(sqlite3.connect(writer.path, isolation_level=None)) as other:
        other.execute("BEGIN")
        other.execute("SELECT count(*) FROM header").fetchone()
        assert max(_write(writer, measurement, range(100))) > BOUND
        assert writer.pinned_bytes > BOUND
        keeper.flush_due(1.0)
        keeper.flush_due(2.0)
        (news,) = keeper.news()
        assert (news.key, news.fault) == ("log", Fault.STORE)
        assert "another program has been reading from the database for long" in news.words
    _write(writer, measurement, range(100, 120))
    assert (writer.pinned_bytes, size_of(log_of(writer.path)) < BOUND) == (0, True)
    keeper.flush_due(3.0)
    (news,) = keeper.news()
    assert (news.key, news.fault) == ("log", None)


def test_nothing_is_folded_inside_a_commit(writer: Writer, measurement: Make) -> None:
    """The library's own way, after so many pages inside any commit, is off."""
    assert writer._say("PRAGMA wal_autocheckpoint") == (0,)
    before = writer.path.stat().st_size
    writer.write([measurement(sequence) for sequence in range(1, 4000)])
    assert writer.path.stat().st_size == before
