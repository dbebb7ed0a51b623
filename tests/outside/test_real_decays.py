"""Real free decays against figures fitted by hand with two other methods (tests/data/decays/README.md)."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import soundfile
from driftwatch.measure import ringdown
from driftwatch.measure.onset import detector
from driftwatch.measure.zoom import BandRequest, Zoom
from numpy.typing import NDArray

DECAYS = Path(__file__).parents[1] / "data" / "decays"
CASES = [
    ("tabla_tun3.flac", (290.0, 340.0), 315.57, 331.0, 335.0),
    ("tabla_tas3.flac", (530.0, 590.0), 559.4, 315.0, 315.0),
]


def recording(name: str) -> tuple[NDArray[np.float64], int]:
    samples, rate = soundfile.read(DECAYS / name)
    return samples, rate


def assert_agrees(fit: ringdown.RingdownFit, frequency: float, q_low: float, q_high: float) -> None:
    """Frequency within 0.05 % and Q within 5 % of the hand-fitted figures."""
    assert fit.usable, fit
    assert fit.frequency_hz == pytest.approx(frequency, rel=5e-4)
    assert fit.q is not None
    assert 0.95 * q_low <= fit.q <= 1.05 * q_high
    assert fit.decrement_q == pytest.approx(fit.q, rel=0.05)  # the two methods agree as the hand fits did


@pytest.mark.parametrize(("name", "search_hz", "frequency", "q_low", "q_high"), CASES)
def test_whole_recording_gives_the_hand_fitted_pole_without_chosen_times(
    name: str, search_hz: tuple[float, float], frequency: float, q_low: float, q_high: float
) -> None:
    samples, rate = recording(name)
    assert_agrees(ringdown.fit(samples, rate, search_hz), frequency, q_low, q_high)


def test_hand_chosen_part_gives_the_hand_fitted_pole() -> None:
    """tabla_tun3, 0.15 to 1.4 s after the peak: the part the figures were fitted to."""
    samples, rate = recording("tabla_tun3.flac")
    peak = int(np.argmax(np.abs(samples)))
    part = samples[peak + round(0.15 * rate) : peak + round(1.4 * rate)]
    assert_agrees(ringdown.fit(part, rate, (290.0, 340.0), 0.0), 315.57, 331.0, 335.0)


@pytest.mark.parametrize(("name", "search_hz", "frequency", "q_low", "q_high"), CASES)
def test_onset_is_found_in_the_zoomed_stream_and_leads_to_the_pole(
    name: str, search_hz: tuple[float, float], frequency: float, q_low: float, q_high: float
) -> None:
    """The whole line: silence, the stroke, zoom, onset, fit of one second."""
    samples, rate = recording(name)
    quiet = np.random.default_rng(0).normal(0.0, 1e-5, 3 * rate)
    both = np.concatenate((quiet, samples))
    zoom = Zoom(rate, [BandRequest(search_hz, 1.0, 1.0)])
    band = zoom.bands[0]
    stream = zoom.stream(both.astype(np.float32))[0]
    onsets = detector(band.rate_hz, search_hz).find(stream[None, :])[0]
    assert len(onsets) == 1
    place = onsets[0].position * band.decimation
    assert place == pytest.approx(len(quiet) + np.argmax(np.abs(samples)), abs=rate / (search_hz[1] - search_hz[0]))
    context = round(ringdown.context_s(search_hz) * rate)
    start = round(place) - context
    fit = ringdown.fit(both[start : start + context + rate], rate, search_hz, place - start)
    assert_agrees(fit, frequency, q_low, q_high)


WINDOWS_S = (0.8, 1.5, 3.0)
CONFIG = """
schema = 1
[[channel]]
name = "skin"
quantity = "pressure"
"""
MODE = """
[[mode]]
name = "{window_s} s"
channel = "skin"
search_hz = [{low}, {high}]
methods = ["ringdown"]
window_s = {window_s}
"""


@pytest.mark.parametrize(("name", "search_hz", "frequency", "q_low", "q_high"), CASES)
def test_replay_of_a_recording_that_begins_with_the_stroke_gives_the_pole_for_every_window(
    tmp_path: Path, name: str, search_hz: tuple[float, float], frequency: float, q_low: float, q_high: float
) -> None:
    """A real process; to 40 dB and more these decays contradict one pole, and nevertheless tell it."""
    low, high = search_hz
    modes = [MODE.format(window_s=window_s, low=low, high=high) for window_s in WINDOWS_S]
    (tmp_path / "drum.toml").write_text(CONFIG + "".join(modes))
    arguments = ["replay", "drum.toml", str(DECAYS / name), "--start", "2026-03-01T06:00:00Z", "--json"]
    command = [sys.executable, "-m", "driftwatch", *arguments]
    done = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, timeout=60, check=False)
    assert done.returncode == 0, done.stderr
    records = [json.loads(line) for line in done.stdout.splitlines()]
    found = {one["mode"]: one for one in records if one["kind"] == "measurement"}
    assert set(found) == {f"{window_s} s" for window_s in WINDOWS_S}
    for one in found.values():
        assert one["usable"], one
        assert one["method"] == "ringdown"
        assert one["frequency_hz"] == pytest.approx(frequency, rel=5e-4)
        assert 0.95 * q_low <= one["q"] <= 1.05 * q_high
        assert one["q_low"] < q_high
        assert one["q_high"] > q_low
