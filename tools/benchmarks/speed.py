"""Speed: a replay against one plain spectral pass over the same samples, in processor time, inside one process."""

from __future__ import annotations

import contextlib
import io
import tempfile
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np
import soundfile
from driftwatch.config import loads
from driftwatch.daemon.keeper import Keeper
from driftwatch.daemon.replay import replay
from driftwatch.pipeline.station import RunHeader, Station
from driftwatch.records import Origin
from driftwatch.store.writer import Writer
from driftwatch.stream.recording import open_recordings
from scipy import signal

from benchmarks.bars import Row, Size
from benchmarks.scene import MODES, RATE_HZ, SCENE_CONFIG, scene

SECONDS = 600
PAIRS = 5
LIMIT = 0.5


def run(size: Size) -> Iterator[Row]:
    """Yield the ratio of a replay, from WAV to committed rows, to one ``scipy.signal.welch`` of the same samples."""
    seconds = SECONDS if size.full else SECONDS // 20
    with tempfile.TemporaryDirectory() as folder:
        for case, impacts in (("random force", False), ("random force, impact every 60 s", True)):
            path = Path(folder) / "scene.wav"
            samples = scene(seconds, impacts=impacts)
            soundfile.write(path, samples, RATE_HZ, subtype="PCM_24")
            limit = None if impacts else LIMIT  # what the decay fits cost on top is for information
            yield from _pairs(f"{seconds} s, {len(MODES)} modes, {case}", path, samples, Path(folder), limit)


def _pairs(
    case: str, path: Path, samples: np.ndarray[tuple[int], np.dtype[np.float32]], folder: Path, limit: float | None
) -> Iterator[Row]:
    ratios, ours, peers = [], [], []
    for pair in range(PAIRS + 1):
        our = _cost(lambda pair=pair: _replayed(path, folder / f"{case[-9:].strip()}-{pair}.db"))
        peer = _cost(lambda: signal.welch(samples, RATE_HZ, nperseg=8192))
        if pair == 0:
            continue  # what is made once, tables and plans of transforms, counts as start-up
        ratios.append(our / peer)
        ours.append(our)
        peers.append(peer)
    ratio = float(np.median(ratios))
    yield Row(case, "replay, processor time", float(np.median(ours)), "", None)
    yield Row(case, "plain spectral pass, processor time", float(np.median(peers)), "", None)
    bar, ok = ("", None) if limit is None else (f"at most {limit}", ratio <= limit)
    yield Row(case, "replay over plain spectral pass", ratio, bar, ok)


def _cost(work: Callable[[], object]) -> float:
    began = time.process_time()
    work()
    return time.process_time() - began


def _replayed(path: Path, store: Path) -> None:
    """Replay a recording as the command does, from opening the file to the last commit."""
    config = loads(SCENE_CONFIG)
    source = open_recordings([path], 0, "recording")
    header = RunHeader(config.station.name, "00000000-0000-4000-8000-000000000000", Origin.REPLAY, source.time_quality)
    with contextlib.redirect_stdout(io.StringIO()), Writer.open(store, header.station) as writer:
        replay(source, Station(config, header, [source]), Keeper(writer))
