"""The tables hold the whole vocabulary, and the migrations lead to exactly these tables."""

from __future__ import annotations

import os
import shutil
import sqlite3
import subprocess
import sys
from contextlib import closing
from pathlib import Path

import driftwatch
import pytest
import sqlalchemy as sa
from alembic.script import ScriptDirectory
from driftwatch.records import KINDS, fields_of
from driftwatch.store.opening import migration_config, revision_of, upgrade
from driftwatch.store.tables import APPLICATION_ID, HEAD, ROW_COLUMNS, TABLES
from driftwatch.store.writer import Writer


def _statements(path: Path) -> dict[str, str]:
    with closing(sqlite3.connect(path)) as connection:
        rows = connection.execute("SELECT name, sql FROM sqlite_master WHERE sql IS NOT NULL").fetchall()
    return {name: " ".join(sql.split()) for name, sql in rows if name != "alembic_version"}


def test_migrations_lead_to_exactly_the_tables_and_indexes_of_a_new_database(tmp_path: Path) -> None:
    engine = sa.create_engine(f"sqlite:///{tmp_path / 'migrated.db'}")
    with engine.begin() as connection:
        upgrade(connection)
        assert revision_of(connection) == HEAD
    engine.dispose()
    Writer.open(tmp_path / "new.db", "line 3").close()
    assert _statements(tmp_path / "migrated.db") == _statements(tmp_path / "new.db")


def test_head_is_the_last_migration() -> None:
    assert ScriptDirectory.from_config(migration_config({})).get_current_head() == HEAD


@pytest.mark.parametrize("kind", KINDS)
def test_every_field_of_a_body_has_its_column_after_those_of_the_row(kind: str) -> None:
    names = [column.name for column in TABLES[kind].columns]
    assert names == [*ROW_COLUMNS, *(field.name for field in fields_of(KINDS[kind]))]


def test_a_new_database_is_marked_as_ours_and_writes_ahead(tmp_path: Path) -> None:
    Writer.open(tmp_path / "new.db", "line 3").close()
    with closing(sqlite3.connect(tmp_path / "new.db")) as connection:
        assert connection.execute("PRAGMA application_id").fetchone() == (APPLICATION_ID,)
        assert connection.execute("PRAGMA journal_mode").fetchone() == ("wal",)
        assert connection.execute("SELECT version_num FROM alembic_version").fetchone() == (HEAD,)


def test_migrations_run_from_wherever_the_package_lies(tmp_path: Path) -> None:
    home = tmp_path / "100 % elsewhere"
    shutil.copytree(Path(driftwatch.__file__).parent, home / "driftwatch", ignore=shutil.ignore_patterns("__pycache__"))
    code = (
        "import driftwatch, sqlalchemy\n"
        "from driftwatch.store.opening import upgrade\n"
        "with sqlalchemy.create_engine('sqlite:///a.db').begin() as connection: upgrade(connection)\n"
        "print(driftwatch.__file__)"
    )
    environment = os.environ | {"PYTHONPATH": str(home), "PYTHONDONTWRITEBYTECODE": "1"}
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=tmp_path, env=environment, capture_output=True, text=True, check=True
    )
    assert str(home) in done.stdout
    assert _statements(tmp_path / "a.db")
