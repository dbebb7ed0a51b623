"""Reading many records a page at a time, each in a transaction of its own.

A transaction that stays open, since whoever reads its rows is slow or stopped, pins the write-ahead log: it grows until
the disk is full. So none outlasts a page. What was written after the begin is left out, as if all came from one
instant; what was pruned meanwhile is missing.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import sqlalchemy as sa

from driftwatch.records import Envelope, Method
from driftwatch.store.rows import HeaderKey, form_of, key_of_header
from driftwatch.store.tables import HEADER, TABLES

if TYPE_CHECKING:
    from collections.abc import Iterator

    from sqlalchemy.engine import Connection

PAGE_ROWS = 2000
"""Rows read in one transaction: some ten milliseconds, and two megabytes."""


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


Key = tuple[int, int, int]
"""Stream time, header and sequence: the place of a row in the order of an answer."""


def records(connection: Connection, kind: str, wanted: Wanted) -> Iterator[Envelope]:
    """Yield records of one kind in the order of stream time; no transaction is open while one is yielded."""
    form = form_of(kind)
    with connection.begin():
        answer = _answer(connection, kind, wanted)
        page = list(connection.execute(answer.page(None)))
    left = wanted.limit if wanted.limit is not None else -1
    while True:
        for row in page:
            if left != 0 and row.sequence <= answer.ends.get(row.header, -1):
                left -= 1
                yield form.envelope(answer.keys[row.header], row)
        if left == 0 or len(page) < PAGE_ROWS:
            return
        with connection.begin():
            page = list(connection.execute(answer.page((page[-1].time_ns, page[-1].header, page[-1].sequence))))


@dataclass(frozen=True, slots=True)
class _Answer:
    """What is asked for, put so that each page is found by an index, in order."""

    table: sa.Table
    conditions: list[sa.ColumnElement[bool]]
    keys: dict[int, HeaderKey]
    ends: dict[int, int]  # by header, the last sequence at the begin
    first: Key | None = None  # where the answer begins; None: at its first row

    def page(self, after: Key | None) -> sa.Select[Any]:
        """Return what selects the rows after one."""
        table = self.table
        place = (table.c.time_ns, table.c.header, table.c.sequence)
        chosen = sa.select(table).where(*self.conditions)
        key = after or self.first
        if key is not None:
            here, there = sa.tuple_(*place), sa.tuple_(*map(sa.literal, key))
            # The row values alone would do; the time by itself is what the index is entered by.
            chosen = chosen.where(table.c.time_ns >= key[0], here >= there if after is None else here > there)
        return chosen.order_by(*place).limit(PAGE_ROWS)


def _answer(connection: Connection, kind: str, wanted: Wanted) -> _Answer:
    table = TABLES[kind]
    keys = {row.id: key_of_header(row) for row in connection.execute(sa.select(HEADER))}
    headers = [number for number, key in keys.items() if wanted.run in (None, key[0])]
    last = sa.select(sa.func.max(table.c.sequence))
    ends = {number: connection.scalar(last.where(table.c.header == number)) for number in headers}
    known = {number: int(end) for number, end in ends.items() if end is not None}
    found = _conditions(connection, table, wanted, headers)
    return _Answer(table, found, keys, known, _latest(connection, table, found, wanted))


def _latest(
    connection: Connection, table: sa.Table, conditions: list[sa.ColumnElement[bool]], wanted: Wanted
) -> Key | None:
    """Return the place of the first of the latest rows; None where all are wanted, or there are no more."""
    if wanted.limit is None or wanted.earliest:
        return None
    place = (table.c.time_ns, table.c.header, table.c.sequence)
    backwards = sa.select(*place).where(*conditions).order_by(*(column.desc() for column in place))
    row = connection.execute(backwards.offset(wanted.limit - 1).limit(1)).first()
    return None if row is None else (row[0], row[1], row[2])


def _conditions(
    connection: Connection, table: sa.Table, wanted: Wanted, headers: list[int]
) -> list[sa.ColumnElement[bool]]:
    found: list[sa.ColumnElement[bool]] = []
    if wanted.run is not None:
        found += _of_run(connection, table, wanted, headers)
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


def _of_run(
    connection: Connection, table: sa.Table, wanted: Wanted, headers: list[int]
) -> list[sa.ColumnElement[bool]]:
    if len(headers) == 1 and wanted.channel is not None and wanted.mode is not None:
        return [table.c.header == headers[0]]  # one index has them in order
    # The index by time is to be taken: any other has to sort the whole run for each page. The sum keeps the planner
    # from the others, and the run's own span keeps other runs out.
    span = sa.select(sa.func.min(table.c.time_ns), sa.func.max(table.c.time_ns)).where(table.c.header.in_(headers))
    first, last = connection.execute(span).one()
    found: list[sa.ColumnElement[bool]] = [(table.c.header + 0).in_(headers)]
    return found if first is None else [*found, table.c.time_ns >= first, table.c.time_ns <= last]
