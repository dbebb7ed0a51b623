"""Commands and their output as the guides show them: read from a page, played, compared.

A page marks what can be played:

* a fenced block ``console`` holds command lines after ``$`` and what they print; the blocks of a page are played in
  order, in one folder that begins as a copy of ``config/``;
* a fenced block ``toml`` after a comment ``<!-- file: NAME -->`` is written into that folder under its name;
* a line ``...`` stands for lines left out; how lines are broken does not matter.

What is printed must agree in kind (`kind_of`): the same words around other numbers. Moments, UUIDs and the last digits
of a figure may differ from machine to machine.

``.venv/bin/python tools/pictures/shown.py`` puts what is printed now into the README; read the difference before
you keep it.
"""

from __future__ import annotations

import os
import re
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

ROOT = Path(__file__).parent.parent.parent
LEFT_OUT = "..."

_BLOCK = re.compile(r"(?:<!-- file: (?P<file>[\w.-]+) -->\n+)?```(?P<language>[a-z]*)\n(?P<body>.*?)```", re.DOTALL)
_UUID = re.compile(r"\b[0-9a-f]{8}(?:(?:-[0-9a-f]{4}){3}-[0-9a-f]{12})?\b")  # or the begin of one
_NUMBER = re.compile(r"[-+]?\d[\d.:]*(?:e[-+]?\d+)?(?:T[\d:.]+Z)?")


@dataclass(frozen=True, slots=True)
class Block:
    """One fenced block of a page."""

    language: str
    file: str | None  # under which name it is written
    body: str
    span: tuple[int, int]  # of the body in the page


@dataclass(frozen=True, slots=True)
class Step:
    """One command line and what it prints."""

    command: str
    shown: tuple[str, ...]


def blocks(page: str) -> list[Block]:
    """Return the fenced blocks of a page."""
    return [Block(one["language"], one["file"], one["body"], one.span("body")) for one in _BLOCK.finditer(page)]


def steps(body: str) -> list[Step]:
    """Return the steps of a ``console`` block."""
    found: list[tuple[str, list[str]]] = []
    for line in body.splitlines():
        if line.startswith("$ "):
            found.append((line[2:], []))
        elif found:
            found[-1][1].append(line)
        else:
            raise ValueError(f"{line!r} comes before any command line; expected one that begins with $")
    return [Step(command, tuple(shown)) for command, shown in found]


def prepared(folder: Path) -> None:
    """Make a folder ready for playing."""
    shutil.copytree(ROOT / "config", folder / "config")


def play(command: str, folder: Path) -> list[str]:
    """Run a command line in a folder; return the lines it prints, on either stream, without colours."""
    here = Path(sys.executable).parent  # where the command is installed beside this Python
    environment = os.environ | {"PATH": f"{here}{os.pathsep}{os.environ['PATH']}", "COLUMNS": "120", "NO_COLOR": "1"}
    done = subprocess.run(
        ["/bin/sh", "-c", command],
        cwd=folder,
        env=environment,
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
        check=False,
        timeout=100,
    )
    return [line.rstrip() for line in done.stdout.splitlines()]


def kind_of(lines: Sequence[str]) -> list[str]:
    """Return the words of lines, numbers, moments and UUIDs made alike, rules and line ends left out."""
    words = [_NUMBER.sub("#", _UUID.sub("#", word)) for line in lines for word in line.split()]
    return [word for word in words if word.strip("─")]


def disagreement(shown: Sequence[str], printed: Sequence[str]) -> str | None:
    """Return what is shown and not printed there; None when everything agrees in kind."""
    parts: list[list[str]] = [[]]
    for line in shown:
        if line.strip() == LEFT_OUT:
            parts.append([])
        else:
            parts[-1].append(line)
    kinds, at = kind_of(printed), 0
    for number, part in enumerate(kind_of(lines) for lines in parts):
        last = len(kinds) - len(part)
        starts = range(at, last + 1) if number else range(at, at + 1)
        if number and number == len(parts) - 1 and part:
            starts = range(max(at, last), last + 1)
        found = next((start for start in starts if kinds[start : start + len(part)] == part), None)
        if found is None:
            return f"shown: {' '.join(part)}\nprinted: {' '.join(kinds[at:])}"
        at = found + len(part)
    if len(parts) == 1 and at < len(kinds):
        return f"not shown: {' '.join(kinds[at:])}"
    return None


def disagreements(page: str, folder: Path) -> Iterator[str]:
    """Play every step of a page in a prepared folder; yield what disagrees."""
    for block in blocks(page):
        if block.file:
            (folder / block.file).write_text(block.body, encoding="utf-8")
        for step in steps(block.body) if block.language == "console" else ():
            wrong = disagreement(step.shown, play(step.command, folder))
            if wrong:
                yield f"$ {step.command}\n{wrong}"


def refreshed(page: str, folder: Path) -> str:
    """Play every step of a page in a prepared folder; return the page with what is printed now.

    Steps that leave out other lines than the last stay as they are.
    """
    parts, begin = [], 0
    for block in blocks(page):
        if block.file:
            (folder / block.file).write_text(block.body, encoding="utf-8")
        if block.language == "console":
            parts += [page[begin : block.span[0]], *(_replayed(step, folder) for step in steps(block.body))]
            begin = block.span[1]
    return "".join([*parts, page[begin:]])


def _replayed(step: Step, folder: Path) -> str:
    printed = play(step.command, folder)
    if any(str(ROOT) in line or line.startswith("Error:") for line in printed):
        raise ValueError(f"$ {step.command} printed {printed}; expected no error and no place on this computer")
    return "\n".join([f"$ {step.command}", *_as_left_out(step.shown, printed), ""])


def _as_left_out(shown: Sequence[str], printed: Sequence[str]) -> Sequence[str]:
    """Return what is printed, cut where the page leaves its end out; as shown where it leaves out anything else."""
    if LEFT_OUT not in shown:
        return printed
    ends = [number for number, line in enumerate(printed, 1) if kind_of([line]) == kind_of(shown[-2:-1])]
    if shown.index(LEFT_OUT) < len(shown) - 1 or not ends:
        return shown
    return [*printed[: ends[-1]], LEFT_OUT]


def main() -> None:
    """Put what is printed now into the README."""
    page = ROOT / "README.md"
    with tempfile.TemporaryDirectory() as folder:
        prepared(Path(folder))
        text = refreshed(page.read_text(encoding="utf-8"), Path(folder))
    page.write_text(text, encoding="utf-8")


if __name__ == "__main__":
    main()
