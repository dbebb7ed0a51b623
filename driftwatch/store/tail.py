"""The end of a station's newest run in a database: where records can be added to it without a daemon."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import sqlalchemy as sa

from driftwatch.records import KIND_OF, Alert, Envelope, Origin, TimeQuality
from driftwatch.store.rows import form_of
from driftwatch.store.tables import HEADER, TABLES

if TYPE_CHECKING:
    from sqlalchemy.engine import Connection

    from driftwatch.records import Body

_ABOUT = {"alert": "alert", "covariate": "name", "note": None, "command": None}
"""What the topic of each kind that can be added is made of, beside the kind: a column."""


@dataclass(slots=True)
class Tail:
    """Where the next record of a run goes."""

    connection: Connection
    run: str
    station: str
    origin: Origin
    time_quality: TimeQuality
    headers: tuple[int, ...]
    sequence: int  # of the run's last record

    @classmethod
    def of(cls, connection: Connection, station: str) -> Tail | None:
        """Return the end of the last run in a database; None: that is no live run of the station.

        Only the last one can be added to: whoever reads on from a record sees nothing that is added before it.

        Parameters
        ----------
        connection
            In a transaction.
        station
            Its name.
        """
        row = connection.execute(sa.select(HEADER).order_by(HEADER.c.id.desc()).limit(1)).first()
        if row is None or row.station != station or row.origin == Origin.REPLAY:
            return None
        headers = tuple(connection.scalars(sa.select(HEADER.c.id).where(HEADER.c.run == row.run)))
        parts = [
            sa.select(sa.func.max(table.c.sequence)).where(table.c.header.in_(headers)) for table in TABLES.values()
        ]
        last = max((one for part in parts if (one := connection.scalar(part)) is not None), default=0)
        return cls(connection, row.run, row.station, Origin(row.origin), TimeQuality(row.time_quality), headers, last)

    def add(self, body: Body, time_ns: int) -> Envelope:
        """Return a record as the next one of the run; it must be written before the next one is asked for."""
        self.sequence += 1
        return Envelope(
            self.station,
            self.run,
            self.origin,
            self.sequence,
            self._previous(body),
            time_ns,
            self.time_quality,
            body,
        )

    def _previous(self, body: Body) -> int | None:
        kind = KIND_OF[type(body)]
        table, about = TABLES[kind], _ABOUT[kind]
        last = sa.select(sa.func.max(table.c.sequence)).where(table.c.header.in_(self.headers))
        if about is not None:
            last = last.where(table.c[about] == getattr(body, about))
        found: int | None = self.connection.scalar(last)
        return found

    def alert(self, name: str) -> Alert | None:
        """Return the last record of an alert of the run, found without regard to case; None: there is none."""
        table = TABLES["alert"]
        names = self.connection.scalars(sa.select(table.c.alert).where(table.c.header.in_(self.headers)).distinct())
        spelt = next((one for one in names if one.casefold() == name.casefold()), None)
        if spelt is None:
            return None
        chosen = sa.select(table).where(table.c.header.in_(self.headers), table.c.alert == spelt)
        row = self.connection.execute(chosen.order_by(table.c.sequence.desc()).limit(1)).one()
        key = (self.run, self.station, self.origin, self.time_quality)
        body = form_of("alert").envelope(key, row).body
        return body if isinstance(body, Alert) else None
