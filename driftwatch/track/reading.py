"""What the filter sees of a measurement: ln fn and ln q with their covariance, and the span of time they speak for."""

from __future__ import annotations

import math
from dataclasses import dataclass

from driftwatch.records import NS, Measurement, Method

_SMALLEST_NEW_PART = 0.01  # share of a window below which it tells nothing new
_LARGEST_CORRELATION = 0.999  # a covariance must stay positive definite


@dataclass(slots=True)  # never changed; not frozen, which would cost 1.4 us each
class Reading:
    """One usable measurement in the filter's coordinates.

    A reading from a window averages over the window and so speaks for its middle; a decay weighs its frequency with
    t exp(-2 t / tau), whose mean lies one time constant after the onset. Either is `age_s` before the end.
    """

    start_ns: int  # stream time of the first sample used
    end_ns: int  # stream time of the end of the last one
    age_s: float  # how long before `end_ns` the moment lies that it speaks for
    ln_f: float  # ln(fn / 1 Hz)
    ln_q: float
    var_f: float  # of ln fn
    cov: float  # of ln fn and ln q
    var_q: float  # of ln q
    decay: bool  # from a ringdown: shares no noise with any other reading

    @property
    def window_s(self) -> float:
        """Length of the span used."""
        return (self.end_ns - self.start_ns) / NS

    @property
    def moment_ns(self) -> int:
        """Stream time that the reading speaks for."""
        return self.end_ns - round(self.age_s * NS)


def reading_of(measurement: Measurement, end_ns: int, search_hz: tuple[float, float]) -> Reading | str:
    """Return what the filter sees of a measurement, or the word that says why it must not be followed.

    Parameters
    ----------
    measurement : Measurement
    end_ns : int
        Stream time of the end of the samples it used.
    search_hz : tuple of float
        Band outside which no reading is believed.
    """
    if not measurement.usable:
        return measurement.reasons[0] if measurement.reasons else "no_mode"
    f, f_std, q, q_std = measurement.frequency_hz, measurement.frequency_std_hz, measurement.q, measurement.q_std
    if f is None or f_std is None or q is None or q_std is None:
        return "not_converged"
    if not (f > 0.0 and q > 0.0 and f_std > 0.0 and q_std > 0.0 and f + q + f_std + q_std < math.inf):
        return "not_finite"
    if not search_hz[0] <= f <= search_hz[1]:
        return "band_edge"
    return _reading(measurement, end_ns, f, f_std / f, q, q_std / q)


def _reading(measurement: Measurement, end_ns: int, f: float, std_f: float, q: float, std_q: float) -> Reading:
    decay = measurement.method is Method.RINGDOWN
    window_s = measurement.window_s
    age_s = 0.5 * window_s
    if decay:
        age_s = max(window_s - q / (math.pi * f), age_s)
    correlation = measurement.frequency_q_correlation or 0.0
    if abs(correlation) > _LARGEST_CORRELATION:
        correlation = math.copysign(_LARGEST_CORRELATION, correlation)
    return Reading(
        end_ns - round(window_s * NS),
        end_ns,
        age_s,
        math.log(f),
        math.log(q),
        std_f * std_f,
        correlation * std_f * std_q,
        std_q * std_q,
        decay,
    )


def with_var_q(reading: Reading, var_q: float) -> Reading:
    """Return a reading with another variance of ln q and the same correlation."""
    return Reading(
        reading.start_ns,
        reading.end_ns,
        reading.age_s,
        reading.ln_f,
        reading.ln_q,
        reading.var_f,
        reading.cov * math.sqrt(var_q / reading.var_q),
        var_q,
        reading.decay,
    )


def new_part(reading: Reading, before: Reading | None) -> Reading | None:
    r"""Return what a window tells beyond the window `before` that it overlaps; None where that is nothing.

    Let m = window / new part. Errors of windows that overlap are correlated; a first-order autoregression with

        rho = (m - 1) / (m + 1)

    has both their variance R and their density m R at zero frequency, which alone counts for long averages. Its
    whitened sequence, (W - rho W') / (1 - rho) for a window W after W', is

        W + (m - 1)/2 (W - W'),    covariance m R,

    that is, W carried along its own trend from the window's middle to the middle of the new part, with the
    covariance of a window as short as the new part. So 4 s windows every 1 s carry what 5, 6, 7 s ... would: R, then
    4/5 R, 4/6 R, 4/7 R.
    """
    if before is None or reading.decay or before.end_ns <= reading.start_ns:
        return reading
    span_ns = reading.end_ns - reading.start_ns
    new_ns = reading.end_ns - before.end_ns
    if new_ns < _SMALLEST_NEW_PART * span_ns:
        return None
    m = span_ns / new_ns
    ahead = 0.5 * (m - 1.0)
    return Reading(
        before.end_ns,
        reading.end_ns,
        0.5 * new_ns / NS,
        reading.ln_f + ahead * (reading.ln_f - before.ln_f),
        reading.ln_q + ahead * (reading.ln_q - before.ln_q),
        m * reading.var_f,
        m * reading.cov,
        m * reading.var_q,
        decay=False,
    )


def share_no_sample(earlier: Reading, later: Reading) -> bool:
    """Say whether two readings are independent of each other."""
    return earlier.decay or later.decay or earlier.end_ns <= later.start_ns


def agree(a: Reading, b: Reading) -> bool:
    """Say whether two readings can be of one mode: within 4 standard deviations, or so near that a drift explains it.

    Near means one half-power width in frequency (a mode that drifts faster than that in a window is smeared and
    cannot be measured) and a quarter in q.
    """
    width = math.exp(-a.ln_q)
    reach_f = max(4.0 * math.sqrt(a.var_f + b.var_f), width)
    reach_q = max(4.0 * math.sqrt(a.var_q + b.var_q), 0.25)
    return abs(a.ln_f - b.ln_f) <= reach_f and abs(a.ln_q - b.ln_q) <= reach_q
