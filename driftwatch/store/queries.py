"""Looking into a database without being able to change it."""

from __future__ import annotations

from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import sqlalchemy as sa

from driftwatch.records import Alert, AlertState, Envelope, Method, Origin, Phase, Run, TimeQuality
from driftwatch.store.errors import StoreError, unreachable
from driftwatch.store.latest import Latest, latest_of
from driftwatch.store.location import database_path
from driftwatch.store.opening import reading_engine, refuse_other_schema, revision_of
from driftwatch.store.rows import HeaderKey, form_of
from driftwatch.store.tables import HEADER, TABLES

if TYPE_CHECKING:
    from collections.abc import Iterator
    from typing import Self

    from sqlalchemy.engine import Connection, Engine

_CHUNK = 1000
"""Rows fetched at once, so that memory does not grow with the answer."""


class NoSuchRunError(StoreError):
    """A run that was asked for is not in the database, or several answer to what was given of its name."""


@dataclass(frozen=True, slots=True)
class Wanted:
    """Which records of a kind are asked for; what is None or empty does not narrow."""

    run: str | None = None  # UUID of the run
    channel: str | None = None
    mode: str | None = None
    method: Method | None = None  # of measurements
    since_ns: int | None = None  # stream time, included
    until_ns: int | None = None  # stream time, not included
    limit: int | None = None  # the latest so many, or the earliest with `earliest`
    earliest: bool = False  # take the limit from the begin


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
    def open(cls, url: str | Path) -> Reader:
        """Open a database for reading; `url` is a path or ``sqlite:///PATH``, relative to the current folder.

        Raises
        ------
        StoreError
            When it is missing, foreign, damaged, or of another schema.
        """
        path = database_path(str(url), Path.cwd())
        engine = reading_engine(path)
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

        Every one comes from the same instant of the database, whatever is written meanwhile.

        Raises
        ------
        StoreError
            When the database cannot be read.
        """
        form = form_of(kind)
        try:
            with self._engine.begin() as connection:
                keys = {row.id: _key(row) for row in connection.execute(sa.select(HEADER))}
                selected = _selected(kind, wanted or Wanted(), keys)
                rows = connection.execution_options(yield_per=_CHUNK).execute(selected)
                for row in rows:
                    yield form.envelope(keys[row[0]], row)
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
    keys = {row.id: _key(row) for row in headers}
    for row in connection.execute(chosen):
        yield form_of(kind).envelope(keys[row.header], row).body


def _key(row: Any) -> HeaderKey:
    return (row.run, row.station, Origin(row.origin), TimeQuality(row.time_quality))


def _summary(
    headers: list[Any], counted: list[tuple[str, int, int, int, int]], ends: list[Run], standing: tuple[Alert, ...]
) -> RunSummary:
    ids = {row.id for row in headers}
    mine = [row for row in counted if row[1] in ids]
    counts: dict[str, int] = {}
    for kind, _, count, _, _ in mine:
        counts[kind] = counts.get(kind, 0) + count
    run, station, origin, _ = _key(headers[0])
    quality = _key(headers[-1])[3]  # the latest known
    first = min((row[3] for row in mine), default=headers[0].opened_ns)
    last = max((row[4] for row in mine), default=headers[0].opened_ns)
    return RunSummary(run, station, origin, quality, first, last, ends[-1] if ends else None, counts, standing)


def _selected(kind: str, wanted: Wanted, keys: dict[int, HeaderKey]) -> sa.Select[Any]:
    table = TABLES[kind]
    narrow = sa.select(table).where(*_conditions(table, wanted, keys))
    order = (table.c.time_ns, table.c.header, table.c.sequence)
    if wanted.limit is None:
        return narrow.order_by(*order)
    if wanted.earliest:
        return narrow.order_by(*order).limit(wanted.limit)
    latest = narrow.order_by(*(column.desc() for column in order)).limit(wanted.limit).subquery()
    return sa.select(latest).order_by(latest.c.time_ns, latest.c.header, latest.c.sequence)


def _conditions(table: sa.Table, wanted: Wanted, keys: dict[int, HeaderKey]) -> list[sa.ColumnElement[bool]]:
    found: list[sa.ColumnElement[bool]] = []
    if wanted.run is not None:
        # Nearly always one number: as an equality it lets the index give the rows in the order of time.
        headers = [number for number, key in keys.items() if key[0] == wanted.run]
        found.append(table.c.header == headers[0] if len(headers) == 1 else table.c.header.in_(headers))
    found.extend(
        table.c[name] == value
        for name, value in (("channel", wanted.channel), ("mode", wanted.mode), ("method", wanted.method))
        if value is not None
    )
    if wanted.since_ns is not None:
        found.append(table.c.time_ns >= wanted.since_ns)
    if wanted.until_ns is not None:
        found.append(table.c.time_ns < wanted.until_ns)
    return found
