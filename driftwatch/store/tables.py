"""The tables: one for each kind of record, generated from the vocabulary, and one for what a run's records share.

Columns carry the names of the dataclass fields. Times are integer nanoseconds; tuples are JSON text; enumerations
are their words. A figure that is not finite is NULL, therefore every column of a real number may be.
"""

from __future__ import annotations

from enum import StrEnum
from typing import Any

import sqlalchemy as sa

from driftwatch.records import KINDS, FieldInfo, fields_of

APPLICATION_ID = 0x64726674
"""Marks a database as ours in the file's own header (``drft``)."""

HEAD = "0003"
"""Revision of the schema that this program writes."""

VERSION_TABLE = "alembic_version"
"""Where the migrations keep the revision of a database."""

ROW_COLUMNS = ("header", "sequence", "previous", "time_ns")
"""What every row carries before its body."""

METADATA = sa.MetaData()

HEADER = sa.Table(
    "header",
    METADATA,
    sa.Column("id", sa.Integer, primary_key=True),
    sa.Column("run", sa.Text, nullable=False),  # UUID of the run
    sa.Column("station", sa.Text, nullable=False),
    sa.Column("origin", sa.Text, nullable=False),
    sa.Column("time_quality", sa.Text, nullable=False),
    sa.Column("opened_ns", sa.BigInteger, nullable=False),  # the writer's clock when the run's first row came
    sa.UniqueConstraint("run", "station", "origin", "time_quality", name="uq_header"),
)
"""What the records of a run have in common, once, so that rows stay small. A run whose time quality changes has two."""


PREDECESSOR = sa.Table(
    "predecessor",
    METADATA,
    sa.Column("id", sa.Integer, primary_key=True),
    sa.Column("path", sa.Text, nullable=False),  # where it lies now
    sa.Column("reason", sa.Text, nullable=False),  # why it was set aside
    sa.Column("at_ns", sa.BigInteger, nullable=False),  # UTC
)
"""Databases that stood in this one's place before it and were set aside."""


def _type_of(field: FieldInfo) -> sa.types.TypeEngine[Any]:
    if issubclass(field.type, StrEnum) or field.type in (str, tuple):
        return sa.Text()
    if field.type is bool:
        return sa.Boolean()
    return sa.BigInteger() if field.type is int else sa.Double()


def _column(field: FieldInfo) -> sa.Column[Any]:
    return sa.Column(field.name, _type_of(field), nullable=field.optional or field.type is float)


def _indexes(kind: str, names: set[str]) -> list[sa.Index]:
    about = [name for name in ("channel", "mode") if name in names]
    found = [sa.Index(f"ix_{kind}_time", "time_ns")]
    if about:
        found.append(sa.Index(f"ix_{kind}_about", "header", *about, "time_ns"))
    if kind == "alert":  # the last word on each alert
        found.append(sa.Index("ix_alert_alert", "header", "alert", "sequence"))
    if kind == "command":  # the same request again
        found.append(sa.Index("ix_command_request", "request"))
    return found


def _table(kind: str) -> sa.Table:
    body: Any = KINDS[kind]
    fields = fields_of(body)
    return sa.Table(
        kind,
        METADATA,
        sa.Column("header", sa.Integer, sa.ForeignKey("header.id"), primary_key=True),
        sa.Column("sequence", sa.BigInteger, primary_key=True),
        sa.Column("previous", sa.BigInteger),
        sa.Column("time_ns", sa.BigInteger, nullable=False),
        *(_column(field) for field in fields),
        *_indexes(kind, {field.name for field in fields}),
        sqlite_with_rowid=False,  # rows lie in the order of their numbers
    )


TABLES: dict[str, sa.Table] = {kind: _table(kind) for kind in KINDS}
"""The table of each kind of record, by its word on the wire."""
