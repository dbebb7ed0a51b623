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

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from pathlib import Path


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
    """A transaction failed and was rolled back as a whole."""


_REMEDIES = {
    "locked": "another program holds the database; end it, or wait until it is done",
    "full": "the disk is full; free some space or lower [store] keep_days",
    "readonly": "the database may only be read; change the permissions of the file and its folder",
    "malformed": "the database is damaged; keep the file, save what `driftwatch readings` still shows, start a new one",
    "not a database": "the file is no SQLite database; name another file",
    "i/o error": "the disk does not answer as it should; check it and the file system",
    "unable to open": "check that the folder exists and may be written to",
    "no such file": "see that its folder exists, or name a file in another",
    "not a directory": "a part of its path is a file; name a file in a folder",
    "permission denied": "change the permissions of its folder, or name a file in another",
}


def remedy_of(error: object) -> str:
    """Return what a person can do about an error of the database library."""
    words = str(error).lower()
    return next((remedy for sign, remedy in _REMEDIES.items() if sign in words), "see the message for the cause")


def commit_failed(path: Path, error: Exception) -> CommitError:
    """Translate an error of the database library that ended a transaction."""
    cause = getattr(error, "orig", None) or error
    return CommitError(f"{path}: nothing of this group was stored: {cause}; {remedy_of(cause)}")


def unreachable(path: Path, error: Exception) -> StoreUnreachableError:
    """Translate an error of the system or the database library that kept a file from being opened."""
    cause = getattr(error, "orig", None) or getattr(error, "strerror", None) or error
    return StoreUnreachableError(f"{path}: the database cannot be opened: {cause}; {remedy_of(cause)}")


def file_gone(path: Path) -> CommitError:
    """Return the error about a database that was taken away from under its writer."""
    return CommitError(
        f"{path}: nothing of this group was stored: the file was deleted, moved or replaced since it was opened; "
        "expected to find it where it was; leave it there while it is written to, and begin again"
    )
