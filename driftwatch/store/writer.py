"""The one writer: whole groups of records, each group one transaction."""

from __future__ import annotations

import sqlite3
import time
from contextlib import suppress
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

import sqlalchemy as sa
from sqlalchemy.dialects import sqlite

from driftwatch.records import KIND_OF, Alert
from driftwatch.store.ahead import AheadLog, log_of
from driftwatch.store.aside import (
    Predecessor,
    damage_in,
    name_predecessor,
    open_at,
    set_aside,
    take_log_along,
)
from driftwatch.store.errors import CommitError, StoreError, commit_failed, file_gone, unreachable
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

LIVE_BUSY_MS = 100
"""How long a live run waits for a lock, milliseconds: meanwhile it answers nobody, and it tries again anyway."""


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
        self._lock = lock
        self._clock = clock
        self._busy_ms: int | None = None
        self._unnamed: list[Predecessor] = []  # what was set aside, until the database names it
        self._use(connection)

    def _use(self, connection: Connection) -> None:
        try:
            self._file, self._log = file_at(self.path), file_at(log_of(self.path))
        except CommitError:
            connection.close()
            connection.engine.dispose()
            raise
        self._connection = connection
        self._headers: dict[HeaderKey, int] = {}
        self._is_open = True
        self._ahead = AheadLog(self.path, self._say)

    def _say(self, statement: str) -> tuple[int, ...]:
        """Execute a statement past the library that would begin a transaction, and return its first row."""
        row = self._connection.connection.cursor().execute(statement).fetchone()
        return tuple(row or ())

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
            When the file is foreign, newer, damaged, taken by another writer, or cannot be written; it is then
            unchanged.
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

    @classmethod
    def open_live(cls, path: Path, lock: WriterLock, clock: Callable[[], int] = time.time_ns) -> Writer:
        """Open a database for a live run: one that is damaged is set aside and another begun, which names it.

        Raises
        ------
        StoreError
            As `open`, but for damage.
        """
        refuse_foreign(path)
        refuse_read_only(path)
        gone = _aside(path, damage, clock()) if (damage := damage_in(path)) is not None else None
        writer = cls(_prepared(path), path, lock, clock)
        writer._wait_at_most(LIVE_BUSY_MS)
        if gone is not None:
            writer._unnamed.append(gone)
        return writer

    def _wait_at_most(self, milliseconds: int) -> None:
        self._busy_ms = milliseconds
        self._say(f"PRAGMA busy_timeout = {milliseconds}")

    @property
    def set_aside(self) -> tuple[Predecessor, ...]:
        """What was set aside and is named with the next group."""
        return tuple(self._unnamed)

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
            for predecessor in self._unnamed:
                name_predecessor(connection, predecessor)
            for kind, rows in self._rows(connection, envelopes, headers).items():
                connection.exec_driver_sql(_insert(kind), rows)
        self._headers = headers
        self._unnamed = []
        with suppress(CommitError):  # the group is stored: where that cannot be told now, the next one tells it
            self._log = self._log or file_at(log_of(self.path))

    @property
    def pinned_bytes(self) -> int:
        """Size of the write-ahead log while a reader keeps it from being emptied although it is large; else 0."""
        return self._ahead.pinned_bytes

    @property
    def is_at_its_place(self) -> bool:
        """Whether the file is where it was opened; raises CommitError where that cannot be told."""
        return self._file is not None and file_at(self.path) == self._file

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
            At its begin, when the file is no longer where it was opened, for what is written to a deleted file is
            lost, or when that cannot be told.
            At its end or inside, when the database refuses.
        """
        if not (self._is_open and self.is_at_its_place):
            raise file_gone(self.path)
        return _Transaction(self._connection, self.path, synchronous, self._ahead.committed)

    def forget_headers(self) -> None:
        """Look up again what the records of a run share: rows of ``header`` went."""
        self._headers = {}

    # ------------------------------------------------------------------------------------------ begin anew

    def begin_after_damage(self, damage: str) -> Predecessor:
        """Set the damaged database aside, begin another in its place that names it, and go on in that.

        Parameters
        ----------
        damage
            What the library said.

        Raises
        ------
        StoreError
            When that failed; `begin_after_loss` may try again.
        """
        gone = _aside(self.path, damage, self._clock())
        self._unnamed.append(gone)
        self._let_go()
        self._use_anew()
        return gone

    def begin_after_loss(self) -> Predecessor | None:
        """Go on in another database where this one was taken away from its place; return what is known of that.

        What lies there now is gone on in where it is a database of ours; a foreign file is left as it is. Where the
        old one was put back, it is gone on in, and None is returned.

        Raises
        ------
        StoreError
            When no other can be begun; it may be tried again.
        """
        if self._is_open and self.is_at_its_place:
            return None  # and was not looked at: to close it once more would drop our locks, see `reading_engine`
        refuse_foreign(self.path)
        refuse_read_only(self.path)
        if self._is_open:
            self._unnamed.append(self._left_behind(self._clock()))
            self._let_go()
        elif (damage := damage_in(self.path)) is not None:
            self._unnamed.append(_aside(self.path, damage, self._clock()))
        self._use_anew()
        return self._unnamed[-1] if self._unnamed else None

    def _left_behind(self, now_ns: int) -> Predecessor:
        """Fold what is left of the log into the file that is gone, as far as it still is, and say where that lies."""
        moved = open_at(self._file) if self._file is not None else None
        try:
            if moved is not None:
                with suppress(sqlite3.DatabaseError, sa.exc.DBAPIError):  # the log is then put beside it
                    self._say("PRAGMA wal_checkpoint(TRUNCATE)")
            take_log_along(self.path, self._log, moved, now_ns)
        except OSError as error:
            raise unreachable(self.path, error) from None
        if moved is None:
            return Predecessor(str(self.path), "deleted while it was written to; what it held is lost", now_ns)
        return Predecessor(str(moved), "moved, or replaced, while it was written to", now_ns)

    def _let_go(self) -> None:
        self._is_open, self._file = False, None  # the number of a file that nobody has open is given to another
        with suppress(sqlite3.DatabaseError, sa.exc.DBAPIError):  # it is gone, or damaged: nothing is expected of it
            self._connection.close()
            self._connection.engine.dispose()

    def _use_anew(self) -> None:
        self._lock.renew()
        self._use(_prepared(self.path, self._busy_ms))

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


_OF_THE_LIBRARY = (sa.exc.StatementError, sqlite3.Error, UnicodeEncodeError, OverflowError)
"""What the library raises inside a transaction; the last two where a value is none that a row can hold."""


class _Transaction:
    """One transaction of the writer, with the errors of the library translated at its edge."""

    def __init__(self, connection: Connection, path: Path, synchronous: bool, committed: Callable[[int], None]) -> None:
        self._connection = connection
        self._path = path
        self._synchronous = synchronous
        self._committed = committed  # is told how many rows were changed

    def __enter__(self) -> Connection:
        self._before = self._changes()
        try:
            if self._driver.in_transaction:  # the one before could not be rolled back
                self._driver.rollback()
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
                self._roll_back()
                raise commit_failed(self._path, failure) from failure
            self._committed(self._changes() - self._before)
            return
        failed = self._roll_back()
        if isinstance(error, _OF_THE_LIBRARY):
            raise commit_failed(self._path, error) from error
        if failed is not None and isinstance(error, Exception):
            raise commit_failed(self._path, failed) from error

    def _roll_back(self) -> Exception | None:
        """Take back what was begun; return why that failed: it is then done before the next one begins."""
        try:
            self._begun.rollback()
        except (sa.exc.DBAPIError, sqlite3.Error) as failure:
            return failure
        return None

    @property
    def _driver(self) -> Any:
        return self._connection.connection.driver_connection

    def _changes(self) -> int:
        return int(self._driver.total_changes)

    def _say(self, level: str) -> None:
        # It has no effect inside a transaction, so it is said before one, past the library that would begin one.
        self._connection.connection.cursor().execute(f"PRAGMA synchronous = {level}")


def _aside(path: Path, damage: str, now_ns: int) -> Predecessor:
    """Set a damaged database aside.

    Raises
    ------
    StoreUnreachableError
        When it cannot be renamed.
    """
    try:
        name = set_aside(path, "damaged", now_ns)
    except OSError as error:
        raise unreachable(path, error) from None
    return Predecessor(str(name), f"damaged: {damage}", now_ns)


def _prepared(path: Path, busy_ms: int | None = None) -> Connection:
    engine = writing_engine(path, busy_ms)
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
