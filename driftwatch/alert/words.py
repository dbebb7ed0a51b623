"""What an alert record says in words."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from driftwatch.alert.machine import Event

if TYPE_CHECKING:
    from driftwatch.alert.band import Band, Figure, Judgement
    from driftwatch.records import Track


def limits_text(band: Band) -> str:
    """Return the limits of a band as a person writes them: ``890..915 Hz``, ``below 915 Hz``."""
    unit = _unit(band.quantity)
    if band.low is None:
        return f"below {band.high:.7g}{unit}"
    if band.high is None:
        return f"above {band.low:.7g}{unit}"
    return f"within {band.low:.7g}..{band.high:.7g}{unit}"


def band_words(event: Event | None, held_s: float, band: Band, figure: Figure, judgement: Judgement) -> str:
    """Return what happened at a band."""
    if event is None:
        return "can tell"
    name = "Q" if band.quantity == "q" else "frequency"
    unit = _unit(band.quantity)
    value = f"{name} {with_std(figure.value, figure.std)}{unit}"
    if event is Event.RETURNED:
        by = f" by {band.deadband:.6g}{unit}" if band.deadband else ""
        return f"{value} {limits_text(band)}{by}{_held(held_s)}, probability {_chance(judgement.inside)}"
    limit = band.low if judgement.side == "below" else band.high
    return f"{value} {judgement.side} {limit:.7g}{unit}{_held(held_s)}, probability {_chance(judgement.beyond)}"


def track_words(track: Track) -> str:
    """Return what is known of a mode: ``held, unexcited``."""
    return str(track.status) if track.reason is None else f"{track.status}, {track.reason}"


def _unit(quantity: str) -> str:
    return "" if quantity == "q" else " Hz"


def _held(seconds: float) -> str:
    return f" for {seconds:.6g} s" if seconds > 0.0 else ""


def _chance(probability: float) -> str:
    """Return a probability to two decimals, never rounded up to 1."""
    return f"{probability:.2f}" if probability < 0.995 else "over 0.99"


def decimals_of(std: float) -> int:
    """Return how many decimals show two significant digits of an uncertainty."""
    return max(0, 1 - math.floor(math.log10(std)))


def with_std(value: float, std: float | None) -> str:
    """Return ``900.123 ± 0.012``; without a finite uncertainty six digits of the value."""
    if std is None or not std > 0 or not math.isfinite(std):
        return f"{value:.6g}"
    places = decimals_of(std)
    return f"{value:.{places}f} ± {std:.{places}f}"
