"""Opening a database: whose it is, which revision it has, and how it is connected to.

A file that is not ours is never changed: it is looked at without locks, journals or side files first.
"""

from __future__ import annotations

import errno
import os
import sqlite3
import stat
from contextlib import closing
from pathlib import Path
from typing import TYPE_CHECKING, Any
from urllib.parse import quote

import sqlalchemy as sa
from sqlalchemy.pool import NullPool, StaticPool

from driftwatch.store.errors import (
    ForeignDatabaseError,
    OtherSchemaError,
    StoreUnreachableError,
    cannot_look,
    unreachable,
)
from driftwatch.store.tables import APPLICATION_ID, HEAD, METADATA, VERSION_TABLE

if TYPE_CHECKING:
    from sqlalchemy.engine import Connection, Engine
    from sqlalchemy.pool import Pool

BUSY_MS = 5000
"""How long a statement waits for a lock before it fails."""


def refuse_foreign(path: Path) -> None:
    """Raise unless the file is ours, empty, or not there.

    Raises
    ------
    ForeignDatabaseError
        When the file is no SQLite database, or one with another program's tables.
    StoreUnreachableError
        When it cannot be read.
    """
    if is_folder(path):
        raise StoreUnreachableError(f"{path} is a folder; expected a database file; name a file in it")
    if not is_there(path) or is_marked(path):
        return
    try:
        with closing(connect(path, "immutable=1")) as connection:
            mark = connection.execute("PRAGMA application_id").fetchone()[0]
            tables = [row[0] for row in connection.execute("SELECT name FROM sqlite_master WHERE type = 'table'")]
    except sqlite3.OperationalError as error:
        raise unreachable(path, error) from None
    except sqlite3.DatabaseError as error:
        raise ForeignDatabaseError(
            f"{path} is no database of driftwatch ({error}); it was left as it is; name another file"
        ) from None
    if tables or mark:
        held = f"the tables {', '.join(sorted(tables)[:5])}" if tables else "no tables"
        raise ForeignDatabaseError(
            f"{path} belongs to another program (it holds {held} and the mark {mark:#x}, expected "
            f"{APPLICATION_ID:#x}); it was left as it is; name another file"
        )


def is_marked(path: Path) -> bool:
    """Say whether a file's header is that of a database of ours.

    The header alone is looked at (SQLite's file format, section 1.3), without the library: a file whose log was not
    folded into it whole, since the disk was full or the writer was killed, looks damaged to whoever ignores the log.
    """
    try:
        with path.open("rb") as file:
            header = file.read(72)
    except OSError as error:
        raise unreachable(path, error) from None
    return header[:16] == b"SQLite format 3\0" and int.from_bytes(header[68:72], "big") == APPLICATION_ID


def refuse_read_only(path: Path) -> None:
    """Raise when there is a file that may only be read: told now, before anything is made beside it.

    Raises
    ------
    StoreUnreachableError
        When it may not be written to.
    """
    if is_there(path) and not os.access(path, os.W_OK, effective_ids=os.access in os.supports_effective_ids):
        raise unreachable(path, PermissionError(errno.EACCES, "readonly file"))


def is_there(path: Path) -> bool:
    """Say whether there is something at a place.

    Raises
    ------
    StoreUnreachableError
        When that cannot be told: its folder may not be looked into, or the disk does not answer.
    """
    return _mode_at(path) is not None


def is_folder(path: Path) -> bool:
    """Say whether there is a folder at a place.

    Raises
    ------
    StoreUnreachableError
        As `is_there`.
    """
    mode = _mode_at(path)
    return mode is not None and stat.S_ISDIR(mode)


def _mode_at(path: Path) -> int | None:
    try:
        status = _status_at(path)
    except OSError as error:
        raise unreachable(path, error) from None
    return None if status is None else status.st_mode


def _status_at(path: Path) -> os.stat_result | None:
    # Path.exists says no, or raises, as the error's number may be; only these mean that there is nothing.
    try:
        return path.stat()
    except (FileNotFoundError, NotADirectoryError):
        return None


def file_at(path: Path) -> tuple[int, int] | None:
    """Return what tells a file from another that takes its place; None: there is none.

    Raises
    ------
    CommitError
        When that cannot be told now: the file may well be there, and is to be looked for again.
    """
    try:
        status = _status_at(path)
    except OSError as error:
        raise cannot_look(path, error) from None
    return None if status is None else (status.st_dev, status.st_ino)


def writing_engine(path: Path, busy_ms: int | None = None) -> Engine:
    """Return the engine of the one writer: every transaction takes the write lock at its begin.

    It waits for a lock as long as `busy_ms` says, milliseconds; None: `BUSY_MS`.
    """
    engine = _engine(path, "mode=rwc", StaticPool, busy_ms)

    def begin(connection: Connection) -> None:
        connection.exec_driver_sql("BEGIN IMMEDIATE")

    sa.event.listen(engine, "begin", begin)
    return engine


def refuse_absent(path: Path) -> None:
    """Raise unless there is a file.

    Raises
    ------
    StoreUnreachableError
        When there is none.
    """
    if not is_there(path):
        raise StoreUnreachableError(f"{path} does not exist; expected a database that `run` or `replay` has written")


def reading_engine(path: Path, busy_ms: int | None = None, *, beside_writer: bool = False) -> Engine:
    """Return an engine that can only read; it waits for a lock as long as `busy_ms` says, None: `BUSY_MS`.

    With `beside_writer` the file is taken for ours: it must be said in a process that has it open for writing. The
    system drops all locks of a process on a file when it closes the file once, whoever opened it; the library knows
    that of its own connections only. Without its locks the writer's log would be deleted by whoever closes next.

    Raises
    ------
    StoreUnreachableError
        When there is no such file.
    ForeignDatabaseError
        When the file is not ours.
    """
    refuse_absent(path)
    if not beside_writer:
        refuse_foreign(path)
    engine = _engine(path, reading_mode(path), NullPool, busy_ms)

    def begin(connection: Connection) -> None:
        connection.exec_driver_sql("BEGIN")

    sa.event.listen(engine, "begin", begin)
    return engine


def reading_mode(path: Path) -> str:
    """Return the parameter of a URI by which a database can be read where it lies.

    Raises
    ------
    StoreUnreachableError
        As `is_there`.
    """
    # Write-ahead logging needs a side file even to read; where none can be made and none is in use, none is needed.
    write_ahead = path.with_name(path.name + "-wal")
    archived = not os.access(path.parent, os.W_OK, effective_ids=os.access in os.supports_effective_ids)
    return "immutable=1" if archived and not is_there(write_ahead) else "mode=ro"


def _engine(path: Path, how: str, pool: type[Pool], busy_ms: int | None = None) -> Engine:
    return sa.create_engine("sqlite://", creator=lambda: connect(path, how, busy_ms), poolclass=pool)


def connect(path: Path, how: str, busy_ms: int | None = None) -> sqlite3.Connection:
    """Return a bare connection to a database; `how` are the parameters of its URI, as ``mode=ro``."""
    # No transaction is begun behind our back (isolation_level None): SQLAlchemy's begin event does it.
    connection = sqlite3.connect(
        f"file:{quote(str(path))}?{how}",
        uri=True,
        isolation_level=None,
        check_same_thread=False,
        timeout=(BUSY_MS if busy_ms is None else busy_ms) / 1000,
    )
    connection.execute("PRAGMA foreign_keys = ON")
    return connection


def revision_of(connection: Connection) -> str | None:
    """Return the revision of a database, None for one without tables."""
    names = sa.inspect(connection).get_table_names()
    if VERSION_TABLE not in names:
        return None
    revision: str | None = connection.exec_driver_sql(f"SELECT version_num FROM {VERSION_TABLE}").scalar()  # noqa: S608
    return revision


def refuse_other_schema(path: Path, revision: str | None) -> None:
    """Raise unless a database has exactly the revision that this program reads.

    Raises
    ------
    OtherSchemaError
        When it is older or newer, or was never finished.
    """
    if revision == HEAD:
        return
    if revision is None or revision < HEAD:
        raise OtherSchemaError(
            f"{path} has schema {revision or 'none'}, expected {HEAD}; it is brought up to date when `driftwatch run` "
            "or `driftwatch replay` next writes to it"
        )
    raise newer_schema(path, revision)


def newer_schema(path: Path, revision: str) -> OtherSchemaError:
    """Return the error about a database from the future."""
    return OtherSchemaError(
        f"{path} has schema {revision}, expected at most {HEAD}: a newer driftwatch wrote it; it was left as it is; "
        "install that version, or name another file"
    )


def migrate(connection: Connection, path: Path) -> None:
    """Bring a database to revision `HEAD` in one transaction; a new one is created there at once.

    Raises
    ------
    OtherSchemaError
        When the database is newer than this program.
    """
    revision = revision_of(connection)
    if revision == HEAD:
        return
    if revision is not None and revision > HEAD:
        raise newer_schema(path, revision)
    connection.exec_driver_sql(f"PRAGMA application_id = {APPLICATION_ID}")
    if revision is None:
        create(connection)
    else:
        upgrade(connection)


def create(connection: Connection) -> None:
    """Make the tables of revision `HEAD`: the same that the migrations lead to, without loading them."""
    METADATA.create_all(connection)
    version = sa.Table(VERSION_TABLE, sa.MetaData(), sa.Column("version_num", sa.String(32), primary_key=True))
    version.create(connection)
    connection.execute(sa.insert(version).values(version_num=HEAD))


def upgrade(connection: Connection) -> None:
    """Run the migrations from the database's revision, or from none, to `HEAD`."""
    from alembic import command  # slow to import, and needed only when there is something to migrate

    command.upgrade(migration_config({"connection": connection}), HEAD)


def migration_config(attributes: dict[str, Any]) -> Any:
    """Return the configuration of Alembic for the migrations inside this package, wherever it is installed."""
    from alembic.config import Config

    config = Config(attributes=attributes)
    folder = Path(__file__).parent / "migrations"
    config.set_main_option("script_location", str(folder).replace("%", "%%"))
    return config
