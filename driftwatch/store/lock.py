"""One writer at a time: a lock beside the database that dies with its holder."""

from __future__ import annotations

import fcntl
import os
from typing import TYPE_CHECKING

from driftwatch.store.errors import StoreBusyError, unreachable

if TYPE_CHECKING:
    from pathlib import Path
    from typing import Self


class WriterLock:
    """The right to write, held from construction until `release`.

    The lock is the operating system's (``flock``) on ``NAME.lock``: it ends with the process however that ends, so a
    stale file never locks anybody out. The file tells who holds it and stays behind on purpose, since removing it
    could hand the same lock to two.

    Raises
    ------
    StoreBusyError
        When another process, or another writer in this one, holds it; names the process.
    StoreUnreachableError
        When the folder may not be written to.
    """

    def __init__(self, database: Path, station: str) -> None:
        self._path = database.with_name(database.name + ".lock")
        try:
            self._file = os.open(self._path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
        except OSError as error:
            raise unreachable(database, error) from None
        try:
            fcntl.flock(self._file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            holder = self._holder()
            os.close(self._file)
            raise StoreBusyError(
                f"{database}: {holder} is writing to this database; expected to be its only writer; "
                "stop that process, or name another database with --store"
            ) from None
        os.ftruncate(self._file, 0)
        os.pwrite(self._file, f"{os.getpid()} {station}\n".encode(), 0)

    def _holder(self) -> str:
        pid, _, station = os.pread(self._file, 200, 0).decode(errors="replace").strip().partition(" ")
        return f"process {pid or 'unknown'} (station {station or 'unknown'!r})"

    def release(self) -> None:
        """Let the next writer in."""
        if self._file >= 0:
            os.close(self._file)
            self._file = -1

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.release()
