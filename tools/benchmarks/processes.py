"""What processes cost, as the system's kernel tells it: processor time and resident memory. Linux only."""

from __future__ import annotations

import contextlib
import os
from pathlib import Path

_TICKS = os.sysconf("SC_CLK_TCK")
_PAGE = os.sysconf("SC_PAGE_SIZE")


def daemon_processes(pid: int) -> dict[str, int]:
    """Return the process numbers of a running daemon by what each does: main, capture, tracker 1, ..."""
    found = {"main": pid}
    counts: dict[str, int] = {}
    for child in sorted(_children(pid)):
        words = _command_line(child)
        if "driftwatch.daemon.process" not in words:
            continue
        role = words[words.index("driftwatch.daemon.process") + 1]
        counts[role] = counts.get(role, 0) + 1
        found[f"{role} {counts[role]}" if role == "tracker" else role] = child
    return found


def processor_s(pid: int) -> float:
    """Return the processor time that a process, all its threads and the children it waited for have had, seconds."""
    return sum(int(word) for word in _stat(pid)[11:15]) / _TICKS


def resident_mb(pid: int) -> float:
    """Return the resident memory of a process in 1e6 bytes: its own, and what it has of shared memory and files."""
    return int(Path(f"/proc/{pid}/statm").read_text(encoding="ascii").split()[1]) * _PAGE / 1e6


def machine_busy_s() -> float:
    """Return the processor time that all processes of the machine together have had, seconds."""
    words = Path("/proc/stat").read_text(encoding="ascii").splitlines()[0].split()[1:]
    user, nice, system, _, _, irq, softirq = (int(word) for word in words[:7])
    return (user + nice + system + irq + softirq) / _TICKS


def _stat(pid: int) -> list[str]:
    """Return the fields of a process from its state on; its name, before, may hold anything."""
    return Path(f"/proc/{pid}/stat").read_text(encoding="utf-8", errors="replace").rpartition(")")[2].split()


def _children(pid: int) -> list[int]:
    found = []
    for entry in Path("/proc").iterdir():
        if entry.name.isdigit():
            with contextlib.suppress(FileNotFoundError, ProcessLookupError):  # ended meanwhile
                if int(_stat(int(entry.name))[1]) == pid:
                    found.append(int(entry.name))
    return found


def _command_line(pid: int) -> list[str]:
    try:
        return Path(f"/proc/{pid}/cmdline").read_text(encoding="utf-8", errors="replace").split("\0")
    except (FileNotFoundError, ProcessLookupError):
        return []
