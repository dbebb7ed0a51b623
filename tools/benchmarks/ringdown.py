"""Ringdown against the Cramer-Rao bound: onset found in the stream, decay cut, fitted, compared with the truth.

White noise at 48 kHz, free decays of unit amplitude at random phases and sub-sample times. The stream goes through the
zoom and the onset detector; each fit gets what a live record holds: noise, the onset, and two or five time constants.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from driftwatch.measure import limits_decay, ringdown
from driftwatch.measure.onset import Detector, detector
from driftwatch.measure.zoom import BandRequest, Zoom
from numpy.typing import NDArray
from scipy import fft, stats

from benchmarks.bars import Row, Size, coverage_ok, spread_ok

RATE_HZ = 48_000
MODES = ((900.0, 40.0), (2400.0, 150.0), (180.0, 25.0), (5000.0, 2000.0))
HALF_WIDTHS = 6.0  # of the search band to either side, in half-power widths
BARS = {40.0: (1.05, 1.20, 0.95, 0.95), 20.0: (1.10, 1.30, 0.92, 0.97)}
"""By amplitude over the noise's rms in the band, dB: factors over the two bounds, lowest and highest coverage."""

_SPACING = 24.0  # time constants from one onset to the next
_CHUNK = 25  # decays simulated at a time
_TESTS = len(MODES) * 2 * len(BARS) * 5


@dataclass(frozen=True, slots=True)
class Cell:
    """One mode at one record length and one level."""

    frequency_hz: float
    q: float
    time_constants: float
    level_db: float

    @property
    def tau(self) -> float:
        """Time constant, samples."""
        return self.q / (math.pi * self.frequency_hz) * RATE_HZ

    @property
    def search_hz(self) -> tuple[float, float]:
        """The search band."""
        half = HALF_WIDTHS * self.frequency_hz / self.q
        return self.frequency_hz - half, self.frequency_hz + half

    @property
    def density(self) -> float:
        """One-sided density of the noise."""
        return 10.0 ** (-self.level_db / 10.0) / (self.search_hz[1] - self.search_hz[0])


@dataclass(frozen=True, slots=True)
class Outcome:
    """What became of one decay."""

    found: bool  # by the onset detector
    usable: bool
    errors: tuple[float, float]  # of ln fn and ln Q
    in_band: tuple[float, float]  # their bounds from the bins fitted
    whole: tuple[float, float]  # and from the whole record
    covered: bool  # Q inside its 95 % interval


def run(size: Size) -> Iterator[Row]:
    """Measure every cell."""
    for frequency, q in MODES:
        for time_constants in (2.0, 5.0):
            for level_db in BARS:
                cell = Cell(frequency, q, time_constants, level_db)
                yield from _rows(cell, list(outcomes(cell, size.trials)), size.family / _TESTS)
    if size.full:
        yield _false_onsets(size)


def _false_onsets(size: Size) -> Row:
    """False onsets in 30 days of random response over a flat floor of equal power: the worst mixture known.

    Time constant of 20 reciprocal bandwidths, a band of 30 Hz in a stream of 87 Hz.
    """
    finder = detector(2.9, (0.0, 1.0))
    chunk, core = 1 << 20, 450
    chunks = math.ceil(30 * 86_400 * 87 / chunk)
    found = 0
    for seed in range(chunks):
        stream = _random_response(np.random.default_rng(seed), chunk, 2.9, 20.0)
        rows = np.lib.stride_tricks.sliding_window_view(stream, finder.before + core + finder.after)[::core]
        for first in range(0, len(rows), 20):
            found += sum(map(len, finder.find(np.ascontiguousarray(rows[first : first + 20]))))
    holds = bool(stats.poisson.sf(found - 1, 1.0) > size.family)
    return Row("random response, 30 days", "false onsets", found, "<= 1 expected", holds)


def _random_response(rng: np.random.Generator, length: int, rate: float, time_constant: float) -> NDArray[np.complex64]:
    """Baseband noise at `rate` times a band of 1 Hz with edges of a quarter: a resonance and a floor of equal power."""
    hz = fft.fftfreq(length) * rate
    shape = 0.5 - 0.5 * np.cos(math.pi * np.clip((0.75 - np.abs(hz)) / 0.25, 0.0, 1.0))
    line = 1.0 / (1.0 + (2.0 * math.pi * time_constant * (hz - 0.1)) ** 2)
    density = shape**2 * (line / np.mean(line[np.abs(hz) < 0.5]) + 1.0)
    white = rng.normal(size=length) + 1j * rng.normal(size=length)
    return np.asarray(fft.ifft(white * np.sqrt(density)) * math.sqrt(length), dtype=np.complex64)


def outcomes(cell: Cell, trials: int) -> Iterator[Outcome]:
    """Simulate decays of one cell, seeds 0, 1, ... by chunks, and fit each."""
    window_s = 1.0  # as a configuration would have it; it sets the width of the band edges
    zoom = Zoom(RATE_HZ, [BandRequest(cell.search_hz, window_s, window_s)])
    finder = detector(zoom.bands[0].rate_hz, cell.search_hz)
    for seed in range(math.ceil(trials / _CHUNK)):
        rng = np.random.default_rng(seed)
        count = min(_CHUNK, trials - seed * _CHUNK)
        samples, onsets, phases = _simulated(cell, count, finder.before * zoom.bands[0].decimation, rng)
        found = _found(zoom, finder, samples)
        for onset, phase in zip(onsets, phases, strict=True):
            yield _outcome(cell, samples, onset, phase, found)


def _simulated(
    cell: Cell, count: int, before: int, rng: np.random.Generator
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Samples, onsets (fractional indices) and phases."""
    spacing = _SPACING * cell.tau
    onsets = before + spacing * (0.5 + np.arange(count) + rng.uniform(0.0, 0.3, count))
    phases = rng.uniform(0.0, 2.0 * math.pi, count)
    length = math.ceil(before + spacing * (count + 1))
    samples = rng.normal(0.0, math.sqrt(cell.density * RATE_HZ / 2.0), length)
    damped = 2.0 * math.pi * cell.frequency_hz / RATE_HZ * math.sqrt(1.0 - 0.25 / cell.q**2)
    for onset, phase in zip(onsets, phases, strict=True):
        index = np.arange(math.ceil(onset), min(length, math.ceil(onset + 30.0 * cell.tau)))
        since = index - onset
        samples[index] += np.exp(-since / cell.tau) * np.cos(damped * since + phase)
    return samples, onsets, phases


def _found(zoom: Zoom, finder: Detector, samples: NDArray[np.float64]) -> NDArray[np.float64]:
    """Onsets that the detector finds, sample indices."""
    stream = zoom.stream(samples.astype(np.float32))[0]
    row = np.concatenate((stream, np.zeros(finder.after, dtype=np.complex64)))
    core = 512
    step = zoom.bands[0].decimation
    places: list[float] = []
    for start in range(0, len(row) - finder.before - finder.after, core):
        part = row[start : start + finder.before + core + finder.after]
        for onset in finder.find(part[None, :])[0]:
            position = (start + onset.position) * step
            if not places or not finder.is_repetition(position / step, places[-1] / step):
                places.append(position)
    return np.array(places)


def _outcome(
    cell: Cell, samples: NDArray[np.float64], onset: float, phase: float, found: NDArray[np.float64]
) -> Outcome:
    context = math.ceil(ringdown.context_s(cell.search_hz) * RATE_HZ)
    reach = RATE_HZ / (cell.search_hz[1] - cell.search_hz[0])
    near = found[np.abs(found - onset) < 2.0 * reach]
    start, end = math.floor(onset) - context, math.floor(onset + cell.time_constants * cell.tau) + 1
    hint = float(near[0]) - start if len(near) else None
    fit = ringdown.fit(samples[start:end], float(RATE_HZ), cell.search_hz, hint)
    if fit.frequency_hz is None or fit.q is None or fit.q_low is None or fit.q_high is None:
        raise RuntimeError(f"a decay of {cell} gave no fit: {fit.reasons}")
    since = start + fit.first_sample - onset
    turn = 2.0 * math.pi * cell.frequency_hz / RATE_HZ
    low, high = (hz * fit.samples / RATE_HZ for hz in cell.search_hz)
    bins = np.arange(math.ceil(low), math.floor(high) + 1)
    amplitude = complex(np.exp((-1.0 / cell.tau + 1j * turn) * since + 1j * phase))
    band = limits_decay.in_band(cell.frequency_hz, cell.q, amplitude, cell.density, RATE_HZ, fit.samples, bins)
    whole = limits_decay.whole_record(cell.frequency_hz, cell.q, 1.0, cell.density, RATE_HZ, end - math.ceil(onset))
    return Outcome(
        found=len(near) > 0,
        usable=fit.usable,
        errors=(math.log(fit.frequency_hz / cell.frequency_hz), math.log(fit.q / cell.q)),
        in_band=(band.ln_f, band.ln_q),
        whole=(whole.ln_f, whole.ln_q),
        covered=fit.q_low < cell.q < fit.q_high,
    )


def _rows(cell: Cell, found: list[Outcome], alpha: float) -> Iterator[Row]:
    case = f"{cell.frequency_hz:g} Hz, Q {cell.q:g}, {cell.time_constants:g} tau, {cell.level_db:g} dB"
    band_bar, whole_bar, low, high = BARS[cell.level_db]
    errors = np.array([outcome.errors for outcome in found])
    for bounds, bar, name in (
        (np.array([outcome.in_band for outcome in found]), band_bar, "in-band bound"),
        (np.array([outcome.whole for outcome in found]), whole_bar, "whole record's bound"),
    ):
        for column, quantity in enumerate(("ln fn", "ln Q")):
            ratio = errors[:, column] / bounds[:, column]
            value = float(np.sqrt(np.mean(ratio**2)))
            yield Row(case, f"rms of {quantity} over {name}", value, f"<= {bar}", spread_ok(ratio, 1.0, bar, alpha))
    hits = sum(outcome.covered for outcome in found)
    wanted = f"{low:g}" if low == high else f"{low:g} to {high:g}"
    yield Row(case, "95 % interval covers", hits / len(found), wanted, coverage_ok(hits, len(found), low, high, alpha))
    missed = sum(not outcome.found for outcome in found)
    yield Row(case, "onsets missed", missed / len(found), "<= 0.01", missed <= 0.01 * len(found))
    refused = sum(not outcome.usable for outcome in found)
    yield Row(case, "decays refused", refused / len(found), "", None)
