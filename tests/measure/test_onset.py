"""Onsets in a mode's baseband stream: what is found, what is not, and the independence of rows."""

from __future__ import annotations

import math

import numpy as np
import pytest
from driftwatch.measure.onset import Detector, Onset, detector
from driftwatch.measure.zoom import BandRequest, Zoom
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy import fft

RATE = 8000
SEARCH = (765.0, 1035.0)
FREQUENCY, Q = 900.0, 40.0  # six half-power widths to either side: the shortest decay that the band is meant for


def noise_stream(seed: int, length: int, time_constant: float, floor: float) -> NDArray[np.complex64]:
    """Gaussian noise at 1.5 times a band of 1 Hz with edges of a quarter: a resonance over a flat floor.

    `time_constant` in reciprocal bandwidths; the resonance has unit power in the band, the floor `floor`.
    """
    rng = np.random.default_rng(seed)
    hz = fft.fftfreq(length) * 1.5
    shape = 0.5 - 0.5 * np.cos(math.pi * np.clip((0.75 - np.abs(hz)) / 0.25, 0.0, 1.0))
    line = 1.0 / (1.0 + (2.0 * math.pi * time_constant * (hz - 0.1)) ** 2)
    inside = np.abs(hz) < 0.5
    density = shape**2 * (line / np.mean(line[inside]) + floor)
    white = rng.normal(size=length) + 1j * rng.normal(size=length)
    return np.asarray(fft.ifft(white * np.sqrt(density)) * math.sqrt(length), dtype=np.complex64)


def rows_of(stream: NDArray[np.complex64], finder: Detector, core: int) -> NDArray[np.complex64]:
    """Cut a stream into rows whose cores join."""
    whole = np.lib.stride_tricks.sliding_window_view(stream, finder.before + core + finder.after)
    return np.ascontiguousarray(whole[::core])


def decays(onsets: list[float], amplitudes: list[float], seconds: float) -> NDArray[np.float64]:
    """Free decays at 8 kHz, phases spread by the golden angle."""
    samples = np.zeros(round(seconds * RATE))
    for i, (onset, amplitude) in enumerate(zip(onsets, amplitudes, strict=True)):
        index = np.arange(
            math.ceil(onset * RATE), min(len(samples), math.ceil((onset + 0.4) * RATE))
        )  # 28 time constants
        since = index / RATE - onset
        tone = np.exp(-math.pi * FREQUENCY / Q * since) * np.cos(2.0 * math.pi * FREQUENCY * since + 2.4 * i)
        samples[index] += amplitude * tone
    return samples


def find_in(samples: NDArray[np.float64], core: int = 256) -> tuple[list[float], list[Onset]]:
    """Times of the onsets found by the zoom and a detector over joining cores, repetitions dropped."""
    zoom = Zoom(RATE, [BandRequest(SEARCH, 1.0, 1.0)])
    band = zoom.bands[0]
    finder = detector(band.rate_hz, SEARCH)
    padded = np.pad(zoom.stream(samples.astype(np.float32))[0], (finder.before, finder.after + core))
    times: list[float] = []
    onsets: list[Onset] = []
    for index, row in enumerate(rows_of(padded, finder, core)):
        for onset in finder.find(row[None, :])[0]:
            place = index * core + onset.position - finder.before
            if not finder.is_repetition(place, times[-1] * band.rate_hz if times else None):
                times.append(place / band.rate_hz)
                onsets.append(onset)
    return times, onsets


def band_noise(seed: int, seconds: float, level: float) -> NDArray[np.float64]:
    """White noise with the rms `level` in the search band."""
    full = level * math.sqrt(RATE / 2.0 / (SEARCH[1] - SEARCH[0]))
    return np.random.default_rng(seed).normal(0.0, full, round(seconds * RATE))


@settings(max_examples=40, deadline=None)
@given(
    seed=st.integers(0, 2**31),
    count=st.integers(1, 9),
    length=st.integers(150, 900),
    blows=st.booleans(),
)
def test_a_row_has_the_same_onsets_to_the_bit_whatever_rows_are_beside_it(
    seed: int, count: int, length: int, blows: bool
) -> None:
    finder = detector(1.7, (0.0, 1.0))
    rng = np.random.default_rng(seed)
    rows = (rng.normal(size=(count, length)) + 1j * rng.normal(size=(count, length))).astype(np.complex64)
    if blows:
        at = rng.integers(0, length - 20, count)
        for row, start in zip(rows, at, strict=True):
            row[start:] += 30.0 * np.exp(-np.arange(length - start) / 9.0).astype(np.complex64)
    together = finder.find(rows)
    assert together == [finder.find(row[None, :])[0] for row in rows]
    assert together == [found[0] for found in (finder.find(rows[i : i + 1].copy()) for i in range(count))]


@pytest.mark.parametrize(
    ("time_constant", "floor"), [(0.0, 1.0), (3.8, 0.0), (3.8, 1.0), (20.0, 0.03), (20.0, 1.0), (300.0, 0.1)]
)
def test_random_excitation_makes_no_onset(time_constant: float, floor: float) -> None:
    """At most one false onset in 30 days: the bench counts them over 2.3e8 samples of the worst mixture.

    Here 3e5 samples a case: at one in 2.3e8 the false alarm of all six cases together is 0.8 %; measured it is less,
    since the gain's tail in 1e8 samples ends at 29 of the 35 asked for.
    """
    finder = detector(1.5, (0.0, 1.0))
    stream = noise_stream(0, 300_000, time_constant, floor)
    assert not any(finder.find(rows_of(stream, finder, 450)))


def test_blows_20_db_over_flat_noise_are_found_in_the_shortest_decay_a_band_shows() -> None:
    """At least 99 in 100. 400 blows; by the binomial law more than 13 missed has probability 5e-5 at 1 in 100."""
    blows = [1.0 + 0.45 * i for i in range(400)]
    samples = decays(blows, [1.0] * 400, 182.0) + band_noise(0, 182.0, 0.1)
    found = np.array(find_in(samples)[0])
    reach = 1.0 / (SEARCH[1] - SEARCH[0])
    missed = sum(not np.any(np.abs(found - blow) < 2.0 * reach) for blow in blows)
    assert missed <= 13
    assert len(found) <= 400 + 2  # beside the blows nothing but the stream's own ends


def test_position_is_the_blow_s_to_a_tenth_of_a_reciprocal_bandwidth() -> None:
    """At 40 dB the noise moves it by about 0.03; the interpolation between samples by as much again."""
    blows = [1.0, 1.7003, 2.4007, 3.1011]
    times, onsets = find_in(decays(blows, [1.0] * 4, 4.0) + band_noise(1, 4.0, 0.01))
    assert times == pytest.approx(blows, abs=0.1 / (SEARCH[1] - SEARCH[0]))
    assert [onset.jump for onset in onsets] == pytest.approx([1.0] * 4, rel=0.4)  # the decay has begun meanwhile


@pytest.mark.parametrize("delay", [1.0, 1.5, 3.0])
def test_a_blow_on_the_decay_of_the_one_before_is_found(delay: float) -> None:
    """Equal blows, `delay` time constants apart (14 ms), at several phases."""
    tau = Q / (math.pi * FREQUENCY)
    for first in (1.0, 1.0004, 1.0008):
        blows = [first, first + delay * tau]
        times, _ = find_in(decays(blows, [1.0, 1.0], 2.0) + band_noise(2, 2.0, 0.01))
        assert times == pytest.approx(blows, abs=1.0 / (SEARCH[1] - SEARCH[0]))


def test_the_band_edge_s_ringing_before_a_loud_blow_is_no_onset() -> None:
    """100 dB: the ringing stands far above the noise for a dozen reciprocal bandwidths to either side."""
    times, _ = find_in(decays([1.0], [1.0], 2.0) + band_noise(3, 2.0, 1e-5))
    assert times == pytest.approx([1.0], abs=0.5 / (SEARCH[1] - SEARCH[0]))


def test_blows_at_the_seam_of_two_cores_are_found_once() -> None:
    zoom = Zoom(RATE, [BandRequest(SEARCH, 1.0, 1.0)])
    seam = 256 / zoom.bands[0].rate_hz
    for offset in np.linspace(-3.0, 3.0, 13) / zoom.bands[0].rate_hz:
        blow = 2.0 * seam + offset
        times, _ = find_in(decays([blow], [1.0], 4.0 * seam) + band_noise(4, 4.0 * seam, 0.03))
        assert times == pytest.approx([blow], abs=0.5 / (SEARCH[1] - SEARCH[0]))


def test_silence_and_a_steady_tone_make_no_onset() -> None:
    finder = detector(1.7, (0.0, 1.0))
    silence = np.zeros((1, 500), dtype=np.complex64)
    tone = np.exp(0.7j * np.arange(500)).astype(np.complex64)[None, :]
    assert finder.find(silence) == [[]]
    assert finder.find(tone) == [[]]


def test_rows_without_a_core_and_bands_wider_than_the_stream_are_refused() -> None:
    finder = detector(1.7, (0.0, 1.0))
    with pytest.raises(ValueError, match="samples a row"):
        finder.find(np.zeros((1, finder.before + finder.after), dtype=np.complex64))
    with pytest.raises(ValueError, match="0 < width <= rate"):
        detector(100.0, (800.0, 950.0))
