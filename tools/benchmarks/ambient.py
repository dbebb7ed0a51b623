"""Ambient fits against the bound of their band: spread, bias and coverage over trials of known truth.

Search bands reach 6 half-power widths to either side of the resonance. Every window counts, the unusable too.
"""

from __future__ import annotations

from collections.abc import Iterator
from itertools import chain

import numpy as np
from driftwatch.measure.ambient import AmbientFit, fit
from driftwatch.measure.limits import ambient_bound
from numpy.typing import NDArray

from benchmarks.bars import Row, Size, bias_ok, coverage_ok, spread_ok
from benchmarks.response import Case, windows

CASES = (
    Case(900.0, 40.0, 4.0, 8000),
    Case(2400.0, 150.0, 4.0, 12000),
    Case(180.0, 25.0, 10.0, 1600),
    Case(5000.0, 2000.0, 20.0, 12000),
    Case(900.0, 40.0, 4.0, 8000, velocity_power=-1),
)
SMALL = (Case(900.0, 40.0, 4.0, 4000), Case(180.0, 25.0, 10.0, 800), Case(900.0, 40.0, 4.0, 4000, velocity_power=-1))
SNR_DB = (20.0, 6.0)
SPREAD = 1.10  # rms error over the bound
BIAS = 0.2  # standard deviations

_BARS = 6  # of each cell


def run(size: Size) -> Iterator[Row]:
    """Yield the figures of every cell."""
    cases = CASES if size.full else SMALL
    alpha = size.family / (_BARS * len(cases) * len(SNR_DB))
    for case in cases:
        fits: list[list[AmbientFit]] = [[] for _ in SNR_DB]
        for batch in windows(case, SNR_DB, size.trials):
            for kept, part in zip(fits, batch, strict=True):
                band = case.band
                kept.append(fit(part, band.rate_hz, band.centre_hz, band.search_hz, band.velocity_power))
        for snr, kept in zip(SNR_DB, fits, strict=True):
            yield from _cell(case, snr, kept, alpha)


def _cell(case: Case, snr: float, fits: list[AmbientFit], alpha: float) -> Iterator[Row]:
    """Yield the figures of one case at one signal-to-noise ratio."""
    name = f"{case}, {snr:g} dB"
    bound = ambient_bound(case.frequency_hz, case.q, case.window_s, case.search_hz, snr)
    frequency = np.log(np.concatenate([part.frequency_hz for part in fits]) / case.frequency_hz)
    frequency_std = np.concatenate([part.ln_frequency_std for part in fits])
    q = np.concatenate([part.ln_q for part in fits]) - np.log(case.q)
    q_std = np.concatenate([part.ln_q_std for part in fits])
    yield from _figures(name, "ln fn", frequency, frequency_std, bound.ln_frequency_std, alpha)
    yield from _figures(name, "ln Q", q, q_std, bound.ln_q_std, alpha)
    usable = [not words for words in chain.from_iterable(part.reasons for part in fits)]
    yield Row(name, "usable", float(np.mean(usable)), "", None)
    yield Row(name, "fit_p under 0.05", float(np.mean(np.concatenate([part.fit_p for part in fits]) < 0.05)), "", None)


def _figures(
    case: str, what: str, error: NDArray[np.float64], std: NDArray[np.float64], bound: float, alpha: float
) -> Iterator[Row]:
    spread = float(np.sqrt(np.mean(np.square(error))) / bound)
    yield Row(case, f"{what}: rms error / bound", spread, f"<= {SPREAD}", spread_ok(error, bound, SPREAD, alpha))
    limit = BIAS * float(np.std(error))
    bias = float(np.mean(error) / np.std(error))
    yield Row(case, f"{what}: bias / std", bias, f"within +-{BIAS}", bias_ok(error, limit, alpha))
    hits = int(np.count_nonzero(np.abs(error) <= 1.96 * std))
    good = coverage_ok(hits, error.size, 0.95, 0.95, alpha)
    yield Row(case, f"{what}: coverage of 95 % intervals", hits / error.size, "0.95", good)
