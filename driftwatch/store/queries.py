"""Looking into a database without being able to change it."""

from __future__ import annotations

from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import sqlalchemy as sa

from driftwatch.records import Alert, AlertState, Envelope, Origin, Phase, Run, TimeQuality
from driftwatch.store import paging
from driftwatch.store.errors import StoreError, unreachable
from driftwatch.store.hourly import hourly
from driftwatch.store.latest import Latest, latest_of
from driftwatch.store.location import database_path
from driftwatch.store.opening import reading_engine, refuse_other_schema, revision_of
from driftwatch.store.paging import Wanted
from driftwatch.store.rows import form_of, key_of_header
from driftwatch.store.tables import HEADER, TABLES

__all__ = ["NoSuchRunError", "Reader", "RunSummary", "Wanted"]

if TYPE_CHECKING:
    from collections.abc import Iterator
    from typing import Self

    from sqlalchemy.engine import Connection, Engine


class NoSuchRunError(StoreError):
    """A run that was asked for is not in the database, or several answer to what was given of its name."""


@dataclass(frozen=True, slots=True)
class RunSummary:
    """One run at a glance."""

    run: str
    station: str
    origin: Origin
    time_quality: TimeQuality
    first_ns: int  # stream time of the first record
    last_ns: int  # and of the last
    end: Run | None  # how it ended; None: still going, or killed
    counts: dict[str, int] = field(default_factory=dict)  # records by kind, of the kinds that there are
    standing: tuple[Alert, ...] = ()  # the last word on every alert that is not normal


class Reader:
    """A view of a database for reading only; a daemon may write to it meanwhile.

    Parameters
    ----------
    engine
        That can only read.
    path
        Of the database, for messages.
    """

    def __init__(self, engine: Engine, path: Path) -> None:
        self.path = path
        self._engine = engine

    @classmethod
    def open(cls, url: str | Path, busy_ms: int | None = None, *, beside_writer: bool = False) -> Reader:
        """Open a database for reading; `url` is a path or ``sqlite:///PATH``, relative to the current folder.

        A lock of somebody else is waited for as long as usual, or `busy_ms` milliseconds. `beside_writer` must be said
        in a process that writes to it, see `reading_engine`.

        Raises
        ------
        StoreError
            When it is missing, foreign, damaged, or of another schema.
        """
        path = database_path(str(url), Path())  # of a full path it is not asked whether the current folder is there
        engine = reading_engine(path, busy_ms, beside_writer=beside_writer)
        try:
            with engine.begin() as connection:
                refuse_other_schema(path, revision_of(connection))
        except sa.exc.DBAPIError as error:
            engine.dispose()
            raise unreachable(path, error) from error
        except StoreError:
            engine.dispose()
            raise
        return cls(engine, path)

    def records(self, kind: str, wanted: Wanted | None = None) -> Iterator[Envelope]:
        """Yield records of one kind as they were written, in the order of stream time.

        What is written meanwhile is left out. It may be read slowly: no transaction is open between two pages.

        Raises
        ------
        StoreError
            When the database cannot be read.
        """
        with self._connected() as connection:
            yield from paging.records(connection, kind, wanted or Wanted())

    def hourly(
        self,
        channel: str,
        mode: str,
        *,
        station: str | None = None,
        since_ns: int | None = None,
        until_ns: int | None = None,
    ) -> Iterator[Envelope]:
        """Yield the first usable track point of a mode in each hour, see `hourly`; fast over years.

        Raises
        ------
        StoreError
            When the database cannot be read.
        """
        with self._connected() as connection:
            yield from hourly(connection, channel, mode, station, (since_ns, until_ns))

    @contextmanager
    def _connected(self) -> Iterator[Connection]:
        """Give a connection on which each part of an answer is a transaction of its own."""
        try:
            with self._engine.connect() as connection:
                yield connection
        except sa.exc.DBAPIError as error:
            raise unreachable(self.path, error) from error

    @contextmanager
    def reading(self) -> Iterator[Connection]:
        """Give a connection in a transaction: all that is read by it comes from one instant.

        Raises
        ------
        StoreError
            When the database cannot be read.
        """
        try:
            with self._engine.begin() as connection:
                yield connection
        except sa.exc.DBAPIError as error:
            raise unreachable(self.path, error) from error

    def find_run(self, start: str) -> str:
        """Return the UUID of the only run whose UUID begins with `start`; ``last`` is the one begun last.

        Raises
        ------
        NoSuchRunError
            When there is none, or several; every match is listed.
        """
        runs = self.runs()
        if start == "last" and runs:
            return runs[-1].run
        found = [run.run for run in runs if run.run.startswith(start)]
        if len(found) == 1:
            return found[0]
        held = ", ".join(found or [run.run for run in runs]) or "none"
        what = f"{len(found)} runs begin with {start!r}" if found else f"no run begins with {start!r}"
        raise NoSuchRunError(f"{self.path}: {what}; expected the begin of one of: {held}")

    def runs(self) -> list[RunSummary]:
        """Return every run, in the order in which they were first written."""
        try:
            with self._engine.begin() as connection:
                return _summaries(connection)
        except sa.exc.DBAPIError as error:
            raise unreachable(self.path, error) from error

    def latest(self, run: str | None = None, after: int | None = None) -> Latest | None:
        """Return how things stand in a run, see `latest_of`; fast however much the database holds.

        Raises
        ------
        StoreError
            When the database cannot be read.
        """
        try:
            with self._engine.begin() as connection:
                return latest_of(connection, run, after)
        except sa.exc.DBAPIError as error:
            raise unreachable(self.path, error) from error

    def close(self) -> None:
        """Close the database."""
        self._engine.dispose()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


def _summaries(connection: Connection) -> list[RunSummary]:
    found: dict[str, list[Any]] = {}
    for row in connection.execute(sa.select(HEADER).order_by(HEADER.c.opened_ns, HEADER.c.id)):
        found.setdefault(row.run, []).append(row)
    counted = _counts(connection)
    return [_summary(rows, counted, _ends(connection, rows), _standing(connection, rows)) for rows in found.values()]


def _counts(connection: Connection) -> list[tuple[str, int, int, int, int]]:
    """Return kind, header, count, first and last stream time of every kind in every header."""
    parts = [
        sa.select(
            sa.literal(kind),
            table.c.header,
            sa.func.count(),
            sa.func.min(table.c.time_ns),
            sa.func.max(table.c.time_ns),
        ).group_by(table.c.header)
        for kind, table in TABLES.items()
    ]
    return [tuple(row) for row in connection.execute(sa.union_all(*parts))]


def _ends(connection: Connection, headers: list[Any]) -> list[Run]:
    return [run for run in _bodies(connection, "run", headers) if isinstance(run, Run) and run.phase is Phase.END]


def _standing(connection: Connection, headers: list[Any]) -> tuple[Alert, ...]:
    """Return the last word on each alert of a run that is not normal."""
    latest: dict[str, Alert] = {}
    for alert in _bodies(connection, "alert", headers):
        if isinstance(alert, Alert):
            latest[alert.alert] = alert
    return tuple(alert for alert in latest.values() if alert.state is not AlertState.NORMAL)


def _bodies(connection: Connection, kind: str, headers: list[Any]) -> Iterator[Any]:
    table = TABLES[kind]
    chosen = sa.select(table).where(table.c.header.in_([row.id for row in headers])).order_by(table.c.sequence)
    keys = {row.id: key_of_header(row) for row in headers}
    for row in connection.execute(chosen):
        yield form_of(kind).envelope(keys[row.header], row).body


def _summary(
    headers: list[Any], counted: list[tuple[str, int, int, int, int]], ends: list[Run], standing: tuple[Alert, ...]
) -> RunSummary:
    ids = {row.id for row in headers}
    mine = [row for row in counted if row[1] in ids]
    counts: dict[str, int] = {}
    for kind, _, count, _, _ in mine:
        counts[kind] = counts.get(kind, 0) + count
    run, station, origin, _ = key_of_header(headers[0])
    quality = key_of_header(headers[-1])[3]  # the latest known
    first = min((row[3] for row in mine), default=headers[0].opened_ns)
    last = max((row[4] for row in mine), default=headers[0].opened_ns)
    return RunSummary(run, station, origin, quality, first, last, ends[-1] if ends else None, counts, standing)
