"""What is followed: a mode, inside which search band, by which methods, and the bands on it."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Annotated, Any, Literal

from pydantic import Field, ValidationError, ValidationInfo, field_validator
from pydantic_core import InitErrorDetails

from driftwatch.config.values import (
    Delay,
    Name,
    NotNegative,
    Number,
    Seconds,
    Span,
    SpanHz,
    Table,
    check_limits,
    refusal,
)
from driftwatch.records import Method, Priority

DEFAULT_WINDOW_S = 4.0
"""Window where none is given, unless the search band is too narrow for it."""

FEWEST_BINS = 16
"""A window must put at least so many bins, 1/window apart, into the search band: four parameters are fitted."""

MOST_WINDOWS = 100
"""So many windows at most may look at the same sample."""

DEFAULT_BINS = 32
"""Bins that a window left out is long enough for."""

Limits = Literal["absolute", "percent", "ppm", "sigma"]
BandQuantity = Literal["frequency", "q"]


class BandConfig(Table):
    """Limits on a mode's frequency or Q."""

    name: Name
    quantity: BandQuantity = "frequency"
    limits: Limits = "absolute"  # Hz or Q; or relative to the baseline
    low: Number | None = None  # None: no lower limit
    high: Number | None = Field(default=None, validate_default=True)  # None: no upper limit
    confidence: Annotated[Number, Field(gt=0.5, lt=1)] = 0.95
    on_delay_s: Delay = 10.0
    off_delay_s: Delay = 30.0
    deadband: NotNegative = 0.0  # in the limits' own unit
    priority: Priority = Priority.MEDIUM

    @field_validator("low", "high")
    @classmethod
    def _absolute_is_positive(cls, limit: float | None, info: ValidationInfo) -> float | None:
        if limit is not None and limit <= 0 and info.data.get("limits") == "absolute":
            raise refusal("a number over 0", "an absolute limit is a frequency in Hz or a Q")
        return limit

    @field_validator("high")
    @classmethod
    def _ordered(cls, high: float | None, info: ValidationInfo) -> float | None:
        if "low" in info.data:
            check_limits(info.data["low"], high, "low", "high")
        return high

    @field_validator("deadband")
    @classmethod
    def _leaves_an_inside(cls, deadband: float, info: ValidationInfo) -> float:
        low, high = info.data.get("low"), info.data.get("high")
        if low is not None and high is not None and deadband >= (high - low) / 2:
            raise refusal(
                f"less than half the band's width, {(high - low) / 2:g}", "else the alert could never return to normal"
            )
        return deadband


def _default_window_s(data: dict[str, Any]) -> float:
    search: Span = data["search_hz"]
    return max(DEFAULT_WINDOW_S, float(min(math.ceil(DEFAULT_BINS / search.width), 86_400)))


class ModeConfig(Table):
    """One resonance followed on one channel."""

    name: Name
    channel: Name
    reference: Name | None = None  # the reference channel, for driven only
    search_hz: SpanHz  # searched for inside
    methods: tuple[Method, ...] = Field(default=(Method.AMBIENT,), validate_default=True)
    window_s: Seconds = Field(default_factory=_default_window_s, validate_default=True)
    step_s: Seconds = Field(default_factory=lambda data: data["window_s"])  # from one window to the next
    regimes: tuple[Name, ...] = ()  # empty: always
    band: tuple[BandConfig, ...] = ()

    @field_validator("methods", "regimes")
    @classmethod
    def _each_once(cls, words: tuple[str, ...]) -> tuple[str, ...]:
        if len({word.casefold() for word in words}) < len(words):
            raise refusal("each of them once", "take the repeated one out")
        return words

    @field_validator("methods")
    @classmethod
    def _not_empty(cls, methods: tuple[Method, ...]) -> tuple[Method, ...]:
        if not methods:
            known = ", ".join(method.value for method in Method)
            raise refusal(f"at least one of {known}", "leave the key out for ambient", came="an empty array")
        return methods

    @field_validator("methods")
    @classmethod
    def _driven_has_a_reference(cls, methods: tuple[Method, ...], info: ValidationInfo) -> tuple[Method, ...]:
        if "reference" not in info.data or (Method.DRIVEN in methods) == (info.data["reference"] is not None):
            return methods
        if Method.DRIVEN in methods:
            raise refusal("a reference channel beside driven", "give the mode the key reference")
        raise refusal("driven among the methods of a mode with a reference", "take reference out or add driven")

    @field_validator("window_s")
    @classmethod
    def _long_enough(cls, window_s: float, info: ValidationInfo) -> float:
        search: Span | None = info.data.get("search_hz")
        if search is not None and window_s * search.width < FEWEST_BINS:
            least = FEWEST_BINS / search.width
            raise refusal(
                f"at least {least:.4g} s, {FEWEST_BINS} bins in a search band {search.width:g} Hz wide",
                "lengthen the window or widen search_hz",
            )
        return window_s

    @field_validator("step_s")
    @classmethod
    def _no_hole(cls, step_s: float, info: ValidationInfo) -> float:
        window_s = info.data.get("window_s")
        if window_s is not None and step_s > window_s:
            raise refusal(f"at most window_s, {window_s:g}", "else samples between two windows are never looked at")
        if window_s is not None and step_s < window_s / MOST_WINDOWS:
            least = window_s / MOST_WINDOWS
            raise refusal(f"at least {least:g} s, window_s/{MOST_WINDOWS}", "windows closer together say nothing new")
        return step_s

    @field_validator("band")
    @classmethod
    def _reachable(cls, bands: tuple[BandConfig, ...], info: ValidationInfo) -> tuple[BandConfig, ...]:
        search: Span | None = info.data.get("search_hz")
        errors = list(_unreachable(bands, search)) if search is not None else []
        if errors:
            raise ValidationError.from_exception_data("band", errors)
        return bands


def _unreachable(bands: tuple[BandConfig, ...], search: Span) -> Iterator[InitErrorDetails]:
    """Yield the bands on frequency that no mode inside the search band can ever be inside of."""
    for index, band in enumerate(bands):
        if band.quantity != "frequency" or band.limits != "absolute":
            continue
        where = f"a band that overlaps search_hz, {search.low:g} to {search.high:g} Hz"
        for key, limit, outside in (
            ("low", band.low, band.low is not None and band.low >= search.high),
            ("high", band.high, band.high is not None and band.high <= search.low),
        ):
            if outside:
                error = refusal(where, "no mode found there could ever be inside the band")
                yield InitErrorDetails(type=error, loc=(index, key), input=limit)
