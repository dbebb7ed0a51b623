"""What a live daemon on a virtual sound card is given, and what it leaves: configuration, rows, segments."""

from __future__ import annotations

import calendar
import contextlib
import json
import socket
import sqlite3
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import soundfile
from driftwatch.stream.resonator import resonator_response
from numpy.typing import NDArray

Floats = NDArray[np.float32]
Row = dict[str, Any]

RATE = 48_000
NS = 1_000_000_000
BLOCK = 480
"""Samples in a block: `block_s` of 10 ms."""

WINDOW_S, STEP_S = 2.0, 0.25

TRUTH = {"a": (900.0, 40.0), "b": (1550.0, 80.0)}
"""Natural frequency in Hz and Q of the mode on each channel."""

LIMIT_S = 60.0
"""A deadline for what takes a few seconds on a computer that has nothing else to do."""

PROGRAM = [sys.executable, "-m", "driftwatch"]


def two_modes(seconds: int) -> Floats:
    """Return a mode on each of two inputs, under random force, 28 dB above white noise; shape (samples, 2)."""
    rng = np.random.default_rng(0)
    count = seconds * RATE
    responses = [resonator_response(rng, count, RATE, *pole, 0.05, "acceleration") for pole in TRUTH.values()]
    noisy = np.stack(responses, 1) + 0.002 * rng.standard_normal((count, 2))
    return noisy.astype(np.float32)


def write_wav(path: Path, samples: Floats) -> Path:
    soundfile.write(path, samples, RATE, subtype="FLOAT")
    return path


def free_port() -> int:
    with socket.socket() as one:
        one.bind(("127.0.0.1", 0))
        return int(one.getsockname()[1])


def configuration(
    folder: Path, *, device: str = "rig", source: str = "", daemon: str = "", record: bool = True, rest: str = ""
) -> Path:
    """Write a configuration of two modes, one with a band that is left at once, into a folder; return it."""
    publish, control = free_port(), free_port()
    path = folder / "card.toml"
    path.write_text(
        f"""schema = 1
[station]
name = "bench"
[[source]]
name = "card"
kind = "soundcard"
device = "{device}"
{source}
[[channel]]
name = "a"
input = 1
[[channel]]
name = "b"
input = 2
[[mode]]
name = "first"
channel = "a"
search_hz = [700.0, 1100.0]
window_s = {WINDOW_S}
step_s = {STEP_S}
[[mode]]
name = "second"
channel = "b"
search_hz = [1300.0, 1800.0]
window_s = {WINDOW_S}
step_s = {STEP_S}
[[mode.band]]
name = "high"
low = 1600.0
on_delay_s = 1.0
[store]
url = "sqlite:///state/rows.db"
[bus]
publish = "tcp://127.0.0.1:{publish}"
control = "tcp://127.0.0.1:{control}"
[daemon]
{daemon}
[record]
keep_hours = {1.0 if record else 0.0}
segment_s = 5.0
{rest}
"""
    )
    return path


# ---------------------------------------------------------------------------------------------- what is left


def stored(config: Path) -> list[int]:
    """Return the sequences of all rows in the store, sorted."""
    with contextlib.closing(sqlite3.connect(config.parent / "state" / "rows.db")) as base:
        tables = [name for (name,) in base.execute("SELECT name FROM sqlite_master WHERE type = 'table'")]
        of = [name for name in tables if "sequence" in [c[1] for c in base.execute(f"PRAGMA table_info({name})")]]
        return sorted(number for name in of for (number,) in base.execute(f"SELECT sequence FROM {name}"))  # noqa: S608


def recorded(config: Path) -> list[tuple[int, Floats]]:
    """Return what was recorded, read here by the side files alone: first index and samples of each unbroken stretch."""
    parts: list[tuple[int, Floats]] = []
    for side in (config.parent / "state" / "recordings").glob("*.json"):
        samples = soundfile.read(side.with_suffix(".wav"), dtype="float32", always_2d=True)[0]
        places = [(part["frame"], part["first_sample"]) for part in json.loads(side.read_text())["parts"]]
        ends = [*(frame for frame, _ in places[1:]), len(samples)]
        parts += [(first, samples[frame:end]) for (frame, first), end in zip(places, ends, strict=True)]
    return list(_joined(sorted(parts, key=lambda part: part[0])))


def _joined(parts: list[tuple[int, Floats]]) -> Iterator[tuple[int, Floats]]:
    run: list[tuple[int, Floats]] = []
    for part in parts:
        if run and run[-1][0] + len(run[-1][1]) != part[0]:
            yield run[0][0], np.concatenate([samples for _, samples in run])
            run = []
        run.append(part)
    if run:
        yield run[0][0], np.concatenate([samples for _, samples in run])


def place_in(played: Floats, heard: Floats) -> int:
    """Return where in the played samples a few that were heard stand: each pair of them is the only one of its kind."""
    where = played.tobytes().find(np.ascontiguousarray(heard).tobytes())
    assert where >= 0, "these samples were never played"
    assert where % played.itemsize == 0
    return where // (2 * played.itemsize)


def replay(config: Path, folder: Path, *words: object) -> list[Row]:
    """Return the rows of a replay, whose store lies in a folder; `words` are those behind the configuration."""
    done = subprocess.run(
        [*PROGRAM, "replay", str(config), *map(str, words), "--store", str(folder / "replay.db"), "--json"],
        capture_output=True, cwd=folder, timeout=2 * LIMIT_S,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr.decode()
    return [json.loads(line) for line in done.stdout.splitlines()]


# ---------------------------------------------------------------------------------------------- rows

OF_THE_STREAM = ("measurement", "track", "alert", "health")
"""Kinds of rows that samples and configuration alone decide."""

OF_THE_RUN = ("run", "origin", "sequence", "previous", "time_quality")
"""What two runs may have different."""


def ns_of(text: str) -> int:
    """Return the nanoseconds of an RFC 3339 time in UTC."""
    whole, _, fraction = text.removesuffix("Z").partition(".")
    seconds = calendar.timegm(time.strptime(whole, "%Y-%m-%dT%H:%M:%S"))
    return seconds * NS + int(fraction.ljust(9, "0") or 0)


def usable(row: Row, channel: str, first: int = 0) -> bool:
    """Say whether a row is a usable measurement on a channel, of samples from index `first` on."""
    return row["kind"] == "measurement" and row["channel"] == channel and row["usable"] and row["first_sample"] >= first


def health(row: Row, phase: str) -> bool:
    return row["kind"] == "health" and row["phase"] == phase


def of_the_stream(rows: list[Row]) -> list[dict[str, Any]]:
    """Return what samples and configuration alone decide; rows that others point to by their place among these."""
    chosen = [row for row in rows if row["kind"] in OF_THE_STREAM]
    places = {row["sequence"]: place for place, row in enumerate(chosen)}
    return [
        {name: _value(name, value, places) for name, value in row.items() if name not in OF_THE_RUN} for row in chosen
    ]


def _value(name: str, value: Any, places: dict[int, int]) -> Any:
    return [places[one] for one in value] if name == "because" and value is not None else value


def first_difference(ours: list[dict[str, Any]], theirs: list[dict[str, Any]]) -> str | None:
    """Return the first row that differs; None: they are equal. (A comparison of whole lists tells too much.)"""
    for one, other in zip(ours, theirs, strict=False):
        if one != other:
            return str({name: (one[name], other.get(name)) for name in one if one[name] != other.get(name)})
    return None if len(ours) == len(theirs) else f"{len(ours)} rows against {len(theirs)}"
