"""What was stored after a record: the store as one sequence, page by page.

The store's order is that of the runs as they were first written, and of the numbers within each. Rows lie by header
and sequence, so that each table is entered at the place and read onwards, and the tables are merged as they are read:
a page costs what it holds, however much was stored before or comes after it.
"""

from __future__ import annotations

import heapq
from dataclasses import dataclass
from operator import attrgetter
from typing import TYPE_CHECKING, Any

import sqlalchemy as sa

from driftwatch.records import KINDS, Envelope
from driftwatch.store.rows import HeaderKey, form_of, key_of_header
from driftwatch.store.tables import HEADER, TABLES

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from sqlalchemy.engine import Connection

    from driftwatch.store.queries import Reader

MOST_BYTES = 1_000_000
"""Most of a page as JSON, about; a page holds one record at least."""

MOST_RUNS = 50
"""Runs that one page may reach into, so that it is not held up by thousands of short ones."""

_CHUNK = 100
"""Rows fetched at once from each table."""

_FIELD_BYTES = 28
"""Of a field as JSON, with its name, about; texts come on top."""


@dataclass(frozen=True, slots=True)
class Page:
    """Consecutive records of a store."""

    records: tuple[Envelope, ...]
    more: bool  # whether others follow
    known: bool  # False: the store holds nothing of the run that was asked for, so this begins at the oldest record


def page(reader: Reader, run: str | None, sequence: int, most: int) -> Page:
    """Return what was stored after a record, in the store's order.

    Parameters
    ----------
    reader
        The database.
    run
        UUID of the run of that record; None: from the oldest record on.
    sequence
        Its number in the run.
    most
        So many records at most, and about `MOST_BYTES`; at least one, if there is one.

    Raises
    ------
    StoreError
        When the database cannot be read.
    """
    with reader.reading() as connection:
        runs = _runs(connection)
        known = run is None or run in runs
        names = list(runs)
        if run is not None and known:
            names = names[names.index(run) :]
        after = sequence if run is not None and known else 0
        records, more = _filled(connection, [runs[name] for name in names], after, most)
    return Page(tuple(records), more, known)


def _runs(connection: Connection) -> dict[str, dict[int, HeaderKey]]:
    """Return the headers of each run, runs in the order in which they were first written."""
    found: dict[str, dict[int, HeaderKey]] = {}
    for row in connection.execute(sa.select(HEADER).order_by(HEADER.c.id)):
        found.setdefault(row.run, {})[row.id] = key_of_header(row)
    return found


def _filled(
    connection: Connection, runs: Sequence[dict[int, HeaderKey]], after: int, most: int
) -> tuple[list[Envelope], bool]:
    records: list[Envelope] = []
    size = 0
    for place, headers in enumerate(runs):
        if records and place >= MOST_RUNS:
            return records, True
        for envelope in _in_order(connection, headers, after if place == 0 else 0):
            size += _size(envelope)
            if records and (len(records) >= most or size > MOST_BYTES):
                return records, True
            records.append(envelope)
    return records, False


def _in_order(connection: Connection, headers: dict[int, HeaderKey], after: int) -> Iterator[Envelope]:
    """Yield the records of a run after one of them; its tables are read as far as they are asked for."""
    parts = [_of_table(connection, kind, header, key, after) for header, key in headers.items() for kind in KINDS]
    return heapq.merge(*parts, key=attrgetter("sequence"))


def _of_table(connection: Connection, kind: str, header: int, key: HeaderKey, after: int) -> Iterator[Envelope]:
    form = form_of(kind)
    with connection.execute(selected(kind, header, after), execution_options={"yield_per": _CHUNK}) as rows:
        for row in rows:
            yield form.envelope(key, row)


def selected(kind: str, header: int, after: int) -> sa.Select[Any]:
    """Return what selects the rows of a kind that follow a record of the same header."""
    table = TABLES[kind]
    return sa.select(table).where(table.c.header == header, table.c.sequence > after).order_by(table.c.sequence)


def _size(envelope: Envelope) -> int:
    """Return about how long a record is as JSON, bytes."""
    values = [getattr(envelope.body, name) for name in envelope.body.__slots__]
    texts = sum(len(str(value)) for value in values if isinstance(value, (str, tuple)))
    return 250 + _FIELD_BYTES * len(values) + texts
