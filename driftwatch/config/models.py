"""The configuration as typed, frozen models; what a single table can know is validated here."""

from __future__ import annotations

import datetime as dt
import math
import re
import zoneinfo
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BeforeValidator,
    Field,
    PrivateAttr,
    ValidationError,
    ValidationInfo,
    field_validator,
    model_validator,
)
from pydantic_core import InitErrorDetails

from driftwatch.config.endpoints import Endpoint
from driftwatch.config.sources import SourceConfig, base_of
from driftwatch.config.values import (
    FULL_SCALE_UNIT,
    UNIT_OF,
    Count,
    Delay,
    Flag,
    Name,
    NotNegative,
    Number,
    Positive,
    Quantity,
    Seconds,
    Span,
    SpanHz,
    Table,
    Text,
    refusal,
)
from driftwatch.records import Condition, Method, Priority

DEFAULT_WINDOW_S = 4.0
"""Window where none is given, unless the search band is too narrow for it."""

FEWEST_BINS = 16
"""A window must put at least so many bins, 1/window apart, into the search band: four parameters are fitted."""

DEFAULT_BINS = 32
"""Bins that a window left out is long enough for."""

DEFAULT_STORE = "sqlite:///driftwatch.db"
DEFAULT_PUBLISH = "tcp://127.0.0.1:5571"
DEFAULT_CONTROL = "tcp://127.0.0.1:5572"

Role = Literal["response", "reference"]
Limits = Literal["absolute", "percent", "ppm", "sigma"]
BandQuantity = Literal["frequency", "q"]


# ---------------------------------------------------------------------------------------------- station


def _zone(name: str) -> str:
    if name == "UTC":  # also where the system has no table of time zones
        return name
    try:
        zoneinfo.ZoneInfo(name)
    except (zoneinfo.ZoneInfoNotFoundError, ValueError, OSError):
        raise refusal("a name from the time zone database", 'write it as "UTC" or "Europe/Zurich"') from None
    return name


_SHIFT = re.compile(r"(?:[01][0-9]|2[0-3]):[0-5][0-9]")


def _shifts(times: tuple[str, ...]) -> tuple[str, ...]:
    wrong = [time for time in times if _SHIFT.fullmatch(time) is None]
    if wrong or list(times) != sorted(set(times)):
        raise refusal("times of day HH:MM from 00:00 to 23:59, rising", 'write them as ["06:00", "14:00", "22:00"]')
    return times


class StationConfig(Table):
    """Where this runs, for people's eyes."""

    name: Name = "station"
    timezone: Annotated[Text, AfterValidator(_zone)] = "UTC"
    shifts: Annotated[tuple[Text, ...], AfterValidator(_shifts)] = ()


# ---------------------------------------------------------------------------------------------- channel


def _date(value: Any) -> Any:
    """Accept a date as TOML writes it and as text."""
    if isinstance(value, dt.date) and not isinstance(value, dt.datetime):
        return value
    try:
        return dt.date.fromisoformat(value)
    except (TypeError, ValueError):
        raise refusal("a date", "write it as 2026-03-01") from None


class SensorConfig(Table):
    """What is known of the sensor; all of it optional, for people and for remarks."""

    serial: Text | None = None
    calibrated: Annotated[dt.date, BeforeValidator(_date)] | None = None
    mounting: Text | None = None
    location: Text | None = None
    direction: Text | None = None
    usable_hz: SpanHz | None = None  # outside it the sensor's figures are doubtful


class ChannelConfig(Table):
    """One sensor signal.

    With neither `scale` nor `unit`, levels are fractions of digital full scale, unit ``FS``; with a scale and no
    unit, the unit is the SI unit of the quantity.
    """

    name: Name
    source: Name | None = None  # None: no source in the file, or it stands alone
    input: Count = 1  # from 1, as people count inputs
    quantity: Quantity = "acceleration"
    scale: Positive = 1.0  # units at digital full scale
    unit: Annotated[Text, Field(max_length=16)] = Field(default_factory=lambda data: UNIT_OF[data["quantity"]])
    role: Role = "response"
    sensor: SensorConfig = SensorConfig()

    @model_validator(mode="before")
    @classmethod
    def _unit_without_scale(cls, data: Any) -> Any:
        if isinstance(data, Mapping) and "unit" not in data and "scale" not in data:
            return {**data, "unit": FULL_SCALE_UNIT}
        return data


# ---------------------------------------------------------------------------------------------- regime


class RegimeWhen(Table):
    """When a regime holds: while a covariate, or the level of a channel, lies between two values."""

    covariate: Text | None = None  # name of a slow quantity
    level: Name | None = None  # name of a channel
    from_: Number | None = Field(default=None, alias="from")
    to: Number | None = Field(default=None, validate_default=True)

    @field_validator("to")
    @classmethod
    def _ordered(cls, to: float | None, info: ValidationInfo) -> float | None:
        if "from_" in info.data:
            _check_limits(info.data["from_"], to, "from", "to")
        return to

    @model_validator(mode="after")
    def _one_thing(self) -> RegimeWhen:
        if (self.covariate is None) == (self.level is None):
            came = "neither" if self.level is None else "both"
            raise refusal("either covariate or level", "say what the regime depends on", came=came)
        return self


class RegimeConfig(Table):
    """An operating condition in which figures may be compared."""

    name: Name
    when: RegimeWhen
    settle_s: Delay = 10.0  # how long it must hold before it counts
    judge: Flag = True  # False: follow, but raise no band alert


# ---------------------------------------------------------------------------------------------- mode and band


def _check_limits(low: float | None, high: float | None, low_key: str, high_key: str) -> None:
    """Refuse two limits that limit nothing or contradict each other."""
    if low is None and high is None:
        raise refusal(f"{low_key}, {high_key} or both", "give at least one limit", came="neither limit")
    if low is not None and high is not None and low >= high:
        came = f"{low_key} = {low:g} and {high_key} = {high:g}"
        raise refusal(f"{low_key} less than {high_key}", "swap them or correct one", came=came)


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
            _check_limits(info.data["low"], high, "low", "high")
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
    methods: tuple[Method, ...] = (Method.AMBIENT,)
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


# ---------------------------------------------------------------------------------------------- alert, store, bus


class AlertConfig(Table):
    """A condition that is no band."""

    name: Name
    condition: Condition
    on_delay_s: Delay = 30.0
    priority: Priority = Priority.MEDIUM

    @field_validator("condition")
    @classmethod
    def _no_band(cls, condition: Condition) -> Condition:
        if condition is Condition.BAND:
            raise refusal("a condition that is no band", "write limits as [[mode.band]]")
        return condition


class StoreConfig(Table):
    """Where the rows go."""

    url: Annotated[Text, Field(max_length=4096)] = Field(default=DEFAULT_STORE, validate_default=True)
    keep_days: Positive = 90.0

    @field_validator("url")
    @classmethod
    def _a_file(cls, url: str, info: ValidationInfo) -> str:
        path = url.removeprefix("sqlite:///")
        if path == url or not path.strip("/. ") or ":memory:" in path or any(mark in path for mark in "?#\0"):
            raise refusal("sqlite:/// and the path of a file", 'write it as "sqlite:///driftwatch.db"')
        return f"sqlite:///{Path(base_of(info), path).resolve()}" if info.context else url


class BusConfig(Table):
    """Where the program speaks and listens."""

    publish: Endpoint = DEFAULT_PUBLISH
    control: Endpoint = Field(default=DEFAULT_CONTROL, validate_default=True)

    @field_validator("control")
    @classmethod
    def _another_port(cls, control: str, info: ValidationInfo) -> str:
        if control == info.data.get("publish"):
            raise refusal("another endpoint than publish", "give each its own port")
        return control


# ---------------------------------------------------------------------------------------------- the whole file


class Configuration(Table):
    """The whole file."""

    schema_: Literal[1] = Field(alias="schema")
    station: StationConfig = StationConfig()
    source: tuple[SourceConfig, ...] = ()
    channel: tuple[ChannelConfig, ...] = ()
    regime: tuple[RegimeConfig, ...] = ()
    mode: tuple[ModeConfig, ...] = ()
    alert: tuple[AlertConfig, ...] = ()
    store: StoreConfig = StoreConfig()
    bus: BusConfig = BusConfig()

    _path: Path | None = PrivateAttr(default=None)
    _sha256: str = PrivateAttr(default="")

    @property
    def path(self) -> Path | None:
        """The file, None where the configuration came from text."""
        return self._path

    @property
    def sha256(self) -> str:
        """Hexadecimal SHA-256 of the file's bytes, empty where it was not loaded."""
        return self._sha256

    @field_validator("channel")
    @classmethod
    def _name_the_only_source(
        cls, channels: tuple[ChannelConfig, ...], info: ValidationInfo
    ) -> tuple[ChannelConfig, ...]:
        sources = info.data.get("source", ())
        if len(sources) != 1:
            return channels
        only = sources[0].name
        return tuple(channel if channel.source else channel.model_copy(update={"source": only}) for channel in channels)

    def source_of(self, channel: ChannelConfig) -> SourceConfig | None:
        """Return the source a channel comes from, None in a file without sources."""
        return next((one for one in self.source if one.name == channel.source), None)
