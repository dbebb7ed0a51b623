"""Ringdown: frequency and Q from one free decay.

The raw samples are cut a little after the onset, transformed, and one decaying sinusoid is fitted to the bins of the
search band with its exact finite sum (`decay_bins`). The onset is found by likelihood in the same band: of a tone that
begins at n0 with the pole already known, n0 and the amplitude free.

Where the residuals contradict the model, because other modes and the blow itself still sound at first, a later cut
and a smooth background in the bins are tried in a fixed order, and the first that fits is taken. Real decays seen 40 dB
and more above the noise often contradict one pole whatever is tried, by damping that depends on the amplitude or by
faint neighbours, and still tell that pole well: then the remainder widens the uncertainties (`decay_spread`), and only
a large one makes the fit unusable.

Uncertainties hold for noise that is flat over the search band. Where the noise is the mode's own random response, which
is strongest at its peak, estimates scatter up to 2.7 times more than the residuals tell; then the stretch before the
onset, where it is given, tells how much more.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import special

from driftwatch.measure.decay_attempts import (
    CUT,
    FEWEST_BINS,
    MISFIT_P,
    SHORTEST,
    Attempt,
    attempt_at,
    best_attempt,
    rough_pole,
)
from driftwatch.measure.decay_bins import Reals
from driftwatch.measure.decay_checks import chance, decrement_q, excess_p
from driftwatch.measure.decay_onset import refined_onset, steepest_rise
from driftwatch.measure.decay_spread import Quiet, log_covariance, remainder_gain, widening

GUARD = 13.0
"""What `fit_baseband` leaves out after the onset, in reciprocal bandwidths: the reach of the band edge's ringing."""

REFUSED_P = 1e-4
"""p-value below which the fit that was taken is not usable, unless what it leaves is small."""

SMALL_REMAINDER = 0.05
"""Amplitude of what the fit leaves over that of the decay, up to which a contradicted fit stays usable.

Two modes one half-power width apart or more, the fainter of 0.3 of the amplitude or more, leave 0.07 or more nine times
in ten; the real decays that are contradicted and right leave up to 0.04."""

COARSE = 0.03
"""Standard deviation of ln Q above which a fit that leaves more than the noise before the onset is not usable."""

NO_MODE_P = 0.01
"""Probability that noise alone looks so much like a decay, above which there is none."""


@dataclass(frozen=True, slots=True)
class RingdownFit:
    """One decay's pole, or why there is none."""

    frequency_hz: float | None  # undamped natural frequency fn
    q: float | None
    std_ln_f: float | None
    std_ln_q: float | None
    correlation: float | None  # between ln fn and ln q
    q_low: float | None  # 95 % interval of q, Student's t
    q_high: float | None
    level: float | None  # rms in the search band of the record used
    snr_db: float | None  # fitted signal variance over noise variance in the search band, of the record used
    fit_p: float | None  # p-value of the residual test
    onset_sample: float | None  # where the decay begins, index into the samples given
    onset_std: float | None  # samples
    first_sample: int  # index of the first sample used
    samples: int  # number used
    amplitude: float | None  # of the tone at the first sample used
    decrement_q: float | None  # cross-check: Q from the slope of the log envelope
    background: bool  # a smooth background was fitted along
    usable: bool
    reasons: tuple[str, ...]  # see `records.REASONS`


def context_s(search_hz: tuple[float, float]) -> float:
    """Return how many seconds before an onset `fit` wants to see: four reciprocal bandwidths."""
    return 4.0 / (search_hz[1] - search_hz[0])


def fit(
    samples: NDArray[np.floating],
    rate_hz: float,
    search_hz: tuple[float, float],
    onset_hint: float | None = None,
    before: Quiet | None = None,
) -> RingdownFit:
    """Fit one mode's free decay in raw samples that hold some noise, an onset, and the decay up to their end.

    Displacement, velocity and acceleration give the same result: a free decay has one pole whatever the derivative.

    Parameters
    ----------
    samples
        Shape (n,), any unit.
    rate_hz
        Sample rate.
    search_hz
        Where the mode is searched for.
    onset_hint
        Index of the onset to about two reciprocal bandwidths; left out: the steepest rise of the band's envelope.
    before
        Baseband from long before the onset, which tells noise that is not flat; left out: it is taken as flat.

    Raises
    ------
    ValueError
        When the samples are not one row, the band is not inside 0 .. rate/2, or the hint not inside the samples.
    """
    _check(samples, rate_hz, search_hz, onset_hint)
    trouble = _trouble(samples, rate_hz, search_hz)
    if trouble:
        return _nothing(len(samples), trouble)
    data = np.asarray(samples, dtype=np.float64)
    hint = steepest_rise(data, rate_hz, search_hz) if onset_hint is None else onset_hint
    return _fit_after(data, rate_hz, search_hz, hint, before)


def fit_baseband(
    stream: NDArray[np.complexfloating],
    rate_hz: float,
    centre_hz: float,
    search_hz: tuple[float, float],
    onset: float,
) -> RingdownFit:
    """Fit one mode's free decay in its zoomed stream: for decays so long that raw samples would be a burden.

    The first `GUARD` reciprocal bandwidths after the onset, in which the band edge rings, are left out: nothing against
    a decay of minutes, but a loss for short ones, which `fit` serves.

    Parameters
    ----------
    stream
        Shape (n,), complex baseband of amplitude A for a tone of amplitude A, up to where the decay is to be used.
    rate_hz, centre_hz
        Its rate, and the frequency of its zero.
    search_hz
        The band that the zoom passes unchanged.
    onset
        Index of the onset into the stream.

    Raises
    ------
    ValueError
        When the stream is not one row, the band is not inside the stream's, or the onset not inside the samples.
    """
    band = search_hz[0] - centre_hz, search_hz[1] - centre_hz
    if stream.ndim != 1:
        raise ValueError(f"stream of shape {stream.shape}: expected one row of samples")
    if not -rate_hz / 2 <= band[0] < band[1] <= rate_hz / 2:
        raise ValueError(f"search band {search_hz} Hz: expected inside {centre_hz} -+ {rate_hz / 2} Hz, the stream's")
    if not 0.0 <= onset < len(stream):
        raise ValueError(f"onset {onset}: expected an index into the {len(stream)} samples")
    trouble = _trouble(stream, rate_hz, band)
    if trouble:
        return _nothing(len(stream), trouble)
    data = np.asarray(stream, dtype=np.complex128)
    begin = math.ceil(onset + GUARD * rate_hz / (band[1] - band[0]))
    rough = rough_pole(data, rate_hz, band, begin)
    plain = None if rough is None else attempt_at(data, rate_hz, band, float(begin), rough, 0.0)
    if plain is None:
        return _nothing(len(stream), ("short",))
    best = best_attempt(data, rate_hz, band, float(begin), plain)
    pole = replace(best.pole, damped=best.pole.damped + 2.0 * math.pi * centre_hz)
    return _assemble(replace(best, pole=pole), search_hz, onset, None)


def _fit_after(
    data: Reals, rate_hz: float, search_hz: tuple[float, float], hint: float, before: Quiet | None
) -> RingdownFit:
    reciprocal = rate_hz / (search_hz[1] - search_hz[0])
    rough = rough_pole(data, rate_hz, search_hz, round(hint + reciprocal))
    if rough is None:
        return _nothing(len(data), ("short",))
    onset, onset_std = refined_onset(data, rate_hz, search_hz, hint, rough)
    plain = attempt_at(data, rate_hz, search_hz, onset, rough, CUT)
    if plain is None:
        return _nothing(len(data), ("short",))
    best = best_attempt(data, rate_hz, search_hz, onset, plain)
    quiet = data[: max(0, math.floor(onset - min(max(2.0 * onset_std, 0.1 * reciprocal), reciprocal)))]
    excess = excess_p(best.bins, best.pole, quiet, search_hz)
    return _assemble(best, search_hz, onset, onset_std, excess, widening(best.bins, best.pole, before, search_hz))


def _assemble(
    attempt: Attempt,
    search_hz: tuple[float, float],
    onset: float,
    onset_std: float | None,
    excess: float = 1.0,
    noise: tuple[float, float] | None = None,
) -> RingdownFit:
    bins, pole = attempt.bins, attempt.pole
    omega = math.hypot(pole.g, pole.damped)
    frequency, q = omega / (2.0 * math.pi), omega / (2.0 * pole.g)
    contradicted = attempt.p < MISFIT_P or excess < MISFIT_P
    gain, freedom = (1.0, float(pole.freedom)) if noise is None else noise
    covariance = log_covariance(pole) * (gain + (remainder_gain(pole) if contradicted else 0.0))
    std_f, std_q = math.sqrt(covariance[0, 0]), math.sqrt(covariance[1, 1])
    # Where nothing is known of q its interval is all that floating point can say.
    reach = min(float(special.stdtrit(freedom, 0.975)) * std_q, 50.0)
    ratio = attempt.remainder
    reasons = _reasons(attempt, frequency, q, search_hz, excess)
    return RingdownFit(
        frequency_hz=frequency,
        q=q,
        std_ln_f=std_f,
        std_ln_q=std_q,
        correlation=float(covariance[0, 1] / (std_f * std_q)) if std_f > 0.0 and std_q > 0.0 else 0.0,
        q_low=q * math.exp(-reach),
        q_high=q * math.exp(reach),
        level=bins.level,
        snr_db=-20.0 * math.log10(ratio) if 0.0 < ratio < math.inf else None,
        fit_p=attempt.p,
        onset_sample=onset,
        onset_std=onset_std,
        first_sample=attempt.first,
        samples=bins.length,
        amplitude=abs(pole.amplitude),
        decrement_q=decrement_q(bins, frequency),
        background=pole.background,
        usable=not reasons,
        reasons=reasons,
    )


def _reasons(
    attempt: Attempt, frequency: float, q: float, search_hz: tuple[float, float], excess: float
) -> tuple[str, ...]:
    pole, width, band = attempt.pole, frequency / q, search_hz[1] - search_hz[0]
    found = {
        "not_converged": not pole.converged,
        "short": attempt.bins.length * pole.g < SHORTEST * attempt.bins.rate_hz,
        "no_mode": chance(attempt.bins, attempt.pole) > NO_MODE_P,
        "band_edge": not search_hz[0] + width / 2 < frequency < search_hz[1] - width / 2,
        "too_wide": width > band / 2,
        "misfit": (attempt.p < REFUSED_P and attempt.remainder > SMALL_REMAINDER)
        or (excess < REFUSED_P and attempt.std_ln_g > COARSE),
    }
    return tuple(word for word, holds in found.items() if holds)


def _check(
    samples: NDArray[np.floating], rate_hz: float, search_hz: tuple[float, float], onset_hint: float | None
) -> None:
    if samples.ndim != 1:
        raise ValueError(f"samples of shape {samples.shape}: expected one row of samples")
    if not 0.0 < search_hz[0] < search_hz[1] < rate_hz / 2:
        raise ValueError(
            f"search band {search_hz[0]} to {search_hz[1]} Hz: expected 0 < low < high < {rate_hz / 2} Hz, half the "
            "sample rate"
        )
    if onset_hint is not None and not 0.0 <= onset_hint < len(samples):
        raise ValueError(f"onset hint {onset_hint}: expected an index into the {len(samples)} samples")


def _trouble(samples: NDArray[np.inexact], rate_hz: float, search_hz: tuple[float, float]) -> tuple[str, ...]:
    if len(samples) * (search_hz[1] - search_hz[0]) < FEWEST_BINS * rate_hz:
        return ("short",)
    if not np.all(np.isfinite(samples)):
        return ("not_finite",)
    return () if np.any(samples) else ("unexcited",)


def _nothing(samples: int, reasons: tuple[str, ...]) -> RingdownFit:
    return RingdownFit(
        frequency_hz=None,
        q=None,
        std_ln_f=None,
        std_ln_q=None,
        correlation=None,
        q_low=None,
        q_high=None,
        level=None,
        snr_db=None,
        fit_p=None,
        onset_sample=None,
        onset_std=None,
        first_sample=0,
        samples=samples,
        amplitude=None,
        decrement_q=None,
        background=False,
        usable=False,
        reasons=reasons,
    )
