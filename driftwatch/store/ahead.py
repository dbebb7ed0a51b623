"""The write-ahead log: when it is folded into the database, and how it is kept from growing without end.

The library would do so by itself inside any commit, by pages. Here the one writer does it, after a commit and never
inside one, so that it can say how it went: a log that a reader of another program pins is told, not an error.
"""

from __future__ import annotations

import sqlite3
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

FOLD_COMMITS = 100
"""Commits after which the log is folded: a quarter of a minute of a live run, about a thousand pages."""

FOLD_ROWS = 5000
"""Rows after which it is folded, where groups are large or old rows are removed: no fold may take long."""

LOG_BYTES = 32 * 2**20
"""Size from which the log is emptied by force; where that does not succeed, a reader pins it."""

KEPT_BYTES = 8 * 2**20
"""Size to which the library cuts the log when it begins anew."""


def log_of(path: Path) -> Path:
    """Return where the write-ahead log of a database lies."""
    return path.with_name(path.name + "-wal")


def index_of(path: Path) -> Path:
    """Return where the index of a database's write-ahead log lies."""
    return path.with_name(path.name + "-shm")


def size_of(file: Path) -> int:
    """Return the size of a file in bytes; 0 where there is none."""
    try:
        return file.stat().st_size
    except OSError:
        return 0


class AheadLog:
    """The write-ahead log of a writer.

    Parameters
    ----------
    path
        Of the database.
    say
        Executes a statement past any transaction and returns its first row.
    """

    def __init__(self, path: Path, say: Callable[[str], tuple[int, ...]]) -> None:
        self._path = log_of(path)
        self._say = say
        self._commits = self._rows = 0
        self.pinned_bytes = 0
        """Size of the log while somebody keeps it from being emptied although it is over `LOG_BYTES`; else 0."""
        say("PRAGMA wal_autocheckpoint = 0")
        say(f"PRAGMA journal_size_limit = {KEPT_BYTES}")

    def committed(self, rows: int) -> None:
        """Fold the log where that is due after a commit of so many rows.

        The rows are safe in the log in any case: what keeps them from being folded is left for the next time, and
        meets the next commit if it lasts.
        """
        self._commits += 1
        self._rows += rows
        if self._commits < FOLD_COMMITS and self._rows < FOLD_ROWS:
            return
        self._commits = self._rows = 0
        try:
            self._say("PRAGMA wal_checkpoint(PASSIVE)")
            if size_of(self._path) > LOG_BYTES:
                self._say("PRAGMA wal_checkpoint(TRUNCATE)")
        except sqlite3.DatabaseError:
            return
        size = size_of(self._path)
        self.pinned_bytes = size if size > LOG_BYTES else 0
