"""Memory: the peak of a real replay process, for ten minutes and for two hours of signal."""

from __future__ import annotations

import re
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path

import soundfile

from benchmarks.bars import Row, Size
from benchmarks.scene import RATE_HZ, SCENE_CONFIG, scene

LIMIT_MB = 250.0
GROWTH = 1.03
"""Two hours may peak so many times as high as ten minutes: what the allocator does differs a little from run to run."""


def run(size: Size) -> Iterator[Row]:
    """Yield the peak resident memory of ``driftwatch replay`` in MB for a short and a twelve times longer recording."""
    piece = scene(600 if size.full else 30, impacts=True)
    peaks = []
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        (folder / "scene.toml").write_text(SCENE_CONFIG, encoding="utf-8")
        for pieces in (1, 12):
            path = folder / f"{pieces}.wav"
            with soundfile.SoundFile(path, "w", RATE_HZ, 1, "PCM_24") as file:
                for _ in range(pieces):
                    file.write(piece)
            peaks.append(_peak_mb(folder, path))
            path.unlink()
            case = f"{pieces * len(piece) / RATE_HZ:.0f} s, 3 modes"
            yield Row(case, "peak memory, MB", peaks[-1], f"under {LIMIT_MB:.0f}", peaks[-1] < LIMIT_MB)
    growth = peaks[1] / peaks[0]
    yield Row("twelve times as long", "peak memory, ratio", growth, f"at most {GROWTH}", growth <= GROWTH)


def _peak_mb(folder: Path, recording: Path) -> float:
    command = [sys.executable, "-m", "driftwatch", "replay", "scene.toml", recording.name, "--store", "out.db"]
    peak = 0.0
    with subprocess.Popen(command, cwd=folder, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL) as child:
        while child.poll() is None:
            peak = max(peak, _high_water_mb(child.pid))
            time.sleep(0.02)
    if child.returncode:
        raise RuntimeError(f"the replay ended with exit status {child.returncode}")
    return peak


def _high_water_mb(pid: int) -> float:
    """Return the peak of a process so far; what it inherited of this one before it began does not count."""
    status = Path(f"/proc/{pid}/status").read_text(encoding="ascii", errors="replace")
    found = re.search(r"VmHWM:\s+(\d+) kB", status)
    return int(found[1]) / 1024 if found else 0.0
