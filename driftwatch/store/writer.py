"""The one writer: whole groups of records, each group one transaction."""

from __future__ import annotations

import sqlite3
import time
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

import sqlalchemy as sa
from sqlalchemy.dialects import sqlite

from driftwatch.records import KIND_OF, Alert
from driftwatch.store.errors import StoreError, commit_failed, file_gone, unreachable
from driftwatch.store.location import database_path
from driftwatch.store.lock import WriterLock
from driftwatch.store.opening import file_at, migrate, refuse_foreign, refuse_read_only, writing_engine
from driftwatch.store.rows import HeaderKey, form_of, header_key
from driftwatch.store.tables import HEADER, TABLES

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence
    from contextlib import AbstractContextManager
    from typing import Self

    from sqlalchemy.engine import Connection

    from driftwatch.records import Envelope


CACHE_KB = 512
"""Pages kept in memory, kilobytes: rows are only appended, and memory that fills over hours looks like a leak."""


@cache
def _insert(kind: str) -> str:
    """Return the text of a kind's insert, prepared: rows go to the driver as they are."""
    return str(sa.insert(TABLES[kind]).compile(dialect=sqlite.dialect()))


class Writer:
    """The only one who writes to a database.

    Parameters
    ----------
    connection
        To a database of revision `HEAD`, in write-ahead logging.
    path
        Of the database, for messages.
    lock
        The right to write; released by `close`.
    clock
        Returns UTC in nanoseconds; dates the first row of each run, for retention.

    Not for use by two threads at once.
    """

    def __init__(self, connection: Connection, path: Path, lock: WriterLock, clock: Callable[[], int]) -> None:
        self.path = path
        self._connection = connection
        self._lock = lock
        self._clock = clock
        self._headers: dict[HeaderKey, int] = {}
        self._file = file_at(path)

    @classmethod
    def open(
        cls,
        url: str | Path,
        station: str,
        clock: Callable[[], int] = time.time_ns,
        lock: WriterLock | None = None,
    ) -> Writer:
        """Open a database for writing; create it or bring it up to date where needed.

        Parameters
        ----------
        url
            A path or ``sqlite:///PATH``; relative to the current folder.
        station
            Who writes, told to whoever finds the database taken.
        clock
            Returns UTC in nanoseconds.
        lock
            The right to write to it, where the caller has it already; it then stays the caller's if this fails.

        Raises
        ------
        StoreError
            When the file is foreign, newer, taken by another writer, or cannot be written; it is then unchanged.
        """
        path = database_path(str(url), Path.cwd())
        refuse_foreign(path)
        refuse_read_only(path)
        taken = lock or WriterLock(path, station)
        try:
            return cls(_prepared(path), path, taken, clock)
        except BaseException:
            if lock is None:
                taken.release()
            raise

    def write(self, envelopes: Sequence[Envelope]) -> None:
        """Store a group in one transaction: all of it is committed on return, or none.

        A group with an alert in it also waits until the disk has it (survives a power cut).

        Raises
        ------
        CommitError
            When it could not be stored. The writer stays usable.
        """
        if not envelopes:
            return
        headers = dict(self._headers)
        with self.transaction(
            synchronous=any(isinstance(envelope.body, Alert) for envelope in envelopes)
        ) as connection:
            for kind, rows in self._rows(connection, envelopes, headers).items():
                connection.exec_driver_sql(_insert(kind), rows)
        self._headers = headers

    def _rows(
        self, connection: Connection, envelopes: Sequence[Envelope], headers: dict[HeaderKey, int]
    ) -> dict[str, list[tuple[Any, ...]]]:
        rows: dict[str, list[tuple[Any, ...]]] = {}
        for envelope in envelopes:
            key = header_key(envelope)
            header = headers.get(key)
            if header is None:
                header = headers[key] = self._header(connection, key)
            kind = KIND_OF[type(envelope.body)]
            rows.setdefault(kind, []).append(form_of(kind).row(header, envelope))
        return rows

    def _header(self, connection: Connection, key: HeaderKey) -> int:
        names = ("run", "station", "origin", "time_quality")
        values = dict(zip(names, map(str, key), strict=True))
        known = connection.scalar(sa.select(HEADER.c.id).filter_by(**values))
        if known is not None:
            return int(known)
        adding = sa.insert(HEADER).values(opened_ns=self._clock(), **values).returning(HEADER.c.id)
        return int(connection.execute(adding).scalar_one())

    def transaction(self, *, synchronous: bool = False) -> AbstractContextManager[Connection]:
        """Return a context in which everything is committed together, or nothing.

        With `synchronous` its end also waits until the disk has it.

        Raises
        ------
        CommitError
            At its begin, when the file is no longer where it was opened: what is written to a deleted file is lost.
            At its end or inside, when the database refuses.
        """
        if file_at(self.path) != self._file:
            raise file_gone(self.path)
        return _Transaction(self._connection, self.path, synchronous)

    def forget_headers(self) -> None:
        """Look up again what the records of a run share: rows of ``header`` went."""
        self._headers = {}

    def close(self) -> None:
        """Fold the write-ahead log into the database and let the next writer in."""
        try:
            self._connection.close()
            self._connection.engine.dispose()
        finally:
            self._lock.release()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


class _Transaction:
    """One transaction of the writer, with the errors of the library translated at its edge."""

    def __init__(self, connection: Connection, path: Path, synchronous: bool) -> None:
        self._connection = connection
        self._path = path
        self._synchronous = synchronous

    def __enter__(self) -> Connection:
        try:
            self._say("FULL" if self._synchronous else "NORMAL")
            self._begun = self._connection.begin()
        except (sa.exc.DBAPIError, sqlite3.Error) as error:
            raise commit_failed(self._path, error) from error
        return self._connection

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, _: object) -> None:
        if error is None:
            try:
                self._begun.commit()
            except sa.exc.DBAPIError as failure:
                self._begun.rollback()
                raise commit_failed(self._path, failure) from failure
            return
        self._begun.rollback()
        if isinstance(error, sa.exc.DBAPIError):
            raise commit_failed(self._path, error) from error

    def _say(self, level: str) -> None:
        # It has no effect inside a transaction, so it is said before one, past the library that would begin one.
        self._connection.connection.cursor().execute(f"PRAGMA synchronous = {level}")


def _prepared(path: Path) -> Connection:
    engine = writing_engine(path)
    try:
        connection = engine.connect()
        with connection.begin():
            migrate(connection, path)
        connection.connection.cursor().execute("PRAGMA journal_mode = WAL")
        connection.connection.cursor().execute(f"PRAGMA cache_size = -{CACHE_KB}")
    except (sa.exc.DBAPIError, sqlite3.Error) as error:
        engine.dispose()
        raise unreachable(path, error) from error
    except StoreError:
        engine.dispose()
        raise
    return connection
