"""One track point an hour, over any span: each is sought in an index, so that the rows between cost nothing."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import sqlalchemy as sa

from driftwatch.records import NS, Envelope, TrackStatus
from driftwatch.store.rows import HeaderKey, form_of, key_of_header
from driftwatch.store.tables import HEADER

if TYPE_CHECKING:
    from collections.abc import Iterator

    from sqlalchemy.engine import Connection

HOUR_NS = 3600 * NS

PAGE_HOURS = 500
"""Hours read in one transaction."""

LOOKED = 50
"""Points looked at from each of these instants on, every `STRIDE_NS`: a mode that was lost for a year costs no more."""

STRIDE_NS = 300 * NS

_OF_MODE = "FROM track WHERE header = ? AND channel = ? AND mode = ? AND time_ns >= ? AND time_ns < ? ORDER BY time_ns"
USABLE = (
    f"SELECT * FROM (SELECT * {_OF_MODE} LIMIT {LOOKED}) "  # noqa: S608 - nothing but constants
    f"WHERE status = '{TrackStatus.TRACKING}' AND frequency_hz IS NOT NULL LIMIT 1"
)
"""Selects the first usable of the points looked at."""

NEXT = f"SELECT time_ns {_OF_MODE} LIMIT 1"
"""Selects the time of the next point of any status."""

_LATEST = NEXT.replace("ORDER BY time_ns", "ORDER BY time_ns DESC")

_LAST_NS = 2**63 - 1


def hourly(
    connection: Connection, channel: str, mode: str, station: str | None, span: tuple[int | None, int | None]
) -> Iterator[Envelope]:
    """Yield the first usable track point of a mode in each hour of UTC, over all runs.

    Parameters
    ----------
    connection
        Without a transaction; none is open while a point is yielded.
    channel, mode
        What is asked for.
    station
        Whose runs; None: those of all.
    span
        Stream time, the first included, the last not; None: open.

    An hour whose first usable point comes after `LOOKED` unusable ones may begin with a later one: it is sought again
    every `STRIDE_NS`. Hours without a usable point are left out.
    """
    since_ns, until_ns = span[0] if span[0] is not None else -_LAST_NS, span[1] if span[1] is not None else _LAST_NS
    with connection.begin():
        rows = connection.execute(sa.select(HEADER)).all()
    keys = {row.id: key_of_header(row) for row in rows if station in (None, row.station)}
    with connection.begin():
        sought = _Mode(connection, keys, (channel, mode), (since_ns, until_ns))
    at: int | None = since_ns
    while at is not None and at < until_ns:
        with connection.begin():
            points, at = _page(sought, at, until_ns)
        yield from points


class _Mode:
    """Where the points of a mode are sought."""

    def __init__(
        self, connection: Connection, keys: dict[int, HeaderKey], about: tuple[str, str], span: tuple[int, int]
    ) -> None:
        self._say = connection.exec_driver_sql
        self._keys = keys
        self._about = about
        self._spans: dict[int, tuple[int, int]] = {}  # by header, first and last time: most runs are over by far
        for key in keys:
            first, last = (self._say(words, (key, *about, *span)).scalar() for words in (NEXT, _LATEST))
            if first is not None and last is not None:
                self._spans[key] = (first, last)

    def _within(self, since_ns: int, until_ns: int) -> Iterator[int]:
        """Yield the headers that may have points there."""
        return (key for key, (first, last) in self._spans.items() if first < until_ns and last >= since_ns)

    def next_ns(self, since_ns: int, until_ns: int) -> int | None:
        """Return the time of the next point of any run."""
        found: list[int] = []
        for key, (first, last) in self._spans.items():
            if first >= since_ns:
                found.append(first)
            elif last >= since_ns:
                found.append(self._say(NEXT, (key, *self._about, since_ns, until_ns)).scalar() or last)
        nearest = min(found, default=until_ns)
        return nearest if nearest < until_ns else None

    def usable(self, since_ns: int, until_ns: int) -> Envelope | None:
        """Return the first usable point of any run, from some of those within a stride on."""
        found: list[tuple[int, Any]] = []
        for key in self._within(since_ns, until_ns):
            row = self._say(USABLE, (key, *self._about, since_ns, until_ns)).first()
            if row is not None:
                found.append((row.time_ns, row))
        if not found:
            return None
        row = min(found, key=lambda one: one[0])[1]
        return form_of("track").envelope(self._keys[row.header], row)


def _page(mode: _Mode, since_ns: int, until_ns: int) -> tuple[list[Envelope], int | None]:
    """Return the points of some hours, and where to go on; None: there is no more."""
    points: list[Envelope] = []
    at = since_ns
    for _ in range(PAGE_HOURS):
        found = mode.next_ns(at, until_ns)
        if found is None:
            return points, None
        at = min((found // HOUR_NS + 1) * HOUR_NS, until_ns)
        point = _of_hour(mode, found, at)
        if point is not None:
            points.append(point)
    return points, at


def _of_hour(mode: _Mode, since_ns: int, end_ns: int) -> Envelope | None:
    at: int | None = since_ns
    while at is not None and at < end_ns:
        point = mode.usable(at, end_ns)
        if point is not None:
            return point
        at = mode.next_ns((at // STRIDE_NS + 1) * STRIDE_NS, end_ns)
    return None
