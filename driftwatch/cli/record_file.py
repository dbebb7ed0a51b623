"""A file of records, a line each, that another start goes on with exactly where it ends."""

from __future__ import annotations

import fcntl
import json
import mmap
import os
from pathlib import Path
from typing import TYPE_CHECKING, Any, Self

import click

from driftwatch.bus.follow import Place
from driftwatch.bus.wire import HEARTBEAT, line_of

if TYPE_CHECKING:
    from collections.abc import Sequence


class RecordFile:
    """A file that grows by whole lines; its last one says what was had.

    A line that was torn when a listener was killed is cut off: its record is asked for again.

    Parameters
    ----------
    path
        Of the file; it is made if it is not there.

    Raises
    ------
    click.UsageError
        When it cannot be written to, holds something else, or another listener writes to it.
    """

    def __init__(self, path: Path) -> None:
        self._path = path
        try:
            self._descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_APPEND | os.O_CLOEXEC, 0o644)
        except OSError as error:
            raise click.UsageError(
                f"{path}: {error.strerror or error}; expected a file that can be written to; name another one"
            ) from None
        try:
            self._lock()
            self.place, end = self._last()
            if end != os.fstat(self._descriptor).st_size:
                os.ftruncate(self._descriptor, end)
        except BaseException:
            os.close(self._descriptor)
            raise

    def append(self, records: Sequence[dict[str, Any]]) -> None:
        """Write records, a line each, in one go.

        Raises
        ------
        click.ClickException
            When there is no room (exit status 1); what was written of them is sorted out at the next start.
        """
        lines = b"".join(line_of(record) + b"\n" for record in records)
        written = 0
        try:
            while written < len(lines):
                written += os.write(self._descriptor, lines[written:])
        except OSError as error:
            raise click.ClickException(
                f"{self._path}: {error.strerror or error}; expected to write every record there; make room and start "
                "again: it goes on where it was"
            ) from None

    def _lock(self) -> None:
        try:
            fcntl.flock(self._descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            raise click.UsageError(
                f"{self._path}: another listener writes to it; expected one a file; end that one, or name another file"
            ) from None

    def _last(self) -> tuple[Place | None, int]:
        """Return what the last whole line holds, and where it ends."""
        if os.fstat(self._descriptor).st_size == 0:
            return None, 0
        with mmap.mmap(self._descriptor, 0, access=mmap.ACCESS_READ) as held:
            end = held.rfind(b"\n") + 1
            line = held[held.rfind(b"\n", 0, max(end - 1, 0)) + 1 : end] if end else b""
            torn = held[end : end + len(_BEGIN)]
        if not line and not _BEGIN.startswith(torn.rstrip(b"\0")):
            raise self._foreign(torn)
        return (self._place_in(line) if line else None), end

    def _place_in(self, line: bytes) -> Place:
        try:
            record = json.loads(line)
            place = Place.of(record)
        except (ValueError, TypeError, KeyError):
            raise self._foreign(line) from None
        if record.get("kind") == HEARTBEAT or not isinstance(place.run, str) or not isinstance(place.sequence, int):
            raise self._foreign(line)
        return place

    def _foreign(self, held: bytes) -> click.UsageError:
        return click.UsageError(
            f"{self._path} ends with {held[:60]!r}, which is no record; expected an empty file or one that "
            "`driftwatch listen --into` wrote; name another one"
        )

    def close(self) -> None:
        """Close the file; another listener may then go on with it."""
        os.close(self._descriptor)

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


_BEGIN = b'{"kind":"'
"""So every line begins."""
