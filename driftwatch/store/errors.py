"""What can go wrong with the database.

::

    StoreError
    ├── ForeignDatabaseError   the file is not driftwatch's, or no database at all
    ├── OtherSchemaError       written by another version of driftwatch
    ├── StoreBusyError         another process is the writer
    ├── StoreUnreachableError  not there, or may not be opened, read or written
    └── CommitError            a transaction did not reach the file; nothing of it is in the store

Every message says what came, what was expected and what to do. Errors of the database library are translated
here, once, and nowhere else.
"""

from __future__ import annotations

import os
import sqlite3
from enum import StrEnum
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from pathlib import Path


class Trouble(StrEnum):
    """Why a database takes no rows."""

    LOCKED = "locked"  # another program holds it
    FULL = "full"  # the disk has no room
    READ_ONLY = "read-only"  # it may not be written to
    DISK = "disk"  # the disk does not answer as it should
    GONE = "gone"  # the file is not at its place any more
    DAMAGED = "damaged"  # what is in the file is no whole database
    REFUSED = "refused"  # the rows themselves: trying again would not help


class StoreError(Exception):
    """Something is wrong with the database."""


class ForeignDatabaseError(StoreError):
    """The file belongs to something else; it was not touched."""


class OtherSchemaError(StoreError):
    """The database was written by another version of driftwatch; it was not touched."""


class StoreBusyError(StoreError):
    """Another process writes to the database."""


class StoreUnreachableError(StoreError):
    """The file or its folder is missing, or may not be read or written."""


class CommitError(StoreError):
    """A transaction failed and was rolled back as a whole.

    Attributes
    ----------
    trouble
        What kept it from being stored.
    cause
        The database library's own words, where they are its.
    """

    def __init__(self, message: str, trouble: Trouble = Trouble.REFUSED, cause: str = "") -> None:
        super().__init__(message)
        self.trouble = trouble
        self.cause = cause or message


_TROUBLES = {
    sqlite3.SQLITE_BUSY: Trouble.LOCKED,
    sqlite3.SQLITE_LOCKED: Trouble.LOCKED,
    sqlite3.SQLITE_PROTOCOL: Trouble.LOCKED,
    sqlite3.SQLITE_FULL: Trouble.FULL,
    sqlite3.SQLITE_READONLY: Trouble.READ_ONLY,
    sqlite3.SQLITE_PERM: Trouble.READ_ONLY,
    sqlite3.SQLITE_IOERR: Trouble.DISK,
    sqlite3.SQLITE_CANTOPEN: Trouble.DISK,
    sqlite3.SQLITE_CORRUPT: Trouble.DAMAGED,
    sqlite3.SQLITE_NOTADB: Trouble.DAMAGED,
}
"""By primary result code of the library; what is not named is about the rows, not about the file."""

_LEAST_FREE = 1 << 16
"""Bytes; where a disk has no more, an error of reading or writing means that it is full."""

_REMEDIES = {
    "locked": "another program holds the database; end it, or wait until it is done",
    "full": "the disk is full; free some space or lower [store] keep_days",
    "no room": "free some space or lower [store] keep_days",
    "readonly": "the database may only be read; change the permissions of the file and its folder",
    "malformed": "the database is damaged; keep the file, for `driftwatch readings` still shows what can be read; "
    "a live run sets it aside and goes on in a new one by itself",
    "not a database": "the file is no SQLite database; name another file",
    "i/o error": "the disk does not answer as it should; check it and the file system",
    "input/output error": "the disk does not answer as it should; check it and the file system",
    "stale file handle": "the file system was taken away or exported anew; see that it is mounted",
    "not connected": "the file system does not answer; see that it is mounted",
    "unable to open": "check that the folder exists and may be written to",
    "no such file": "see that its folder exists, or name a file in another",
    "not a directory": "a part of its path is a file; name a file in a folder",
    "permission denied": "change the permissions of its folder, or name a file in another",
}


def remedy_of(error: object) -> str:
    """Return what a person can do about an error of the database library."""
    words = str(error).lower()
    return next((remedy for sign, remedy in _REMEDIES.items() if sign in words), "see the message for the cause")


def trouble_of(path: Path, error: object) -> Trouble:
    """Return why an error of the database library kept rows from being stored."""
    cause = getattr(error, "orig", None) or error
    trouble = _TROUBLES.get(getattr(cause, "sqlite_errorcode", -1) & 0xFF, Trouble.REFUSED)
    return _on_disk(path, trouble) if trouble in (Trouble.DISK, Trouble.READ_ONLY) else trouble


def _on_disk(path: Path, trouble: Trouble) -> Trouble:
    """Return what is behind an error of writing, as far as the file system tells."""
    try:
        disk = os.statvfs(path.parent)
    except OSError:
        return trouble
    if disk.f_flag & os.ST_RDONLY:
        return Trouble.READ_ONLY
    return Trouble.FULL if trouble is Trouble.DISK and disk.f_bavail * disk.f_frsize < _LEAST_FREE else trouble


def commit_failed(path: Path, error: Exception) -> CommitError:
    """Translate an error of the database library that ended a transaction."""
    cause = getattr(error, "orig", None) or error
    trouble = trouble_of(path, cause)
    said = f"{cause}, no room is left" if trouble is Trouble.FULL and "full" not in str(cause) else str(cause)
    remedy = remedy_of(said) if trouble is not Trouble.READ_ONLY else _REMEDIES["readonly"]
    return CommitError(f"{path}: nothing of this group was stored: {said}; {remedy}", trouble, said)


def unreachable(path: Path, error: Exception) -> StoreUnreachableError:
    """Translate an error of the system or the database library that kept a file from being opened."""
    cause = getattr(error, "orig", None) or getattr(error, "strerror", None) or error
    return StoreUnreachableError(f"{path}: the database cannot be opened: {cause}; {remedy_of(cause)}")


def cannot_look(path: Path, error: OSError) -> CommitError:
    """Translate an error of the system that kept it from being told whether a database is still at its place."""
    trouble = Trouble.READ_ONLY if isinstance(error, PermissionError) else Trouble.DISK
    cause = error.strerror or str(error)
    words = f"{path}: nothing of this group was stored: the file cannot be looked at: {cause}; {remedy_of(cause)}"
    return CommitError(words, trouble, cause)


def file_gone(path: Path) -> CommitError:
    """Return the error about a database that was taken away from under its writer."""
    return CommitError(
        f"{path}: nothing of this group was stored: the file was deleted, moved or replaced since it was opened; "
        "expected to find it where it was; put it back: a live run else goes on in another by itself, in a few seconds",
        Trouble.GONE,
    )
