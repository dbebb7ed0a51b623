"""Whether noise starts a track, and whether a mode is found that is not where it was expected.

The detection statistic (`AmbientFit.gain`) of windows of noise has a tail near exp(-x). Its scale is the mean excess
over a level that a few per cent of the windows pass; the tail is carried on to the threshold with that scale, and with
its confidence limits. Every window over the threshold is counted as a false track, usable or not.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from driftwatch.measure.ambient import AmbientFit, fit
from driftwatch.measure.detection import DETECTION_GAIN
from numpy.typing import NDArray
from scipy import stats

from benchmarks.bars import Row, Size
from benchmarks.response import Case, noise_windows, windows

THIRTY_DAYS = 648_000
"""Windows of 4 s in 30 days."""

NOISE = Case(900.0, 45.0, 4.0, 2400, widths=4.0)  # 820 to 980 Hz
SLOPES = {"white noise": 0.0, "noise rising 6 dB/octave": 1.0, "noise falling 6 dB/octave": -1.0}
OFF = (
    Case(900.0, 40.0, 4.0, 4000, off=5.0),
    Case(900.0, 40.0, 4.0, 4000, off=-5.0),
    Case(2400.0, 150.0, 4.0, 8000, off=5.0),
)
OFF_SNR_DB = 6.0
WITHIN = 3  # windows
MISSED = 1e-3  # share of modes that may stay hidden that long
_SHARE = 0.03  # of the windows beyond the level where the tail begins


def run(size: Size) -> Iterator[Row]:
    """Yield the statistic's law, the expected false tracks, and the share of displaced modes found."""
    alpha = size.family / (len(SLOPES) + len(OFF))
    for name, slope in SLOPES.items():
        gains = [_fit(NOISE, part).gain for part in noise_windows(NOISE, slope, 10 * size.trials)]
        yield from _tail(f"{name}, 4 s, 160 Hz", np.concatenate(gains), alpha)
    for case in OFF if size.full else OFF[:1]:
        yield _found(case, size.trials, alpha)


def _fit(case: Case, part: NDArray[np.complex64]) -> AmbientFit:
    band = case.band
    return fit(part, band.rate_hz, band.centre_hz, band.search_hz, band.velocity_power)


def _tail(case: str, gains: NDArray[np.float64], alpha: float) -> Iterator[Row]:
    """Yield the tail's scale and the false tracks in 30 days, with the confidence limits that the scale leaves."""
    level = float(np.quantile(gains, 1.0 - _SHARE))
    excess = gains[gains > level] - level
    scale = float(np.mean(excess))
    # the sum of exponential excesses is gamma distributed: limits for their scale
    likely, best, worst = (
        THIRTY_DAYS * _SHARE * float(np.exp(-(DETECTION_GAIN - level) / limit))
        for limit in (scale, *(np.sum(excess) / stats.gamma.ppf((1 - alpha / 2, alpha / 2), excess.size)))
    )
    yield Row(case, f"largest gain of {gains.size}", float(np.max(gains)), "", None)
    yield Row(case, f"mean excess of gain over {level:.2f}", scale, "1 for exp(-x)", None)
    fit_p = float(stats.kstest(excess, "expon", args=(0.0, scale)).pvalue)
    yield Row(case, "p of an exponential tail", fit_p, "", None)
    yield Row(case, "false tracks in 30 days", likely, "<= 1", best <= 1.0)
    yield Row(case, "the same, upper confidence limit", worst, "", None)


def _found(case: Case, trials: int, alpha: float) -> Row:
    """Return the share of trials in which one of the first windows shows the mode where it is."""
    seen: list[NDArray[np.bool_]] = []
    for (part,) in windows(case, (OFF_SNR_DB,), WITHIN * trials):
        result = _fit(case, part)
        error = np.abs(np.log(result.frequency_hz / case.frequency_hz)) / result.ln_frequency_std
        seen.append((error < 5.0) & np.array([not words for words in result.reasons]))
    whole = np.concatenate(seen)[: WITHIN * trials].reshape(-1, WITHIN)
    missed = int(np.count_nonzero(~np.any(whole, axis=1)))
    good = bool(stats.binom.sf(missed - 1, whole.shape[0], MISSED) > alpha)
    name = f"{case.frequency_hz:g} Hz, Q {case.q:g}, {case.off:+g} widths off, {OFF_SNR_DB:g} dB"
    return Row(name, f"found within {WITHIN} windows", 1.0 - missed / whole.shape[0], f">= {1 - MISSED}", good)
