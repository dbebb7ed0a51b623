"""What a database last knows of a run: a few rows found by index, however many there are."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import sqlalchemy as sa

from driftwatch.records import Origin, Phase
from driftwatch.store.rows import HeaderKey, form_of, key_of_header
from driftwatch.store.tables import HEADER, TABLES

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from sqlalchemy.engine import Connection

    from driftwatch.records import Envelope

MOST_NEW = 20_000
"""So many records after the one asked for are read one by one; where there are more, the last words are found anew."""

_TIED = 8
"""Track points looked at for the last one: those of decays are written a little out of the order of time."""

_FOLLOWED = ("track", "alert", "health", "clock", "run")
"""Kinds that say how things stand."""


@dataclass(frozen=True, slots=True)
class Latest:
    """The last words of a run."""

    run: str  # UUID
    station: str
    origin: Origin
    sequence: int  # of its last record of any kind
    time_ns: int  # stream time of its last record
    whole: bool  # False: `records` are only those after the one that was asked for
    records: tuple[Envelope, ...]
    """In order: the last track point of each mode, the last record of each alert and of each incident that has not
    ended, the last of the sample clock, and the run's begin and end; or all records of these kinds after one."""


def latest_of(connection: Connection, run: str | None, after: int | None) -> Latest | None:
    """Return the last words of a run; None where the database holds nothing of it.

    Parameters
    ----------
    connection
        In a transaction, so that everything comes from one instant.
    run
        UUID; None: the run begun last.
    after
        Sequence of a record whose followers are asked for; None: the last word on everything.
    """
    run = connection.scalar(_newest_run()) if run is None else run
    rows = connection.execute(sa.select(HEADER).where(HEADER.c.run == run).order_by(HEADER.c.id)).all()
    keys = {row.id: key_of_header(row) for row in rows}
    ends = connection.execute(_ends(tuple(keys))).all() if keys else []
    if run is None or not ends:
        return None
    last = max(sequence for sequence, _ in ends)
    whole = after is None or last - after > MOST_NEW
    found = list(_last_words(connection, keys) if whole else _after(connection, keys, after or 0))
    found.sort(key=lambda envelope: envelope.sequence)
    _, station, origin, _ = next(iter(keys.values()))
    return Latest(run, station, origin, last, max(time_ns for _, time_ns in ends), whole, tuple(found))


def _newest_run() -> sa.Select[Any]:
    return sa.select(HEADER.c.run).order_by(HEADER.c.opened_ns.desc(), HEADER.c.id.desc()).limit(1)


def _ends(headers: Sequence[int]) -> sa.CompoundSelect[Any]:
    """Return what selects sequence and stream time of the last record of each kind."""
    parts = []
    for header in headers:
        for table in TABLES.values():
            last = sa.select(table.c.sequence, table.c.time_ns).where(table.c.header == header)
            parts.append(sa.select(last.order_by(table.c.sequence.desc()).limit(1).subquery()))
    return sa.union_all(*parts)


def _after(connection: Connection, keys: dict[int, HeaderKey], after: int) -> Iterator[Envelope]:
    for kind in _FOLLOWED:
        table = TABLES[kind]
        for header in keys:
            chosen = sa.select(table).where(table.c.header == header, table.c.sequence > after)
            yield from _envelopes(connection, kind, keys, chosen)


def _last_words(connection: Connection, keys: dict[int, HeaderKey]) -> Iterator[Envelope]:
    track, alert = TABLES["track"], TABLES["alert"]
    for header in keys:
        for channel, mode in _different(connection, header, track.c.channel, track.c.mode):
            of_mode = sa.select(track).where(track.c.header == header, track.c.channel == channel, track.c.mode == mode)
            late = of_mode.order_by(track.c.time_ns.desc(), track.c.sequence.desc()).limit(_TIED)
            yield max(_envelopes(connection, "track", keys, late), key=lambda envelope: envelope.sequence)
        for (name,) in _different(connection, header, alert.c.alert):
            of_alert = sa.select(alert).where(alert.c.header == header, alert.c.alert == name)
            yield from _envelopes(connection, "alert", keys, of_alert.order_by(alert.c.sequence.desc()).limit(1))
        clock, run = TABLES["clock"], TABLES["run"]
        of_clock = sa.select(clock).where(clock.c.header == header)
        yield from _envelopes(connection, "clock", keys, of_clock.order_by(clock.c.sequence.desc()).limit(1))
        yield from _envelopes(connection, "run", keys, sa.select(run).where(run.c.header == header))
    yield from _open_incidents(connection, keys)


def _different(connection: Connection, header: int, *columns: sa.Column[Any]) -> Iterator[tuple[Any, ...]]:
    """Yield the different values that columns have in a header, each one found by one step in their index.

    A plain ``SELECT DISTINCT`` would read the index of the whole run, and so would a comparison of several columns at
    once, of which SQLite takes only the first to the index.
    """
    first = sa.select(*columns).where(columns[0].table.c.header == header).order_by(*columns).limit(1)
    found = connection.execute(first).first()
    while found is not None:
        yield tuple(found)
        values = tuple(found)
        found = None
        for place in reversed(range(len(columns))):
            alike = [column == value for column, value in zip(columns[:place], values, strict=False)]
            if found := connection.execute(first.where(*alike, columns[place] > values[place])).first():
                break


def _open_incidents(connection: Connection, keys: dict[int, HeaderKey]) -> Iterator[Envelope]:
    """Yield the last record of each incident that has not ended; faults are few, so all of the run's are looked at."""
    health = TABLES["health"]
    names = sa.select(health.c.header, health.c.sequence, health.c.incident, health.c.phase)
    last: dict[str, Any] = {}
    for header in keys:  # a later header has later records: the run's time quality has changed
        for row in connection.execute(names.where(health.c.header == header).order_by(health.c.sequence)):
            if row.phase == Phase.END.value:
                last.pop(row.incident, None)
            else:
                last[row.incident] = row
    for row in last.values():
        chosen = sa.select(health).where(health.c.header == row.header, health.c.sequence == row.sequence)
        yield from _envelopes(connection, "health", keys, chosen)


def _envelopes(
    connection: Connection, kind: str, keys: dict[int, HeaderKey], chosen: sa.Select[Any]
) -> Iterator[Envelope]:
    form = form_of(kind)
    for row in connection.execute(chosen):
        yield form.envelope(keys[row[0]], row)
