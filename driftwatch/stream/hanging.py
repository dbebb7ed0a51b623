"""Work inside a sound library that may never return, and that writes where it was not asked to."""

from __future__ import annotations

import os
import sys
import tempfile
import threading
from contextlib import contextmanager
from typing import TYPE_CHECKING, NoReturn, TypeVar

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

_Result = TypeVar("_Result")


def within(deadline_s: float, work: Callable[[], _Result]) -> _Result:
    """Return what `work` returns, waiting for it at most `deadline_s` seconds.

    Raises
    ------
    TimeoutError
        When it still runs; nothing can end it but the end of the process, by ``os._exit`` or a signal.
    """
    results: list[_Result] = []
    errors: list[BaseException] = []

    def run() -> None:
        try:
            results.append(work())
        except BaseException as error:  # noqa: BLE001 - raised again below, in the caller's thread
            errors.append(error)

    thread = threading.Thread(target=run, name="portaudio", daemon=True)
    thread.start()
    thread.join(deadline_s)
    if thread.is_alive():
        raise TimeoutError(f"the sound system did not answer within {deadline_s:g} s")
    if errors:
        raise errors[0]
    return results[0]


def leave_hung(status: int) -> NoReturn:
    """End the process past PortAudio's own ending, which would hang."""
    sys.stdout.flush()
    sys.stderr.flush()
    os._exit(status)


@contextmanager
def without_stderr() -> Iterator[Callable[[], str]]:
    """Keep file descriptor 2 of the whole process to oneself, for as short as PortAudio looks or opens.

    Yields
    ------
    callable
        Returns what was written there until now; to be called inside. Python's own messages go there too, meanwhile.
    """
    kept = os.dup(2)
    with tempfile.TemporaryFile() as held:
        os.dup2(held.fileno(), 2)
        try:
            yield lambda: os.pread(held.fileno(), 1 << 16, 0).decode(errors="replace")
        finally:
            os.dup2(kept, 2)
            os.close(kept)
