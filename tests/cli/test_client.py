"""The client in the README does what is said of it, on a real socket."""

from __future__ import annotations

import queue
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest
from driftwatch.bus.publisher import Publisher
from driftwatch.records import Envelope

from pictures.shown import blocks

README = Path(__file__).parent.parent.parent / "README.md"
Make = Callable[..., Envelope]


@pytest.fixture
def client(tmp_path: Path) -> Path:
    (body,) = [one.body for one in blocks(README.read_text(encoding="utf-8")) if one.file == "client.py"]
    path = tmp_path / "client.py"
    path.write_text(body, encoding="utf-8")
    return path


def test_it_is_of_about_twenty_lines(client: Path) -> None:
    assert len([line for line in client.read_text(encoding="utf-8").splitlines() if line.strip()]) <= 22


def test_it_prints_last_values_then_changes_and_tells_what_it_missed(client: Path, alert: Make) -> None:
    topic = "alert/drive_end/rocking/warning"
    with Publisher("tcp://127.0.0.1:*") as publisher:
        publisher.publish([alert(1), alert(2)])
        process = subprocess.Popen(
            [sys.executable, client, publisher.endpoint], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
        )
        with process, _lines(process) as lines:
            try:
                assert _served(publisher, lines) == f"2026-01-01T00:00:02.000000000Z {topic} unacknowledged\n"
                publisher.publish([alert(3, previous=2), alert(7, previous=5), alert(8, previous=7)])
                said = [lines.get(timeout=30) for _ in range(3)]
            finally:
                process.kill()
            assert [line.split()[0][17:19] for line in said] == ["03", "07", "08"]
            assert process.stderr is not None
            assert process.stderr.read() == f"missed something on {topic} before 7\n"


@contextmanager
def _lines(process: subprocess.Popen[str]) -> Iterator[queue.Queue[str]]:
    found: queue.Queue[str] = queue.Queue()
    assert process.stdout is not None
    out = process.stdout
    thread = threading.Thread(target=lambda: [found.put(line) for line in out])
    thread.start()
    try:
        yield found
    finally:
        thread.join()


def _served(publisher: Publisher, lines: queue.Queue[str]) -> str:
    deadline = time.monotonic() + 30
    while lines.empty():
        publisher.serve()
        time.sleep(0.02)
        assert time.monotonic() < deadline
    return lines.get()
