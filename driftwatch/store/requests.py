"""A command that was stored, found by the id of its request: so that it is not done twice, not even after a restart."""

from __future__ import annotations

from typing import TYPE_CHECKING

import sqlalchemy as sa

from driftwatch.records import CommandDone, fields_of
from driftwatch.store.tables import TABLES

if TYPE_CHECKING:
    from driftwatch.store.queries import Reader


def command_of(reader: Reader, request: str) -> CommandDone | None:
    """Return the record of a command by the id of its request, the first of them; None: there is none.

    Raises
    ------
    StoreError
        When the database cannot be read.
    """
    table = TABLES["command"]
    columns = [table.c[field.name] for field in fields_of(CommandDone)]
    # The index on request finds the few that may be there; they are put in order after that.
    chosen = sa.select(*columns).where(table.c.request == request).order_by(table.c.time_ns, table.c.sequence)
    with reader.reading() as connection:
        row = connection.execute(chosen).first()
    return None if row is None else CommandDone(*row)
