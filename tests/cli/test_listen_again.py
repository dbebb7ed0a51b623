"""A listener that is ended and killed again and again ends with every record of the store, each exactly once.

Real processes throughout: ``driftwatch run`` on a simulated source, ``driftwatch listen --into``, signals.
"""

from __future__ import annotations

import json
import random
import signal
import subprocess
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

from driftwatch.bus.wire import encode_json
from driftwatch.store.queries import Reader
from driftwatch.store.since import page

RESTARTS = 10
LIMIT_S = 60.0
"""Longest wait for anything: for a busy computer, not a measure."""


def _until(true: Callable[[], Any], process: subprocess.Popen[str], log: Path) -> None:
    deadline = time.monotonic() + LIMIT_S
    while not true():
        assert process.poll() is None, log.read_text(encoding="utf-8")
        assert time.monotonic() < deadline, log.read_text(encoding="utf-8")
        time.sleep(0.02)


def _stored(database: Path) -> list[bytes]:
    """Return the lines of all records of a store, in its order."""
    found: list[bytes] = []
    run, sequence, more = None, 0, True
    with Reader.open(database) as reader:
        while more:
            one = page(reader, run, sequence, 1000)
            found += map(encode_json, one.records)
            run, sequence, more = one.records[-1].run, one.records[-1].sequence, one.more
    return found


def _end(process: subprocess.Popen[str], number: signal.Signals, log: Path) -> None:
    process.send_signal(number)
    # One that has not even begun is ended by the system.
    assert process.wait(LIMIT_S) in ({-number} if number is signal.SIGKILL else {-number, 0}), log.read_text()


def test_ten_restarts_of_a_listener_and_two_of_its_daemon_lose_and_repeat_nothing(bench: Any) -> None:
    """Seeds 0 to 9 choose when each listener goes, and whether it is killed; the daemon goes once in each way."""
    config = bench.config(pace=4.0)
    into, database, log = bench.folder / "records.jsonl", bench.folder / "state" / "bench.db", bench.folder / "log"

    def size() -> int:
        return into.stat().st_size if into.exists() else 0

    with log.open("w", encoding="utf-8") as errors:
        daemon = bench.start("run", config, stdout=errors, stderr=errors)
        for seed in range(RESTARTS):
            chosen = random.Random(seed)  # noqa: S311 - no secret
            had = size()
            listener = bench.start("listen", "--config", config, "--into", into, stdout=errors, stderr=errors)
            if seed in (3, 6):  # the daemon goes while it is listened to, and comes back
                _until(lambda before=had: size() > before, listener, log)
                _end(daemon, signal.SIGKILL if seed == 3 else signal.SIGINT, log)
                daemon = bench.start("run", config, stdout=errors, stderr=errors)
            if chosen.random() < 0.7:  # else it goes before or while it begins
                _until(lambda before=had: size() > before, listener, log)
            time.sleep(chosen.uniform(0.0, 0.8))
            _end(listener, chosen.choice([signal.SIGKILL, signal.SIGKILL, signal.SIGINT]), log)
        had = size()
        listener = bench.start("listen", "--config", config, "--into", into, stdout=errors, stderr=errors)
        _until(lambda: size() > had, listener, log)
        last = _stored(database)[-1]
        _until(lambda: last in into.read_bytes(), listener, log)
        _end(listener, signal.SIGINT, log)
        _end(daemon, signal.SIGINT, log)
    lines = into.read_bytes().splitlines()
    stored = _stored(database)
    assert len({json.loads(line)["run"] for line in stored}) == 3
    assert len(lines) > stored.index(last)
    assert lines == stored[: len(lines)]
