"""Limits on a figure, and how probable it is that the true value lies beyond them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

from driftwatch.records import Track, TrackStatus

if TYPE_CHECKING:
    from driftwatch.records import Priority

_SQRT_HALF = math.sqrt(0.5)


class Band(Protocol):
    """Limits and delays of one band, as the configuration names them."""

    @property
    def name(self) -> str:
        """Name of the band, unique within its mode."""

    @property
    def quantity(self) -> str:
        """What is limited: ``frequency`` or ``q``."""

    @property
    def limits(self) -> str:
        """On what the limits are based: ``absolute``."""

    @property
    def low(self) -> float | None:
        """Lower limit, Hz or 1; None: unlimited."""

    @property
    def high(self) -> float | None:
        """Upper limit, Hz or 1; None: unlimited."""

    @property
    def confidence(self) -> float:
        """How probable a violation or a return must be, 0.5 to 1."""

    @property
    def on_delay_s(self) -> float:
        """For how long a violation must be that probable, seconds."""

    @property
    def off_delay_s(self) -> float:
        """For how long a return must be that probable, seconds."""

    @property
    def deadband(self) -> float:
        """How far inside the limits the value must be to count as returned, in the limits' unit."""

    @property
    def priority(self) -> Priority:
        """How soon somebody must look."""


UNITS = {"frequency": "Hz", "q": "1"}
"""Unit of each quantity that a band can limit."""


@dataclass(slots=True)  # never changed; not frozen, which would cost more than the judgement
class Figure:
    """The figure that a band judges, as a track point gives it."""

    value: float  # in the quantity's unit
    std: float  # standard uncertainty, in the same unit


def figure_of(track: Track, quantity: str) -> Figure | None:
    """Return the figure that a band judges; None where nobody can tell it now."""
    if track.status is not TrackStatus.TRACKING:
        return None
    value, std = (track.frequency_hz, track.frequency_std_hz) if quantity == "frequency" else (track.q, track.q_std)
    if value is None or std is None or not (0.0 < value < math.inf and 0.0 <= std < math.inf):
        return None
    return Figure(value, std)


def probability_below(figure: Figure, limit: float, quantity: str) -> float:
    """Return the probability that the true value lies below a limit.

    The frequency is Gaussian; of Q the logarithm is, with the standard deviation std / value.
    """
    if quantity == "q":
        if limit <= 0.0:
            return 0.0
        distance, std = math.log(limit / figure.value), figure.std / figure.value
    else:
        distance, std = limit - figure.value, figure.std
    if std == 0.0:
        return 1.0 if distance > 0.0 else 0.0
    return 0.5 * math.erfc(-distance / std * _SQRT_HALF)


@dataclass(slots=True)  # never changed; not frozen, which would cost more than the judgement
class Judgement:
    """How probable it is that the true value is beyond a band's limits, and inside them by the deadband."""

    beyond: float
    inside: float
    side: str  # below or above: the more probable way to be beyond


def judge(figure: Figure, band: Band) -> Judgement:
    """Return what a figure means for a band. A deadband so wide that nothing is inside makes `inside` 0."""
    quantity, low, high, deadband = band.quantity, band.low, band.high, band.deadband
    below = 0.0 if low is None else probability_below(figure, low, quantity)
    above = 0.0 if high is None else 1.0 - probability_below(figure, high, quantity)
    not_above = 1.0 if high is None else probability_below(figure, high - deadband, quantity)
    not_inside = 0.0 if low is None else probability_below(figure, low + deadband, quantity)
    return Judgement(min(below + above, 1.0), max(not_above - not_inside, 0.0), "below" if below >= above else "above")
