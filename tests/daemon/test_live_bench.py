"""The benches of the live daemon, in small: what they say of a run is true; how fast it was is for the full bench."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np
import pytest
from scipy.signal import lfilter

from benchmarks import live, live_run, memory_live, processes
from benchmarks.bars import FAMILY_REGULAR, Row, Size
from benchmarks.live_scene import LiveScene
from benchmarks.scene import RATE_HZ
from soundrig import Rig

SMALL = Size(family=FAMILY_REGULAR, full=False)


@pytest.fixture
def rows(make_rig: Callable[..., Rig]) -> Callable[[Iterator[Row]], dict[str, list[float]]]:
    """Return what gathers a bench's figures by their names and lets none fail; skip where there is no virtual card."""

    def gather(bench: Iterator[Row]) -> dict[str, list[float]]:
        found: dict[str, list[float]] = {}
        for row in bench:
            assert row.ok is not False, row
            assert np.isfinite(row.value), row
            found.setdefault(row.figure, []).append(row.value)
        return found

    return gather


def test_eight_channels_live_lose_nothing_and_every_mode_is_read_where_it_is(
    rows: Callable[[Iterator[Row]], dict[str, list[float]]],
) -> None:
    """24 modes at 24 frequencies: none is exchanged; what the recorder kept is what was played, bit by bit."""
    found = rows(live.run(SMALL))
    assert found["samples lost"] == found["samples recorded not as played"] == [0]
    assert found["modes at their true frequency"] == [24]
    assert found["the daemon, per cent of a core"][0] > 0
    for percentile in ("median", "99 %", "most"):
        parts = [f"{part}, {percentile}, ms" for part in ("arrived to made", "made to heard", "arrived to heard")]
        assert all(found[part][0] > 0 for part in parts)
        assert found[parts[2]][0] <= found[parts[0]][0] + found[parts[1]][0] + 1e-6 or percentile != "most"


def test_a_daemon_that_measures_nothing_is_told(make_rig: Callable[..., Rig], tmp_path: Path) -> None:
    scene = LiveScene(channels=1, modes=1)
    with pytest.raises(RuntimeError, match="measured nothing"):
        live_run.listened(tmp_path, scene, "[daemon]\nworkers = 0\n", 1.0, 0.0)


def test_the_upper_limit_of_a_slope_is_passed_by_the_true_one_as_seldom_as_it_says() -> None:
    """Memory that grows 7 MB in 2 h under noise whose correlation dies away over 15 s, read for 20 minutes.

    The interval of 95 % must hold the truth in 88 % of 400 series at least: were it to hold it in 93 %, which so few
    batches cost, the binomial probability to fail is 1.1e-4.
    """
    count, decay = 1200, np.exp(-1 / 15)
    hits = 0
    for seed in range(400):
        rng = np.random.default_rng(seed)
        noise = lfilter([1.0], [1.0, -decay], rng.standard_normal(count))
        seconds = np.arange(count, dtype=float)
        grown = memory_live.slope(seconds, 100 + 7.0 * seconds / memory_live.PER_S + 0.1 * noise)
        hits += grown.low <= 7.0 <= grown.high
        assert grown.low < grown.value < grown.high
    assert hits / 400 >= 0.90


def test_a_straight_line_has_its_slope_and_a_constant_none() -> None:
    seconds = np.arange(100.0)
    line = memory_live.slope(seconds, 3.0 * seconds / memory_live.PER_S)
    np.testing.assert_allclose([line.value, line.low, line.high], 3.0, rtol=1e-6)
    flat = memory_live.slope(seconds, np.full(100, 42.0))
    np.testing.assert_allclose([flat.value, flat.low, flat.high], 0.0, atol=1e-9)


def test_processor_time_and_memory_are_those_of_the_process() -> None:
    """A child that works for half a second of its own clock and holds 64 MB."""
    work = (
        "import time, sys\nheld = bytearray(b'x') * 64_000_000\n"
        "while time.process_time() < 0.5: pass\nprint('done', flush=True)\nsys.stdin.read()"
    )
    with subprocess.Popen([sys.executable, "-c", work], stdin=subprocess.PIPE, stdout=subprocess.PIPE) as child:
        assert child.stdout is not None
        assert child.stdin is not None
        child.stdout.readline()
        assert 0.45 < processes.processor_s(child.pid) < 0.8
        assert 64 < processes.resident_mb(child.pid) < 110
        assert processes.daemon_processes(child.pid) == {"main": child.pid}
        child.stdin.close()


def test_a_sample_recorded_wrong_or_out_of_place_is_counted(tmp_path: Path) -> None:
    """The recording is two rounds of what was played, from its middle on, with one sample changed."""
    import soundfile

    played = np.random.default_rng(0).standard_normal((1000, 2)).astype(np.float32)
    recorded = np.concatenate([played[400:], played, played[:400]])
    recorded[1234, 1] += 1.0
    soundfile.write(tmp_path / "a.wav", recorded, RATE_HZ, subtype="FLOAT")
    assert live.differing(tmp_path / "a.wav", played) == 1
    assert live.differing(tmp_path / "a.wav", played[:, ::-1].copy()) == len(recorded)
