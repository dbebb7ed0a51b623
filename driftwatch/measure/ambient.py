"""Resonance under random excitation: frequency, Q and their covariance from windows of a zoomed band.

See `whittle` for the model, `detection` for the start and for the question whether there is a mode at all, `scoring`
for the search of the optimum. Every row of a batch is treated alone, in elementwise operations and in reductions over
its own numbers: a window's result is the same to the last bit whatever else is in the batch.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft as transforms

from driftwatch.measure import detection, residuals
from driftwatch.measure.scoring import Optimum, Prior, maximise
from driftwatch.measure.whittle import (
    FLOOR,
    LN_G,
    LN_P,
    TILT,
    WN,
    Array,
    Lines,
    Quiet,
    cumulated,
    lines_of,
    pool,
)

FEWEST_LINES = 8
"""Lines inside the search band below which nothing is fitted."""

MISFIT_P = 1e-4
"""Below this p-value of the residual test a window is called a misfit."""

WIDEST = 0.5
"""Half-power width over the search band's width from which on a resonance is too wide for its band."""

NARROWEST = 1.0
"""Half-power width in lines (gT/pi) below which a window does not resolve a resonance."""

SHARED_Q = 0.3
"""Share of the standard deviation of ln q that windows have in common, so that no average removes it: where the noise
lies far below the resonance its guessed floor narrows the peak. Measured: 0.35 at 40 dB in a band of +-3 half-power
widths, 0.2 at 40 dB in +-6 widths, 0.16 and less at 20 dB."""

_TILT_OCTAVE = 2.0  # standard deviation of the floor's slope: a power of frequency, 2 being 6 dB an octave
_FLOOR_SPREAD = 2.5  # standard deviation of the log floor about its first guess,
_FLOOR_SHARE = 0.07  # which is this much of the least section's mean: most of that is the resonance's own tail
_ROUGH, _FINE = 1.0, 0.15  # standard deviations: when to pool anew, when to stop
_ROUGH_MOST, _FINE_MOST = 2, 10  # evaluations of the model
_PLAIN = (1e-25, 1e30)  # mean of squares that single precision holds with all their spread
_ROWS = 128  # windows at a time: their arrays stay in the cache
_FIGURES = (
    "frequency_hz",
    "ln_q",
    "ln_frequency_std",
    "ln_q_std",
    "correlation",
    "level",
    "snr_db",
    "fit_p",
    "gain",
    "converged",
)


@dataclass(frozen=True, slots=True)
class AmbientFit:
    """Fits of a batch of windows; every array has shape (windows,), NaN where nothing could be fitted."""

    frequency_hz: Array  # undamped natural frequency fn
    ln_q: Array  # ln of the quality factor 1/(2 zeta)
    ln_frequency_std: Array  # standard uncertainty of ln fn
    ln_q_std: Array  # standard uncertainty of ln q; the 95 % interval is q exp(+-1.96 ln_q_std)
    correlation: Array  # between ln fn and ln q
    level: Array  # rms in the search band in the channel's own unit, before the conversion to velocity
    snr_db: Array  # fitted signal variance over noise variance in the search band
    fit_p: Array  # p-value of the residual test
    gain: Array  # gain in log-likelihood over a floor alone
    converged: NDArray[np.bool_]
    reasons: tuple[tuple[str, ...], ...]  # why a fit is not to be used, words of `records.REASONS`; empty: usable


def fit(
    windows: NDArray[np.complexfloating],
    rate_hz: float,
    centre_hz: float,
    search_hz: tuple[float, float],
    velocity_power: int = 0,
    blanked: NDArray[np.bool_] | None = None,
) -> AmbientFit:
    """Fit one resonance to each of a batch of windows.

    Parameters
    ----------
    windows
        Shape (windows, samples), complex baseband of the zoom, converted to velocity.
    rate_hz
        Rate of the baseband.
    centre_hz
        The baseband's zero frequency.
    search_hz
        Lowest and highest frequency that is looked at; the zoom must be flat in between.
    velocity_power
        k of the zoom's conversion (i w/wc)^k: colours white measurement noise, and is undone for `level`.
    blanked
        Shape of `windows`: samples that are not to be used, such as an impact and its decay. Each blank should be
        long against the resonance's memory and all of them less than half the window.

    Returns
    -------
    AmbientFit
        Windows that cannot be fitted carry NaN and a reason; data never raise.

    Raises
    ------
    ValueError
        When the shapes or frequencies contradict each other.
    """
    _check(windows, rate_hz, centre_hz, search_hz)
    lines = lines_of(windows.shape[1], rate_hz, centre_hz, search_hz, velocity_power)
    quiet = _quiet(windows, blanked)
    if blanked is not None:
        windows = np.where(blanked, np.zeros(1, windows.dtype), windows)
    figures = np.full((len(_FIGURES), windows.shape[0]), np.nan)
    reasons: list[tuple[str, ...]] = []
    for begin in range(0, windows.shape[0], _ROWS):
        rows = slice(begin, begin + _ROWS)
        reasons += _fit_rows(windows[rows], lines, quiet.rows(np.arange(len(windows))[rows]), figures[:, rows])
    return _assembled(figures, tuple(reasons))


def _assembled(figures: Array, reasons: tuple[tuple[str, ...], ...]) -> AmbientFit:
    column = dict(zip(_FIGURES, figures, strict=True))
    return AmbientFit(
        frequency_hz=column["frequency_hz"],
        ln_q=column["ln_q"],
        ln_frequency_std=column["ln_frequency_std"],
        ln_q_std=column["ln_q_std"],
        correlation=column["correlation"],
        level=column["level"],
        snr_db=column["snr_db"],
        fit_p=column["fit_p"],
        gain=column["gain"],
        converged=column["converged"] == 1.0,
        reasons=reasons,
    )


def _quiet(windows: NDArray[np.complexfloating], blanked: NDArray[np.bool_] | None) -> Quiet:
    """Return how much of each window is not blanked, and in how many pieces."""
    if blanked is None:
        return Quiet.whole(windows.shape[0])
    if blanked.shape != windows.shape:
        raise ValueError(f"blanked has shape {blanked.shape}; expected that of the windows, {windows.shape}")
    left = ~blanked
    begins = left[:, :1].astype(np.float64) + np.sum(left[:, 1:] & blanked[:, :-1], axis=1, keepdims=True)
    share = np.sum(left, axis=1, keepdims=True) / windows.shape[1]
    return Quiet(np.maximum(share, 1.0 / windows.shape[1]), np.maximum(begins, 1.0))


def _fit_rows(
    windows: NDArray[np.complexfloating], lines: Lines, quiet: Quiet, figures: Array
) -> list[tuple[str, ...]]:
    """Fit a few windows; fill in their figures, shape (figures, windows), and return their reasons."""
    if lines.count < FEWEST_LINES:
        return [("not_resolved",)] * windows.shape[0]
    power, sums, mean = _periodogram(transforms.fft(windows, axis=1), lines)
    finite = np.isfinite(mean)
    good = np.flatnonzero(finite & (mean > 0.0))
    reasons: list[tuple[str, ...]] = [("no_mode",) if known else ("not_finite",) for known in finite]
    figures[_FIGURES.index("level"), mean == 0.0] = 0.0
    if good.size == 0:
        return reasons
    if good.size < mean.size:
        power, sums, mean, quiet = power[good], sums[good], mean[good], quiet.rows(good)
    figures[:, good], words = _fit_power(power, sums, mean, lines, quiet)
    for row, why in zip(good, words, strict=True):
        reasons[row] = why
    return reasons


def _periodogram(spectrum: NDArray[np.complexfloating], lines: Lines) -> tuple[NDArray[np.floating], Array, Array]:
    """Return |transform|^2 / (length rate), unit^2/Hz, on the in-band lines.

    Returns
    -------
    power : shape (windows, lines)
        Divided by its mean, in the spectrum's own precision.
    sums : shape (windows, lines + 1)
        Its running sums.
    mean : shape (windows,)
    """
    with np.errstate(invalid="ignore", over="ignore", under="ignore", divide="ignore"):
        power = _squares(spectrum, lines)
        sums = cumulated(power)
        mean = sums[:, -1] / lines.count
        extreme = np.flatnonzero(~((mean > _PLAIN[0]) & (mean < _PLAIN[1])))
        if extreme.size:  # squares beyond single precision's range
            exact = _squares(spectrum[extreme].astype(np.complex128), lines)
            sums[extreme] = cumulated(exact)
            mean[extreme] = sums[extreme, -1] / lines.count
            power[extreme] = exact / mean[extreme, None]
        each = np.where(mean > 0.0, 1.0 / mean, 0.0)
        unit = each.astype(power.dtype)
        unit[extreme] = 1.0
        power *= unit[:, None]
        sums *= each[:, None]
    return power, sums, mean / (lines.length * lines.rate_hz)


def _squares(spectrum: NDArray[np.complexfloating], lines: Lines) -> NDArray[np.floating]:
    """Return |spectrum|^2 on the in-band lines, shape (windows, lines)."""
    power = np.empty((spectrum.shape[0], lines.count), dtype=spectrum.real.dtype)
    below = max(0, min(-lines.first, lines.count))  # lines under the centre lie at the transform's end
    for into, begin in ((slice(0, below), lines.first + lines.length), (slice(below, None), max(lines.first, 0))):
        part = power[:, into]
        slab = spectrum[:, begin : begin + part.shape[1]]
        np.multiply(slab.real, slab.real, out=part)
        part += slab.imag * slab.imag
    return power


def _fit_power(
    power: NDArray[np.floating], sums: Array, mean: Array, lines: Lines, quiet: Quiet
) -> tuple[Array, list[tuple[str, ...]]]:
    """Fit periodograms of positive finite mean; return figures, shape (figures, rows), and reasons."""
    theta = detection.start(sums, lines)
    prior = _prior(theta, lines)
    pools = pool(sums, lines, quiet, theta[:, WN], np.exp(theta[:, LN_G]))
    rough = maximise(theta, pools, prior, lines, _ROUGH, _ROUGH_MOST)
    pools = pool(sums, lines, quiet, rough.theta[:, WN], np.exp(rough.theta[:, LN_G]))
    best = maximise(rough.theta, pools, prior, lines, _FINE, _FINE_MOST)
    gain = best.likelihood - detection.floor_only(pools, prior.precision[1])
    fit_p = residuals.p_value(residuals.largest(power, best.theta, lines, quiet), lines.count, best.model, pools)
    level = np.sqrt(0.5 * mean / quiet.share[:, 0] * _own_unit(power, lines) * lines.spacing / (2 * np.pi))
    values = np.stack((*_moments(best), level, _snr_db(best.theta, lines), fit_p, gain, best.converged))
    return values, _reasons(best, gain, fit_p, lines)


def _own_unit(power: NDArray[np.floating], lines: Lines) -> Array:
    """Return the sum of the periodogram, whose mean is 1, before the conversion to velocity."""
    if lines.velocity_power == 0:
        return np.full(power.shape[0], float(lines.count))
    return np.asarray(np.sum(power * lines.own_unit.astype(power.dtype), axis=1), dtype=np.float64)


def _snr_db(theta: Array, lines: Lines) -> Array:
    """Return signal variance over noise variance in the band, in dB, of the velocity."""
    wn, g = theta[:, WN], np.exp(theta[:, LN_G])
    ends = [np.arctan((edge - wn * wn / edge) / (2.0 * g)) for edge in (lines.low, lines.high)]
    signal = np.exp(theta[:, LN_P]) * np.maximum(ends[1] - ends[0], 1e-300) / np.pi
    level, lift = np.exp(theta[:, FLOOR]), np.exp(theta[:, TILT])
    shares = (level * lift) * float(np.mean(lines.upper)) + (level / lift) * float(np.mean(lines.lower))
    return np.asarray(10.0 * np.log10(signal / (shares * (lines.high - lines.low) / (2 * np.pi))), dtype=np.float64)


def _prior(theta: Array, lines: Lines) -> Prior:
    tilt = _TILT_OCTAVE * 0.5 * np.log(lines.high / lines.low)
    mean = np.stack((theta[:, FLOOR] + np.log(_FLOOR_SHARE), np.zeros(theta.shape[0])), axis=1)
    return Prior(mean, np.array([_FLOOR_SPREAD**-2, tilt**-2]))


def _moments(best: Optimum) -> tuple[Array, Array, Array, Array, Array]:
    """Return fn in Hz, ln q = ln(wn/2g), standard deviations of ln fn and ln q, and their correlation."""
    wn, ln_g = best.theta[:, WN], best.theta[:, LN_G]
    covariance = np.linalg.inv(best.information)
    scale = best.g / wn  # from wn/g to ln wn
    frequency = covariance[:, WN, WN] * scale**2
    both = frequency - covariance[:, WN, LN_G] * scale
    q = both - covariance[:, WN, LN_G] * scale + covariance[:, LN_G, LN_G]
    ln_q = np.log(0.5 * wn) - ln_g
    return wn / (2 * np.pi), ln_q, np.sqrt(frequency), np.sqrt(q), both / np.sqrt(frequency * q)


def _reasons(best: Optimum, gain: Array, fit_p: Array, lines: Lines) -> list[tuple[str, ...]]:
    """Return why each row is not to be used."""
    wn, g = best.theta[:, WN], np.exp(best.theta[:, LN_G])
    against = {
        "no_mode": gain < detection.DETECTION_GAIN,
        "not_converged": ~best.converged,
        "band_edge": (wn - g < lines.low) | (wn + g > lines.high),
        "too_wide": 2.0 * g > WIDEST * (lines.high - lines.low),
        "not_resolved": g * lines.seconds < NARROWEST * np.pi,
        "misfit": fit_p < MISFIT_P,
    }
    reasons: list[tuple[str, ...]] = [()] * wn.size
    table = np.stack(list(against.values()), axis=1)
    for row in np.flatnonzero(np.any(table, axis=1)).tolist():
        reasons[row] = tuple(word for word, true in zip(against, table[row], strict=True) if true)
    return reasons


def _check(
    windows: NDArray[np.complexfloating], rate_hz: float, centre_hz: float, search_hz: tuple[float, float]
) -> None:
    low, high = search_hz
    if windows.ndim != 2 or windows.shape[1] < 2:
        raise ValueError(f"windows have shape {windows.shape}; expected (windows, samples)")
    if not rate_hz > 0.0:
        raise ValueError(f"baseband rate {rate_hz} Hz; expected a positive rate")
    if not (0.0 < low < high and centre_hz - rate_hz / 2 <= low and high <= centre_hz + rate_hz / 2):
        raise ValueError(
            f"search band {low} to {high} Hz; expected 0 < low < high inside the baseband, "
            f"{centre_hz - rate_hz / 2} to {centre_hz + rate_hz / 2} Hz"
        )
