"""A busy daemon killed at random instants, again and again on one database: nothing that was published is missing."""

from __future__ import annotations

import random
import sqlite3
import tempfile
import threading
import time
from collections.abc import Iterator
from contextlib import closing
from dataclasses import dataclass, field
from pathlib import Path
from statistics import median

from driftwatch.records import NS, parse_time

from benchmarks.bars import Row, Size
from benchmarks.busy import BusyDaemon, Recorder, integrity, locked, stored

KILLS = 300
LANES = 2
"""Daemons at a time: a start costs some seconds of computing."""

WITHIN_S = 1.5
"""The kill comes so long after the first reading at most."""

LOCKED_S = 30.0

LOST_S = 1.0
"""Readings that may be lost with a kill, seconds of stream."""


@dataclass
class Killed:
    """What came of some kills."""

    kills: int = 0
    published: int = 0  # records that the subscriber has
    missing: int = 0  # of those, not in the store
    holes: int = 0  # sequences that are missing within a run
    damage: list[str] = field(default_factory=list)  # what was found wrong
    lost_s: list[float] = field(default_factory=list)  # per kill, seconds of readings that were never stored


def run(size: Size) -> Iterator[Row]:
    """Yield what was missing or damaged after each of so many kills."""
    count = KILLS if size.seconds is None else max(2, round(size.seconds / 5))
    with tempfile.TemporaryDirectory() as name:
        lanes = killed(Path(name), count, LANES)
    case = f"{sum(one.kills for one in lanes)} kills at random instants"
    missing, holes = sum(one.missing for one in lanes), sum(one.holes for one in lanes)
    damage = [words for one in lanes for words in one.damage]
    lost = max((seconds for one in lanes for seconds in one.lost_s), default=0.0)
    yield Row(case, "records published", sum(one.published for one in lanes), "", None)
    yield Row(case, "published and not stored", missing, "none", missing == 0)
    yield Row(case, "sequences missing in a run", holes, "none", holes == 0)
    yield Row(case, "integrity checks not passed", len(damage), "none", not damage)
    yield Row(case, "readings lost with a kill at most, s", lost, f"at most {LOST_S:g}", lost <= LOST_S)
    with tempfile.TemporaryDirectory() as name:
        yield from _while_locked(Path(name), LOCKED_S if size.seconds is None else LOCKED_S / 5)


def _while_locked(folder: Path, seconds: float) -> Iterator[Row]:
    """Yield what a store that another program holds for so long does to a run."""
    case = f"store locked for {seconds:.0f} s"
    with BusyDaemon(folder) as daemon, Recorder(daemon.endpoint) as recorder:
        daemon.start()
        daemon.until(lambda: len(recorder.records) > 200, "readings")
        with locked(daemon.database):
            daemon.until(lambda: recorder.beats and recorder.beats[-1][1]["unsaved"], "records that wait")
            before, beats = len(recorder.records), len(recorder.beats)
            time.sleep(seconds)
            early, beats = len(recorder.records) - before, len(recorder.beats) - beats
        daemon.until(lambda: recorder.of("health", phase="end"), "the end of the trouble")
        (end,) = recorder.of("health", phase="end")
        seen = {(one["run"], one["sequence"]) for _, one in recorder.records}
        missing = len(seen - stored(daemon.database))
    yield Row(case, "published before they were stored", early, "none", early == 0)
    yield Row(case, "heartbeats a second meanwhile", beats / seconds, "at least 0.8", beats >= 0.8 * seconds)
    yield Row(case, "lost, as the health record says", end["value"], "none", end["value"] == 0)
    yield Row(case, "published and not stored", missing, "none", missing == 0)


def killed(folder: Path, count: int, lanes: int) -> list[Killed]:
    """Kill daemons `count` times in all, side by side; return what came of it for each.

    Raises
    ------
    RuntimeError
        When one did not start again; the last of its log.
    """
    results = [Killed() for _ in range(lanes)]
    failed: list[BaseException] = []

    def work(lane: int) -> None:
        try:
            place = folder / str(lane)
            place.mkdir()
            _lane(place, lane, len(range(lane, count, lanes)), results[lane])
        except (AssertionError, OSError, sqlite3.Error) as error:
            failed.append(error)

    threads = [threading.Thread(target=work, args=(lane,)) for lane in range(lanes)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    if failed:
        raise RuntimeError(f"a lane did not come to its end: {failed[0]}") from failed[0]
    return results


def _lane(folder: Path, seed: int, count: int, result: Killed) -> None:
    moments = random.Random(seed)  # noqa: S311 - when to kill, no secret
    with BusyDaemon(folder) as daemon, Recorder(daemon.endpoint) as recorder:
        for number in range(count):
            daemon.start()
            daemon.until(lambda: _measures(recorder, result.kills), f"readings after start {number}")
            time.sleep(moments.uniform(0.0, WITHIN_S))
            daemon.kill()
            result.kills += 1
            found = integrity(daemon.database)
            if found != "ok":
                result.damage.append(found)
        time.sleep(0.2)
    there = stored(daemon.database)
    seen = {(one["run"], one["sequence"]) for _, one in recorder.records}
    result.published, result.missing = len(seen), len(seen - there)
    runs: dict[str, list[int]] = {}
    for run_, sequence in there:
        runs.setdefault(run_, []).append(sequence)
    result.holes = sum(max(numbers) - len(numbers) for numbers in runs.values())
    result.lost_s = list(_lost(daemon.database, recorder))


def _measures(recorder: Recorder, before: int) -> bool:
    """Say whether readings came of one more run than of those before."""
    return len({one["run"] for one in recorder.of("measurement")}) > before


def _lost(database: Path, recorder: Recorder) -> Iterator[float]:
    """Yield for each run by how much its last stored reading lay further behind its last heartbeat than is usual.

    All in stream time, as one process counted it: no load of the computer enters, nor how long a window is.
    """
    with closing(sqlite3.connect(database)) as connection:
        last = dict(
            connection.execute(
                "SELECT run, max(time_ns) FROM measurement JOIN header ON header.id = header GROUP BY run"
            )
        )
    behind: dict[str, list[float]] = {}
    for arrived, beat in recorder.beats:
        before = [
            parse_time(one["time"]) for when, one in recorder.records if _is_reading(one, beat) and when < arrived
        ]
        if before:
            now_ns = parse_time(beat["time"])
            behind.setdefault(beat["run"], []).append((now_ns - max(before)) / NS)
    usual = median(value for values in behind.values() for value in values) if behind else 0.0
    for name in behind:
        newest = max(parse_time(beat["time"]) for _, beat in recorder.beats if beat["run"] == name)
        yield max(0.0, (newest - last.get(name, newest)) / NS - usual)


def _is_reading(one: dict[str, object], beat: dict[str, object]) -> bool:
    return one["kind"] == "measurement" and one["run"] == beat["run"]
