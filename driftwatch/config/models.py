"""The configuration as typed, frozen models; what a single table can know is validated here."""

from __future__ import annotations

import datetime as dt
import re
import zoneinfo
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BeforeValidator,
    Field,
    PrivateAttr,
    ValidationInfo,
    field_validator,
    model_validator,
)

from driftwatch.config.endpoints import Endpoint
from driftwatch.config.modes import ModeConfig
from driftwatch.config.sources import SourceConfig, base_of
from driftwatch.config.values import (
    FULL_SCALE_UNIT,
    UNIT_OF,
    Count,
    Delay,
    Flag,
    Name,
    Number,
    Positive,
    Quantity,
    Seconds,
    SpanHz,
    Table,
    Text,
    check_limits,
    refusal,
)
from driftwatch.records import Condition, Priority

DEFAULT_STORE = "sqlite:///driftwatch.db"
DEFAULT_PUBLISH = "tcp://127.0.0.1:5571"
DEFAULT_CONTROL = "tcp://127.0.0.1:5572"

Role = Literal["response", "reference"]


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
            check_limits(info.data["from_"], to, "from", "to")
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


# ---------------------------------------------------------------------------------------------- daemon, record


class DaemonConfig(Table):
    """How the daemon works; nothing here changes a figure."""

    workers: Annotated[int, Field(strict=True, ge=1, le=64)] = 1  # processes that measure
    state: Text | None = None  # folder of the lock and the recordings; None: the store's own
    queue_s: Annotated[Seconds, Field(ge=2.0, le=600.0)] = 20.0  # of samples that wait for a late worker
    log_level: Literal["debug", "info", "warning", "error"] = "info"

    @field_validator("state")
    @classmethod
    def _beside_the_file(cls, state: str | None, info: ValidationInfo) -> str | None:
        return str((base_of(info) / state).resolve()) if state is not None and info.context else state


class RecordConfig(Table):
    """The raw recorder: keeps the last hours as they came."""

    keep_hours: Annotated[Number, Field(ge=0)] = 0.0  # 0: nothing is recorded
    most_gb: Positive = 20.0  # on the disk, in 1e9 bytes
    segment_s: Annotated[Seconds, Field(ge=1.0, le=3600.0)] = 300.0
    folder: Text | None = None  # None: recordings, in the state folder
    pressure_allowed_by: Text | None = None  # who allowed that a microphone is recorded

    @field_validator("folder")
    @classmethod
    def _beside_the_file(cls, folder: str | None, info: ValidationInfo) -> str | None:
        return str((base_of(info) / folder).resolve()) if folder is not None and info.context else folder


# ---------------------------------------------------------------------------------------------- the whole file


def _schema(value: Any) -> Any:
    """Refuse what equals 1 and is no whole number."""
    if type(value) is not int or value != 1:
        raise refusal("1", "write schema = 1; it is the only one that this version knows")
    return value


class Configuration(Table):
    """The whole file."""

    schema_: Annotated[Literal[1], BeforeValidator(_schema)] = Field(alias="schema")
    station: StationConfig = StationConfig()
    source: tuple[SourceConfig, ...] = ()
    channel: tuple[ChannelConfig, ...] = ()
    regime: tuple[RegimeConfig, ...] = ()
    mode: tuple[ModeConfig, ...] = ()
    alert: tuple[AlertConfig, ...] = ()
    store: StoreConfig = StoreConfig()
    bus: BusConfig = BusConfig()
    daemon: DaemonConfig = DaemonConfig()
    record: RecordConfig = RecordConfig()

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

    @property
    def state(self) -> Path:
        """The folder of the lock and the recordings."""
        return Path(self.daemon.state or Path(self.store.url.removeprefix("sqlite:///")).parent)

    def source_of(self, channel: ChannelConfig) -> SourceConfig | None:
        """Return the source a channel comes from, None in a file without sources."""
        return next((one for one in self.source if one.name == channel.source), None)
