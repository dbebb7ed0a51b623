"""From what an estimator returns to what leaves the program."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from driftwatch.records import Z95, Measurement, Method

if TYPE_CHECKING:
    from driftwatch.measure.ambient import AmbientFit
    from driftwatch.measure.ringdown import RingdownFit


@dataclass(frozen=True, slots=True)
class Subject:
    """What a measurement is about."""

    channel: str
    mode: str
    unit: str  # the channel's own
    scale: float  # units at digital full scale
    rate_hz: int  # nominal sample rate of the channel


@dataclass(frozen=True, slots=True)
class Extent:
    """Which samples of the stream a measurement used."""

    first_sample: int
    samples: int

    @property
    def end(self) -> int:
        """Stream index after the last one."""
        return self.first_sample + self.samples


def ambient_bodies(
    subject: Subject, extents: list[Extent], fit: AmbientFit, also: list[tuple[str, ...]]
) -> Iterator[Measurement]:
    """Yield the measurement of each row of a fit; `also` are reasons that do not make it unusable."""
    figures = zip(
        fit.frequency_hz.tolist(),
        fit.ln_frequency_std.tolist(),
        fit.ln_q.tolist(),
        fit.ln_q_std.tolist(),
        fit.correlation.tolist(),
        fit.level.tolist(),
        fit.snr_db.tolist(),
        fit.fit_p.tolist(),
        strict=True,
    )
    for extent, row, reasons, also_row in zip(extents, figures, fit.reasons, also, strict=True):
        yield _ambient_body(subject, extent, row, reasons, also_row)


def _ambient_body(
    subject: Subject, extent: Extent, figures: tuple[float, ...], reasons: tuple[str, ...], also: tuple[str, ...]
) -> Measurement:
    """Return the measurement of one row: its figures are fn, std of ln fn, ln q and its std, ... as in the fit."""
    frequency_hz, std_f, ln_q, std_q, correlation, level, snr_db, fit_p = figures
    usable = not reasons
    q = math.exp(ln_q) if usable else math.nan
    return Measurement(
        channel=subject.channel,
        mode=subject.mode,
        method=Method.AMBIENT,
        regime=None,
        window_s=extent.samples / subject.rate_hz,
        first_sample=extent.first_sample,
        samples=extent.samples,
        frequency_hz=frequency_hz if usable else None,
        frequency_std_hz=frequency_hz * std_f if usable else None,
        q=q if usable else None,
        q_std=q * std_q if usable else None,
        q_low=q * math.exp(-Z95 * std_q) if usable else None,
        q_high=q * math.exp(Z95 * std_q) if usable else None,
        frequency_q_correlation=correlation if usable else None,
        level=known(level * subject.scale),
        level_unit=subject.unit,
        snr_db=known(snr_db),
        fit_p=known(fit_p),
        usable=usable,
        reasons=reasons + also,
    )


def ringdown_body(subject: Subject, extent: Extent, fit: RingdownFit) -> Measurement:
    """Return the measurement of one decay."""
    told = replace(
        unusable_body(subject, Method.RINGDOWN, extent, fit.reasons),
        level=_product(fit.level, subject.scale),
        snr_db=fit.snr_db,
        fit_p=fit.fit_p,
    )
    if not fit.usable:
        return told
    return replace(
        told,
        frequency_hz=fit.frequency_hz,
        frequency_std_hz=_product(fit.frequency_hz, fit.std_ln_f),
        q=fit.q,
        q_std=_product(fit.q, fit.std_ln_q),
        q_low=fit.q_low,
        q_high=fit.q_high,
        frequency_q_correlation=fit.correlation,
        usable=True,
    )


def unusable_body(subject: Subject, method: Method, extent: Extent, reasons: tuple[str, ...]) -> Measurement:
    """Return a measurement that could not be made."""
    return Measurement(
        channel=subject.channel,
        mode=subject.mode,
        method=method,
        regime=None,
        window_s=extent.samples / subject.rate_hz,
        first_sample=extent.first_sample,
        samples=extent.samples,
        frequency_hz=None,
        frequency_std_hz=None,
        q=None,
        q_std=None,
        q_low=None,
        q_high=None,
        frequency_q_correlation=None,
        level=None,
        level_unit=subject.unit,
        snr_db=None,
        fit_p=None,
        usable=False,
        reasons=reasons,
    )


def known(value: float) -> float | None:
    """Return a finite value, and None for one that is not."""
    return value if math.isfinite(value) else None


def _product(value: float | None, factor: float | None) -> float | None:
    return None if value is None or factor is None else value * factor
