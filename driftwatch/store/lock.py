"""One at a time: a lock on a file that dies with its holder, and the one beside the database."""

from __future__ import annotations

import fcntl
import os
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

from driftwatch.store.errors import StoreBusyError, unreachable

if TYPE_CHECKING:
    from collections.abc import Iterator
    from typing import Self


class HeldError(Exception):
    """Somebody else holds the lock; translated by whoever asked for it, who knows what it is for.

    Attributes
    ----------
    holder
        ``process PID (station 'NAME')``, as the file tells it.
    """

    def __init__(self, holder: str) -> None:
        super().__init__(f"{holder} holds the lock")
        self.holder = holder


class HolderLock:
    """The right to something, held from construction until `release`.

    The lock is the operating system's (``flock``) on a file: it ends with the process however that ends, so a stale
    file never locks anybody out. The file tells who holds it and usually stays behind. Only its holder may take it
    away (`discard`), and whoever gets the lock of a file that is no more at its place asks again, so that two never
    have it. Programs that the holder starts do not inherit it.

    Raises
    ------
    HeldError
        When another process, or another holder in this one, has it.
    OSError
        When the file cannot be opened for writing, or its file system knows no locks.
    """

    def __init__(self, path: Path, station: str) -> None:
        self._path = path
        self._station = station
        self._is_new = not path.exists()
        self._take()

    def _take(self) -> None:
        path = self._path
        self._file = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
        try:
            fcntl.flock(self._file, fcntl.LOCK_EX | fcntl.LOCK_NB)
            while not self._is_at_its_place():
                os.close(self._file)
                self._file = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
                fcntl.flock(self._file, fcntl.LOCK_EX | fcntl.LOCK_NB)
            os.ftruncate(self._file, 0)
            os.pwrite(self._file, f"{os.getpid()} {self._station}\n".encode(), 0)
        except BlockingIOError:
            holder = self._holder()
            self.release()
            raise HeldError(holder) from None
        except OSError:
            self.release()
            raise

    def _holder(self) -> str:
        pid, _, station = os.pread(self._file, 200, 0).decode(errors="replace").strip().partition(" ")
        return _words_of(pid, station)

    def _is_at_its_place(self) -> bool:
        try:
            return os.path.samestat(os.fstat(self._file), self._path.stat())
        except FileNotFoundError:
            return False

    def discard(self) -> None:
        """Let the next one in, and leave no file where there was none before."""
        if self._file >= 0 and self._is_new and self._is_at_its_place():
            self._path.unlink()
        self.release()

    def renew(self) -> None:
        """Take the lock again where its file was taken away, so that the next one still finds it.

        Raises
        ------
        HeldError
            When somebody else has it by now.
        OSError
            As at first.
        """
        if self._file < 0 or not self._is_at_its_place():
            self.release()
            self._take()

    def release(self) -> None:
        """Let the next one in."""
        if self._file >= 0:
            os.close(self._file)
            self._file = -1

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.release()


class WriterLock(HolderLock):
    """The right to write to a database, on ``NAME.lock`` beside it.

    Raises
    ------
    StoreBusyError
        When another process, or another writer in this one, holds it; names the process.
    StoreUnreachableError
        When the folder may not be written to.
    """

    def __init__(self, database: Path, station: str) -> None:
        self._database = database
        with self._translated():
            super().__init__(_lock_path(database), station)

    def renew(self) -> None:
        """Take the lock again where its file was taken away, so that the next one still finds it.

        Raises
        ------
        StoreBusyError, StoreUnreachableError
            As at first.
        """
        with self._translated():
            super().renew()

    @contextmanager
    def _translated(self) -> Iterator[None]:
        database = self._database
        try:
            yield
        except OSError as error:
            raise unreachable(database, error) from None
        except HeldError as error:
            raise StoreBusyError(
                f"{database}: {error.holder} is writing to this database; expected to be its only writer; "
                "stop that process, or name another database with --store"
            ) from None


def holder_of(database: Path) -> str | None:
    """Return who writes to a database, ``process PID (station 'NAME')``; None: nobody.

    The system's list of locks is read, not the lock asked for: whoever starts at that moment would be refused.
    """
    path = _lock_path(database)
    try:
        inode = str(path.stat().st_ino)
        held = Path("/proc/locks").read_text(encoding="ascii", errors="replace").splitlines()
        if not any(words[1] == "FLOCK" and words[5].rpartition(":")[2] == inode for words in map(str.split, held)):
            return None
        pid, _, station = path.read_text(encoding="utf-8", errors="replace").strip().partition(" ")
    except OSError:
        return None
    return _words_of(pid, station)


def _words_of(pid: str, station: str) -> str:
    return f"process {pid or 'unknown'} (station {station or 'unknown'!r})"


def _lock_path(database: Path) -> Path:
    return database.with_name(database.name + ".lock")
