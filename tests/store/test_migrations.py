"""A database of every earlier schema is brought up to date with its rows in it, and they are read as they were."""

from __future__ import annotations

from collections.abc import Callable
from enum import StrEnum
from pathlib import Path
from typing import Any

import pytest
import sqlalchemy as sa
from alembic import command
from alembic.script import ScriptDirectory
from driftwatch.records import KINDS, Body, Envelope, FieldInfo, fields_of
from driftwatch.store.errors import OtherSchemaError
from driftwatch.store.opening import migration_config
from driftwatch.store.queries import Reader
from driftwatch.store.rows import form_of
from driftwatch.store.tables import APPLICATION_ID, HEAD, TABLES
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]

EARLIER = [
    script.revision
    for script in ScriptDirectory.from_config(migration_config({})).walk_revisions()
    if script.revision != HEAD
]


def _value(field: FieldInfo) -> Any:
    if issubclass(field.type, StrEnum):
        return list(field.type)[-1]
    if field.type is tuple:
        return (field.item(1.0), field.item(2.0)) if field.item is not str else ("one", "two")
    return {str: f"its {field.name}", int: 2**40 + 1, float: 0.1, bool: True}[field.type]


def _body(kind: str, columns: set[str]) -> Body:
    """Return a body that says all that such columns can hold; the rest is not known, and no old note a handover."""
    made: Any = KINDS[kind]
    values = {
        field.name: _value(field) if field.name in columns else (None if field.optional else False)
        for field in fields_of(made)
    }
    body: Body = made(**values)
    return body


def _write_old(path: Path, revision: str, template: Envelope) -> dict[str, Envelope]:
    """Make a database of a revision with a row of each kind that it has; return what is in it."""
    engine = sa.create_engine(f"sqlite:///{path}")
    written = {}
    with engine.begin() as connection:
        connection.exec_driver_sql(f"PRAGMA application_id = {APPLICATION_ID}")
        command.upgrade(migration_config({"connection": connection}), revision)
        connection.exec_driver_sql(
            "INSERT INTO header VALUES (1, ?, ?, ?, ?, 0)",
            (template.run, template.station, str(template.origin), str(template.time_quality)),
        )
        tables = sa.inspect(connection)
        for number, kind in enumerate((kind for kind in KINDS if tables.has_table(kind)), 1):
            names = {column["name"] for column in tables.get_columns(kind)}
            values = {name: getattr(template, name) for name in Envelope.__slots__ if name not in ("sequence", "body")}
            envelope = Envelope(**values, sequence=number, body=_body(kind, names))
            row = dict(zip(TABLES[kind].columns.keys(), form_of(kind).row(1, envelope), strict=True))
            old = {name: value for name, value in row.items() if name in names}
            marks = ", ".join("?" * len(old))
            columns = ", ".join(f'"{name}"' for name in old)
            connection.exec_driver_sql(f"INSERT INTO {kind} ({columns}) VALUES ({marks})", tuple(old.values()))  # noqa: S608 - our own words
            written[kind] = envelope
    engine.dispose()
    return written


def test_there_are_earlier_schemas() -> None:
    assert len(EARLIER) == int(HEAD) - 1


@pytest.mark.parametrize("revision", EARLIER)
def test_rows_of_an_earlier_schema_are_kept_and_read_as_they_were(
    tmp_path: Path, measurement: Make, revision: str
) -> None:
    path = tmp_path / "a.db"
    written = _write_old(path, revision, measurement(1))
    assert len(written) >= 13
    with pytest.raises(
        OtherSchemaError, match=f"has schema {revision}, expected {HEAD}; it is brought up to date when"
    ):
        Reader.open(path)
    Writer.open(path, "line 3").close()
    with Reader.open(path) as reader:
        for kind, envelope in written.items():
            assert list(reader.records(kind)) == [envelope]
        (run,) = reader.runs()
        assert run.counts == dict.fromkeys(written, 1)


@pytest.mark.parametrize("revision", EARLIER)
def test_a_run_may_be_written_to_what_was_brought_up_to_date(tmp_path: Path, measurement: Make, revision: str) -> None:
    path = tmp_path / "a.db"
    _write_old(path, revision, measurement(1))
    with Writer.open(path, "line 3") as writer:
        writer.write([measurement(1000)])
    with Reader.open(path) as reader:
        assert [one.sequence for one in reader.records("measurement")][-1] == 1000
