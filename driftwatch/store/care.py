"""Looking after a database as a file: what it is, and a copy of it; a daemon may write meanwhile."""

from __future__ import annotations

import os
import sqlite3
from contextlib import closing, contextmanager, suppress
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from driftwatch.records import KINDS
from driftwatch.store.ahead import log_of, size_of
from driftwatch.store.aside import Predecessor
from driftwatch.store.errors import StoreError, StoreUnreachableError, unreachable
from driftwatch.store.lock import holder_of
from driftwatch.store.opening import connect, is_there, reading_mode, refuse_absent, refuse_foreign
from driftwatch.store.tables import VERSION_TABLE

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator
    from pathlib import Path

COPIED_PAGES = 1000
"""Pages copied between two calls of a backup's progress: four megabytes."""


@dataclass(frozen=True, slots=True)
class StoreInfo:
    """A database as a file."""

    path: Path
    bytes: int
    log_bytes: int  # of the write-ahead log beside it
    free_bytes: int  # inside the file, for rows to come
    schema: str | None  # revision; None: it has no tables
    sqlite: str  # version of the library that looks at it
    writer: str | None  # who writes; None: nobody
    runs: int
    counts: dict[str, int]  # records by kind, of the kinds that there are
    oldest_ns: int | None  # stream time of the first record
    newest_ns: int | None
    predecessors: tuple[Predecessor, ...] = field(default=())  # what stood in its place before, oldest first


def refuse_missing(path: Path) -> None:
    """Raise unless there is a database of ours, of whatever schema.

    Raises
    ------
    StoreUnreachableError, ForeignDatabaseError
        When there is none, or another program's.
    """
    refuse_absent(path)
    refuse_foreign(path)


@contextmanager
def opened(path: Path) -> Iterator[sqlite3.Connection]:
    """Open a database of any schema for reading; each statement is a transaction of its own.

    Raises
    ------
    StoreError
        When it is missing or foreign, or cannot be read.
    """
    refuse_missing(path)
    try:
        with closing(connect(path, reading_mode(path))) as connection:
            yield connection
    except sqlite3.Error as error:
        raise unreachable(path, error) from error


def tables_of(connection: sqlite3.Connection) -> set[str]:
    """Return the names of the tables."""
    return {row[0] for row in connection.execute("SELECT name FROM sqlite_master WHERE type = 'table'")}


def info(path: Path) -> StoreInfo:
    """Return what a database is, of whatever schema.

    Raises
    ------
    StoreError
        When it cannot be read.
    """
    with opened(path) as connection:
        tables = tables_of(connection)
        free, page = (connection.execute(f"PRAGMA {name}").fetchone()[0] for name in ("freelist_count", "page_size"))
        schema = None
        if VERSION_TABLE in tables:
            schema = str(connection.execute(f"SELECT version_num FROM {VERSION_TABLE}").fetchone()[0])  # noqa: S608
        told = {kind: _count(connection, kind) for kind in KINDS if kind in tables}
        runs = connection.execute("SELECT count(DISTINCT run) FROM header").fetchone()[0] if "header" in tables else 0
        before: list[Predecessor] = []
        if "predecessor" in tables:
            rows = connection.execute("SELECT path, reason, at_ns FROM predecessor ORDER BY id")
            before = [Predecessor(*row) for row in rows]
    return StoreInfo(
        path=path,
        bytes=size_of(path),
        log_bytes=size_of(log_of(path)),
        free_bytes=free * page,
        schema=schema,
        sqlite=sqlite3.sqlite_version,
        writer=holder_of(path),
        runs=runs,
        counts={kind: count for kind, (count, _, _) in told.items() if count},
        oldest_ns=min((first for _, first, _ in told.values() if first is not None), default=None),
        newest_ns=max((last for _, _, last in told.values() if last is not None), default=None),
        predecessors=tuple(before),
    )


def _count(connection: sqlite3.Connection, kind: str) -> tuple[int, int | None, int | None]:
    # One after the other, so that the ends are found by the index on time.
    count = connection.execute(f"SELECT count(*) FROM {kind}").fetchone()[0]  # noqa: S608 - our own words
    ends = (
        connection.execute(f"SELECT {end}(time_ns) FROM {kind}").fetchone()[0]  # noqa: S608 - our own words
        for end in ("min", "max")
    )
    first, last = ends
    return count, first, last


# ---------------------------------------------------------------------------------------------- a copy


def backup(path: Path, target: Path, progress: Callable[[int, int], None] = lambda _done, _all: None) -> int:
    """Copy a database as it is at one instant, verify the copy, then give it its name; return its size in bytes.

    Whoever writes goes on: the copy holds back no commit, only the folding of the log while it lasts.

    Parameters
    ----------
    path, target
        From and to; there must be nothing at `target`.
    progress
        Called with pages copied, and pages in all.

    Raises
    ------
    StoreError
        When there is something at `target`, or the copy fails or is not whole; nothing is left behind then.
    """
    if is_there(target):
        raise StoreUnreachableError(f"{target} is there already; expected a new name; name another, or move it away")
    part = target.with_name(f"{target.name}.part-{os.getpid()}")
    try:
        with opened(path) as source:
            _copy(source, part, progress)
        _verify(path, part)
        _name(part, target)
    finally:
        with suppress(FileNotFoundError):
            part.unlink()
    return size_of(target)


def _copy(source: sqlite3.Connection, part: Path, progress: Callable[[int, int], None]) -> None:
    # Without a transaction of ours the library would begin again with each commit of the writer, and never end.
    source.execute("BEGIN")
    source.execute("SELECT count(*) FROM sqlite_master").fetchone()
    try:
        with closing(connect(part, "mode=rwc")) as copy:
            source.backup(copy, pages=COPIED_PAGES, progress=lambda _, left, pages: progress(pages - left, pages))
    except sqlite3.Error as error:
        raise unreachable(part, error) from error
    finally:
        source.execute("COMMIT")


def _verify(path: Path, part: Path) -> None:
    try:
        with closing(connect(part, "immutable=1")) as copy:
            found = [str(row[0]) for row in copy.execute("PRAGMA integrity_check(5)")]
    except sqlite3.Error as error:
        raise unreachable(part, error) from error
    if found != ["ok"]:
        raise StoreError(
            f"{path}: the copy is not whole: {'; '.join(found)}; it was thrown away; `driftwatch store check` says more"
        )


def _name(part: Path, target: Path) -> None:
    """Give the copy its name once the disk has it; never over another file."""
    try:
        with part.open("rb+") as file:
            os.fsync(file.fileno())
        os.link(part, target)
    except OSError as error:
        raise unreachable(target, error) from None
