"""Setting a database aside: it is renamed with its side files, never deleted, and another begins in its place.

The library itself folds and deletes the log of a database that is closed. It does not where the file is no more at
the place where it was opened; therefore what is set aside is renamed first and closed then.
"""

from __future__ import annotations

import datetime as dt
import sqlite3
import time
from contextlib import closing, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import sqlalchemy as sa

from driftwatch.records import NS
from driftwatch.store.ahead import index_of, log_of, size_of
from driftwatch.store.errors import Trouble, trouble_of
from driftwatch.store.opening import connect, file_at, is_marked, is_there
from driftwatch.store.tables import PREDECESSOR

if TYPE_CHECKING:
    from sqlalchemy.engine import Connection

CHECK_S = 2.0
"""How long a database that was not closed in good order is looked through at the start, seconds."""

_STEPS = 10_000  # instructions of the library between two looks at the clock

Place = tuple[int, int]
"""What tells a file from another, see `file_at`."""


@dataclass(frozen=True, slots=True)
class Predecessor:
    """A database that stood in another's place before it."""

    path: str  # where it lies now, as far as is known
    reason: str  # why it went
    at_ns: int  # UTC


def damage_in(path: Path) -> str | None:
    """Return what is damaged in a database of ours, in the library's words; None: nothing, as far as it was looked.

    A database is taken for damaged only where the library says so: when it is opened, or, after an unclean end, when
    it is looked through for `CHECK_S`. What a lock or a disk keeps from being read is not damaged.

    Raises
    ------
    StoreUnreachableError
        When it cannot be told whether there is one.
    """
    if not is_there(path) or not is_marked(path):
        return None
    try:
        with closing(connect(path, "mode=ro")) as connection:
            connection.execute("SELECT count(*) FROM sqlite_master").fetchone()
            return _quick_check(connection) if size_of(log_of(path)) else None
    except sqlite3.DatabaseError as error:
        return str(error) if trouble_of(path, error) is Trouble.DAMAGED else None


def _quick_check(connection: sqlite3.Connection) -> str | None:
    until = time.monotonic() + CHECK_S
    connection.set_progress_handler(lambda: time.monotonic() > until, _STEPS)
    found = connection.execute("PRAGMA quick_check(1)").fetchone()[0]
    return None if found == "ok" else str(found)


def set_aside(path: Path, word: str, now_ns: int) -> Path:
    """Rename a database and its side files and return the new name, ``NAME.WORD-TIME``; nothing is deleted.

    Raises
    ------
    OSError
        When it cannot be renamed.
    """
    name = _free_name(path, word, now_ns)
    for of_kind in (log_of, index_of):  # first: without its database a log would be deleted by whoever begins a new one
        with suppress(FileNotFoundError):
            of_kind(path).rename(of_kind(name))
    path.rename(name)
    return name


def _free_name(path: Path, word: str, now_ns: int) -> Path:
    moment = dt.datetime.fromtimestamp(now_ns // NS, dt.UTC).strftime("%Y%m%dT%H%M%SZ")
    name = path.with_name(f"{path.name}.{word}-{moment}")
    number = 1
    while name.exists() or log_of(name).exists():
        number += 1
        name = path.with_name(f"{path.name}.{word}-{moment}-{number}")
    return name


def open_at(file: Place) -> Path | None:
    """Return where a file that this process has open lies now; None: it was deleted, or the system does not tell."""
    with suppress(OSError):
        for link in Path("/proc/self/fd").iterdir():
            with suppress(OSError):  # the one that lists them is closed again
                status = link.stat()
                if (status.st_dev, status.st_ino) == file and status.st_nlink:
                    return link.readlink()
    return None


def take_log_along(path: Path, log: Place | None, moved: Path | None, now_ns: int) -> None:
    """Take away the log that a database which is gone left at its old place, for it fits no other database.

    Parameters
    ----------
    path
        Where the database was.
    log
        What tells the database's own log from that of another.
    moved
        Where the database lies now, so that its log is put beside it; None: it was deleted.
    now_ns
        UTC, for a name.

    Raises
    ------
    OSError
        When a file cannot be renamed.
    CommitError
        When it cannot be told whose the log is.
    """
    left = log_of(path)
    if log is None or file_at(left) != log:
        return
    with suppress(FileNotFoundError):
        index_of(path).unlink()  # made anew from the log
    if not size_of(left):
        left.unlink()
        return
    beside = moved if moved is not None and not log_of(moved).exists() else _free_name(path, "lost", now_ns)
    left.rename(log_of(beside))


def name_predecessor(connection: Connection, predecessor: Predecessor) -> None:
    """Write down what stood in this database's place before it."""
    values = {"path": predecessor.path, "reason": predecessor.reason, "at_ns": predecessor.at_ns}
    connection.execute(sa.insert(PREDECESSOR).values(**values))
