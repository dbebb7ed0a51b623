"""What tests of the daemon's processes share: orders that do anything, and a look at who runs."""

from __future__ import annotations

import os
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from driftwatch.daemon import recorder
from driftwatch.daemon.messages import Record

LONG_S = 60.0
"""A deadline for what takes a second or two on a computer that has nothing else to do."""


@dataclass(frozen=True)
class Do:
    """An order whose arrival makes the process that receives it call a function: while it is unpacked."""

    function: Callable[..., Any]
    arguments: tuple[Any, ...] = ()

    def __reduce__(self) -> tuple[Callable[..., Any], tuple[Any, ...]]:
        return self.function, self.arguments


def hurried(order: Record) -> Record:
    """Return an order to record that, where it arrives, makes the disk be asked again sooner than after 5 s."""
    recorder.RETRY_S = 0.5
    return order


def until(found: Callable[[], Any], what: str, seconds: float = LONG_S) -> Any:
    """Return what is found once it is there and true."""
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        value = found()
        if value:
            return value
        time.sleep(0.01)
    raise AssertionError(f"not within {seconds:g} s: {what}")


def is_running(pid: int) -> bool:
    """Say whether a process runs; one that has ended and was not waited for does not."""
    try:
        state = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0]
    except (FileNotFoundError, ProcessLookupError):
        return False
    return state not in "ZX"


def children(parent: int, role: str) -> list[int]:
    """Return the processes of a role that a daemon started and that run, the oldest first."""
    found = []
    for entry in Path("/proc").iterdir():
        if entry.name.isdigit():
            try:
                words = (entry / "cmdline").read_bytes().split(b"\0")
                after_name = (entry / "stat").read_text().rpartition(")")[2].split()
            except (FileNotFoundError, ProcessLookupError, PermissionError):
                continue
            is_of_role = b"driftwatch.daemon.process" in words and role.encode() in words
            if is_of_role and after_name[1] == str(parent) and after_name[0] not in "ZX":
                found.append((int(after_name[19]), int(entry.name)))
    return [pid for _, pid in sorted(found)]


@contextmanager
def killed_at_the_end(pids: list[int]) -> Iterator[None]:
    """See to it that no process of a list is left, whatever happens."""
    try:
        yield
    finally:
        for pid in pids:
            if is_running(pid):
                os.kill(pid, 9)
