"""Real processes of the program, each in a folder of its own."""

from __future__ import annotations

import json
import os
import socket
import subprocess
import sys
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from pathlib import Path
from typing import Any

import pytest

BENCH = """
schema = 1
[station]
name = "bench"
[[source]]
name = "model"
kind = "simulated"
rate_hz = 4000
seed = 5
noise = 0.002
pace = {pace}
{seconds}
[[source.resonator]]
frequency_hz = [[6.0, 400.0], [7.0, 380.0]]
q = 30.0
level = 0.05
[[channel]]
name = "drive end"
input = 1
quantity = "acceleration"
[[mode]]
name = "rocking"
channel = "drive end"
search_hz = [340.0, 460.0]
window_s = 2.0
step_s = 0.25
[[mode.band]]
name = "bolts"
quantity = "frequency"
low = 390.0
high = 410.0
on_delay_s = 1.0
priority = "high"
[store]
url = "sqlite:///state/bench.db"
[bus]
publish = "tcp://127.0.0.1:{port}"
control = "tcp://127.0.0.1:{control}"
"""
"""A resonance that leaves its band after 7 s."""


TINY = """
schema = 1
[station]
name = "tiny"
[[channel]]
name = "drive end"
[[mode]]
name = "rocking"
channel = "drive end"
search_hz = [340.0, 460.0]
window_s = 1.0
step_s = {step_s}
[store]
url = "sqlite:///own.db"
"""
"""One mode and no source: for replays."""


class Bench:
    """A folder in which the program is started."""

    def __init__(self, folder: Path, stack: ExitStack) -> None:
        self.folder = folder
        self._stack = stack
        self.port, self.control = free_ports(2)
        self.endpoint = f"tcp://127.0.0.1:{self.port}"

    def config(self, name: str = "bench.toml", *, pace: float = 1.0, seconds: float | None = None) -> Path:
        """Write the configuration `BENCH` and return its name."""
        length = "" if seconds is None else f"seconds = {seconds}"
        text = BENCH.format(pace=pace, seconds=length, port=self.port, control=self.control)
        (self.folder / name).write_text(text, encoding="utf-8")
        return Path(name)

    def tiny(self, step_s: float = 0.1) -> str:
        """Write the configuration `TINY` as tiny.toml and return its text; at 0.1 s it gives 20 records a second."""
        text = TINY.format(step_s=step_s)
        (self.folder / "tiny.toml").write_text(text, encoding="utf-8")
        return text

    def start(self, *arguments: object, **options: Any) -> subprocess.Popen[str]:
        """Start the program; what still runs at the end of the test is killed."""
        process = subprocess.Popen(
            [sys.executable, "-m", "driftwatch", *map(str, arguments)],
            cwd=self.folder,
            env={**os.environ, "OMP_NUM_THREADS": "1", "COLUMNS": "100"},
            stdout=options.pop("stdout", subprocess.PIPE),
            stderr=options.pop("stderr", subprocess.PIPE),
            text=True,
            **options,
        )
        self._stack.callback(_end, process)
        return process

    def run(self, *arguments: object, **options: Any) -> subprocess.CompletedProcess[str]:
        """Run the program to its end."""
        process = self.start(*arguments, **options)
        out, err = process.communicate(timeout=60)
        return subprocess.CompletedProcess(list(map(str, arguments)), process.returncode, out, err)

    def files(self) -> dict[str, bytes]:
        """Return everything in the folder."""
        return {
            str(path.relative_to(self.folder)): path.read_bytes() if path.is_file() else b"" for path in self._all()
        }

    def _all(self) -> list[Path]:
        return sorted(self.folder.rglob("*"))


def _end(process: subprocess.Popen[str]) -> None:
    if process.poll() is None:
        process.kill()
    process.communicate()


def free_ports(count: int) -> list[int]:
    """Return ports that nobody listens on."""
    with ExitStack() as stack:
        sockets = [stack.enter_context(socket.socket()) for _ in range(count)]
        for one in sockets:
            one.bind(("127.0.0.1", 0))
        return [int(one.getsockname()[1]) for one in sockets]


@pytest.fixture
def bench(tmp_path: Path) -> Iterator[Bench]:
    """Return an empty folder to start the program in."""
    folder = tmp_path / "bench"
    folder.mkdir()
    with ExitStack() as stack:
        yield Bench(folder, stack)


@pytest.fixture(scope="session")
def objects() -> Callable[[str], list[dict[str, Any]]]:
    """Return what reads JSON lines, strictly: nothing but objects, no NaN."""

    def refuse(word: str) -> None:
        raise ValueError(f"{word} is no JSON")

    def read(text: str) -> list[dict[str, Any]]:
        found = [json.loads(line, parse_constant=refuse) for line in text.splitlines()]
        assert all(isinstance(one, dict) for one in found)
        return found

    return read
