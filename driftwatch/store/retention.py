"""Pruning: what is older than a number of days goes, a little at a time, so that no commit waits long.

A row is old when its stream time *and* the begin of its run's writing lie before the cut, so that a replay of an old
recording stays as long as a live run of today. What gives the remaining rows their meaning stays as long as they do:

* baselines, whatever their age;
* the last word on an alert that is not back to normal, and the ``run`` records: until nothing else is left of their
  run.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import sqlalchemy as sa

from driftwatch.records import KINDS, NS, AlertState
from driftwatch.store.tables import HEADER, TABLES

if TYPE_CHECKING:
    from sqlalchemy.engine import Connection

    from driftwatch.store.writer import Writer

STEP_ROWS = 1000
"""Rows that one step takes away at most: about ten milliseconds."""

_DAY_NS = 86_400 * NS
_FIRST_NS = -(2**63)  # what a row can hold
_LONGEST_DAYS = 1e6  # reaches from any time to before `_FIRST_NS`
_FRAME = ("run", "alert")
"""Kinds that go last with their run."""


def prune(writer: Writer, keep_days: float, now_ns: int, rows: int = STEP_ROWS) -> int:
    """Take one step: remove at most `rows` old rows in one transaction.

    Parameters
    ----------
    writer
        The database's writer.
    keep_days
        Age in days from which rows are old, finite; more than some hundred years means for ever.
    now_ns
        The wall clock, UTC.
    rows
        Size of a step.

    Returns
    -------
    int
        How many rows went; 0 when nothing old is left. Repeat until then, with other work in between.

    Raises
    ------
    CommitError
        When the step failed; nothing was removed.
    """
    cut_ns = _cut(keep_days, now_ns)
    with writer.transaction() as connection:
        for kind in KINDS:
            if kind in ("run", "baseline"):
                continue
            if removed := _remove_old(connection, kind, cut_ns, rows):
                return removed
        removed = _remove_frames(connection, cut_ns)
    if removed:
        writer.forget_headers()
    return removed


def count_old(connection: Connection, keep_days: float, now_ns: int) -> int:
    """Return about how many rows pruning would take away: those of the runs' frame are left out."""
    cut_ns = _cut(keep_days, now_ns)
    return sum(
        connection.scalar(sa.select(sa.func.count()).select_from(TABLES[kind]).where(*_is_old(TABLES[kind], cut_ns)))
        or 0
        for kind in KINDS
        if kind not in ("run", "baseline")
    )


def _cut(keep_days: float, now_ns: int) -> int:
    """Return the time before which rows are old, UTC; the first that a row can have where that lies before it."""
    return max(now_ns - round(min(keep_days, _LONGEST_DAYS) * _DAY_NS), _FIRST_NS)


def _is_old(table: sa.Table, cut_ns: int) -> tuple[sa.ColumnElement[bool], ...]:
    old_runs = sa.select(HEADER.c.id).where(HEADER.c.opened_ns < cut_ns)
    # The sum keeps the planner from reading whole runs by their number: the index by time finds the old rows at once.
    return (table.c.time_ns < cut_ns, (table.c.header + 0).in_(old_runs))


def _remove_old(connection: Connection, kind: str, cut_ns: int, rows: int) -> int:
    table = TABLES[kind]
    old = sa.select(table.c.header, table.c.sequence).where(*_is_old(table, cut_ns))
    if kind == "alert":
        old = old.where(~_last_word(table))
    chosen = old.order_by(table.c.time_ns).limit(rows)
    return connection.execute(sa.delete(table).where(_place(table).in_(chosen))).rowcount


def _last_word(table: sa.Table) -> sa.ColumnElement[bool]:
    later = table.alias("later")
    superseded = sa.exists().where(
        later.c.header == table.c.header, later.c.alert == table.c.alert, later.c.sequence > table.c.sequence
    )
    return (table.c.state != AlertState.NORMAL.value) & ~superseded


def _place(table: sa.Table) -> sa.Tuple:
    return sa.tuple_(table.c.header, table.c.sequence)


def _remove_frames(connection: Connection, cut_ns: int) -> int:
    """Remove what is left of runs that have nothing but old ``run`` and ``alert`` records."""
    empty = sa.select(HEADER.c.id).where(HEADER.c.opened_ns < cut_ns)
    for kind, table in TABLES.items():
        rest = sa.exists().where(table.c.header == HEADER.c.id)
        empty = empty.where(~(rest.where(table.c.time_ns >= cut_ns) if kind in _FRAME else rest))
    found = connection.scalars(empty).all()
    removed = 0
    for table in (*(TABLES[kind] for kind in _FRAME), HEADER):
        column = table.c.id if table is HEADER else table.c.header
        removed += connection.execute(sa.delete(table).where(column.in_(found))).rowcount
    return removed
