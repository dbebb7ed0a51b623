"""The vocabulary of the stream and of the wire: one frozen value per concept, described field by field.

Two families live here. *Stream items* (`Block`, `Tick`, `Command`, `Covariate`) go into the pipeline; *bodies*
(`Measurement`, `Track`, `Alert`, ...) come out of it, each inside an `Envelope` that numbers and dates it.

Conventions that hold for every field:

* times are UTC in integer nanoseconds since 1970-01-01 and end in ``_ns``; at every edge they lose the suffix
  and become RFC 3339 text with ``Z`` (`time_text`, `parse_time`);
* frequencies are in Hz, the undamped natural frequency fn on the nominal sample rate; Q is 1/(2 zeta);
* ``_std`` is a standard uncertainty, ``q_low`` and ``q_high`` bound the 95 % interval;
* what is not known is ``None``, never NaN.
"""

from __future__ import annotations

import datetime as dt
import re
import types
import typing
from dataclasses import dataclass, fields
from enum import StrEnum
from functools import cache, lru_cache

if typing.TYPE_CHECKING:
    from collections.abc import Mapping

    import numpy as np
    from numpy.typing import NDArray

SCHEMA = 1
"""Version of the record layout; a field that changes its meaning or goes away raises it."""

NS = 1_000_000_000
"""Nanoseconds in a second."""

Z95 = 1.959963984540054
"""Half the width of the 95 % interval of a Gaussian, in standard deviations."""


# ---------------------------------------------------------------------------------------------- words


class Origin(StrEnum):
    """Where a run's samples came from."""

    LIVE = "live"
    REPLAY = "replay"
    SIMULATED = "simulated"


class TimeQuality(StrEnum):
    """How far the times of a run can be trusted."""

    SYNCHRONISED = "synchronised"  # the clock was disciplined by a time server
    FREE = "free"  # the computer's clock, nobody vouches for it
    FILE = "file"  # written inside the recording
    ASSUMED = "assumed"  # told on the command line or guessed from the file's date


class Method(StrEnum):
    """By what a measurement was made."""

    AMBIENT = "ambient"
    RINGDOWN = "ringdown"
    HALFPOWER = "halfpower"
    DRIVEN = "driven"


class TrackStatus(StrEnum):
    """What the tracker knows of a mode now."""

    SEARCHING = "searching"  # never found, or not since it was given up
    TRACKING = "tracking"  # followed, the figures are current
    HELD = "held"  # nothing can be learned now; `reason` says why
    LOST = "lost"  # was followed, and is not found although it should be


class AlertState(StrEnum):
    """States of an alert by IEC 62682 / ISA-18.2."""

    NORMAL = "normal"
    UNACKNOWLEDGED = "unacknowledged"
    ACKNOWLEDGED = "acknowledged"
    RETURNED_UNACKNOWLEDGED = "returned_unacknowledged"
    LATCHED_UNACKNOWLEDGED = "latched_unacknowledged"
    LATCHED_ACKNOWLEDGED = "latched_acknowledged"
    SHELVED = "shelved"
    SUPPRESSED_BY_DESIGN = "suppressed_by_design"
    OUT_OF_SERVICE = "out_of_service"


class Condition(StrEnum):
    """What kind of thing an alert watches."""

    BAND = "band"
    RATE = "rate"
    STEP = "step"
    TIME_LEFT = "time_left"
    LOST = "lost"
    HEALTH = "health"
    LEVEL = "level"
    NO_DATA = "no_data"
    DAEMON = "daemon"


class Priority(StrEnum):
    """How soon somebody must look."""

    LOW = "low"
    MEDIUM = "medium"
    HIGH = "high"
    URGENT = "urgent"


class Fault(StrEnum):
    """What can be wrong with a signal or with the daemon itself."""

    GAP = "gap"
    OVERFLOW = "overflow"
    CLIPPING = "clipping"
    FLAT = "flat"
    SPIKES = "spikes"
    LOOSE = "loose"
    MAINS = "mains"
    GAIN_CHANGED = "gain_changed"
    NOT_FINITE = "not_finite"
    CLOCK_STEP = "clock_step"
    SLOW_CONSUMER = "slow_consumer"
    DISK = "disk"
    STORE = "store"
    DEVICE = "device"
    PROCESS = "process"


class Phase(StrEnum):
    """Where in its life an incident stands."""

    BEGIN = "begin"
    CONTINUE = "continue"
    END = "end"


class Action(StrEnum):
    """What a command can ask for."""

    ACKNOWLEDGE = "acknowledge"  # `target` names the alert
    NOTE = "note"  # `reason` is the text; with `target` `HANDOVER` it is meant for the next shift
    COVARIATE = "covariate"  # `target` names it, `value` and `unit` are its value; no value: known to be missing
    RELOAD = "reload"  # the configuration; carried out by the daemon
    STOP = "stop"  # the daemon; carried out by the daemon


HANDOVER = "handover"
"""Target of a note for the next shift."""


# ---------------------------------------------------------------------------------------------- stream items


@dataclass(frozen=True, slots=True)
class Block:
    """Consecutive samples of one source."""

    source: str  # name of the source
    first_sample: int  # index of the first row, counted from the start of the stream; a jump is a gap
    time_ns: int  # stream time of the first row
    samples: NDArray[np.float32]  # shape (samples, inputs), digital full scale = 1.0; not to be written to
    cause: Fault = Fault.GAP  # why samples are missing before it, where they are

    @property
    def count(self) -> int:
        """Samples in it, per input."""
        return len(self.samples)


@dataclass(frozen=True, slots=True)
class Stretch:
    """Where a block lies, without its samples."""

    source: str
    first_sample: int
    time_ns: int
    count: int  # samples, per input
    cause: Fault = Fault.GAP


@dataclass(frozen=True, slots=True)
class Tick:
    """A second has passed while no samples came."""

    time_ns: int  # stream time
    cause: Fault = Fault.GAP  # why none came, as far as is known


@dataclass(frozen=True, slots=True)
class Command:
    """Somebody asks for something."""

    time_ns: int  # stream time at which it entered
    request: str  # idempotency key chosen by the asker
    by: str  # person or program
    action: str  # what to do, see `Action`
    target: str | None  # on what
    reason: str | None  # why
    value: float | None = None  # of a covariate, in `unit`
    unit: str | None = None
    outcome: str | None = None  # what came of it, where that was decided before it entered the stream


@dataclass(frozen=True, slots=True)
class Covariate:
    """One value of a slow quantity came in."""

    time_ns: int  # stream time of the value
    name: str  # temperature, speed, ...
    value: float | None  # in `unit`; None: known to be missing
    unit: str  # as the source gives it


StreamItem = Block | Tick | Command | Covariate


# ---------------------------------------------------------------------------------------------- bodies


@dataclass(frozen=True, slots=True)
class Measurement:
    """One estimate of one mode from one window or one decay, by one method."""

    channel: str
    mode: str
    method: Method
    regime: str | None  # operating condition, None where none is configured
    window_s: float  # length of what was used, seconds
    first_sample: int  # index of its first sample in the stream
    samples: int  # number of samples used
    frequency_hz: float | None  # undamped natural frequency fn
    frequency_std_hz: float | None
    q: float | None  # quality factor 1/(2 zeta)
    q_std: float | None  # q times the standard uncertainty of ln q
    q_low: float | None  # 95 % interval of q
    q_high: float | None
    frequency_q_correlation: float | None  # between ln fn and ln q
    level: float | None  # rms in the search band
    level_unit: str  # the channel's own unit
    snr_db: float | None  # fitted signal variance over noise variance in the search band
    fit_p: float | None  # p-value of the residual test
    usable: bool  # may be followed and judged
    reasons: tuple[str, ...]  # short fixed words, see `REASONS`


REASONS = {
    "no_mode": "no resonance stands out of the floor in the search band",
    "misfit": "the residuals contradict the model",
    "band_edge": "the resonance lies at or outside the edge of the search band",
    "not_resolved": "the window is too short for so narrow a resonance",
    "too_wide": "the resonance is as wide as the search band",
    "impact": "an impact fell into the window; only the quiet part was used, or too little was left",
    "gap": "samples are missing",
    "not_finite": "samples are not numbers",
    "short": "too little of the decay was seen",
    "unexcited": "the signal in the search band is no stronger than the sensor's own noise",
    "not_converged": "the fit found no optimum",
}
"""Every word that `Measurement.reasons` and `Track.reason` may carry, with its meaning."""


@dataclass(frozen=True, slots=True)
class Track:
    """The filtered state of a mode."""

    channel: str
    mode: str
    status: TrackStatus
    regime: str | None
    frequency_hz: float | None
    frequency_std_hz: float | None
    q: float | None
    q_std: float | None
    q_low: float | None
    q_high: float | None
    frequency_q_correlation: float | None  # between ln fn and ln q
    frequency_compensated_hz: float | None  # referred to the baseline's conditions
    frequency_compensated_std_hz: float | None
    q_compensated: float | None
    q_compensated_std: float | None
    clock_std_ppm: float | None  # shared uncertainty of the sample clock
    drift_per_day: float | None  # d ln fn / dt, 1/day
    drift_std_per_day: float | None
    q_drift_per_day: float | None  # d ln q / dt, 1/day
    q_drift_std_per_day: float | None
    baseline: int | None  # version of the baseline in force
    last_measurement_ns: int | None  # stream time of the last usable measurement
    reason: str | None  # why the status is what it is, see `REASONS`


@dataclass(frozen=True, slots=True)
class Alert:
    """One transition of an alert."""

    alert: str  # stable name: channel/mode/band
    occurrence: str  # UUID of this life, from leaving normal to coming back
    condition: Condition
    channel: str | None
    mode: str | None
    quantity: str | None  # frequency, q, ...
    basis: str | None  # absolute, percent, ppm, sigma
    value: float | None  # what was judged, in `unit`
    value_std: float | None
    unit: str | None
    low: float | None  # limits in force, in `unit`
    high: float | None
    baseline: int | None
    confidence: float | None  # asked for
    probability: float | None  # found: that the true value is beyond the limit
    determinate: bool  # False: cannot tell; timers hold and no state changes by value
    since_ns: int  # begin of this occurrence
    state: AlertState
    previous_state: AlertState
    priority: Priority
    by: str | None  # person, where one caused the transition
    reason: str | None  # what happened, in words
    shelved_until_ns: int | None
    because: tuple[int, ...]  # sequences of the records that fired it
    evidence: tuple[str, ...]  # names of clips


@dataclass(frozen=True, slots=True)
class Health:
    """A signal or a part of the daemon has a fault, still has it, or has it no more."""

    channel: str | None  # None: the daemon
    fault: Fault
    phase: Phase
    incident: str  # ties begin, continue and end
    since_ns: int
    seconds: float  # how long so far
    first_sample: int | None  # where it began in the stream
    lost_samples: int  # how many were lost so far
    value: float | None  # the figure that failed its test
    limit: float | None
    unit: str | None
    detail: str | None  # what came, what was expected, what to do


@dataclass(frozen=True, slots=True)
class Change:
    """A step or a slow change, with its onset."""

    channel: str
    mode: str
    quantity: str
    size: float
    size_std: float
    onset_ns: int
    onset_low_ns: int
    onset_high_ns: int


@dataclass(frozen=True, slots=True)
class Decay:
    """Frequency and Q against amplitude along one decay."""

    channel: str
    mode: str
    amplitude: float
    frequency_slope: float
    frequency_slope_std: float
    q_slope: float
    q_slope_std: float


@dataclass(frozen=True, slots=True)
class Tone:
    """A line that is no resonance."""

    channel: str
    frequency_hz: float
    frequency_std_hz: float
    level: float
    level_unit: str
    order: float | None  # multiple of the shaft's speed


@dataclass(frozen=True, slots=True)
class Level:
    """Broadband figures of one channel."""

    channel: str
    window_s: float
    rms: float
    peak: float
    crest: float
    kurtosis: float
    band_hz: tuple[float, ...]  # low and high
    unit: str


@dataclass(frozen=True, slots=True)
class Clock:
    """What the sample clock of a source does against the computer's."""

    source: str
    rate_hz: float  # nominal: every frequency in every record refers to it
    deviation_ppm: float | None  # of the true rate from the nominal one
    deviation_std_ppm: float | None
    span_s: float  # for how long samples were counted for this
    offset_s: float  # UTC less stream time, of the latest sample
    offset_std_s: float | None


@dataclass(frozen=True, slots=True)
class CovariateValue:
    """One value of a slow quantity, as it entered the stream."""

    name: str
    value: float | None  # None: known to be missing
    unit: str


@dataclass(frozen=True, slots=True)
class Note:
    """What a person wrote down."""

    by: str
    text: str
    handover: bool  # meant for the next shift


@dataclass(frozen=True, slots=True)
class Baseline:
    """The reference state of a mode in a regime."""

    channel: str
    mode: str
    regime: str | None
    version: int
    frequency_hz: float
    frequency_std_hz: float
    q: float
    q_std: float
    readings: int
    from_ns: int
    until_ns: int


@dataclass(frozen=True, slots=True)
class CommandDone:
    """A command as it was carried out."""

    request: str
    by: str
    action: str
    target: str | None
    reason: str | None
    value: float | None
    unit: str | None
    outcome: str | None  # what came of it; None: not known


@dataclass(frozen=True, slots=True)
class Run:
    """One start of the daemon or one replay. The first record of every run, and again at its end."""

    phase: Phase  # begin or end
    config_sha256: str  # of the configuration's text
    version: str  # of the program
    sources: tuple[str, ...]  # what was read: devices, files
    assumed: tuple[str, ...]  # what was not known and taken for granted, in words
    samples: int  # read so far, per input
    reason: str | None  # why it ended


Body = (
    Measurement
    | Track
    | Alert
    | Health
    | Change
    | Decay
    | Tone
    | Level
    | Clock
    | CovariateValue
    | Note
    | Baseline
    | CommandDone
    | Run
)

KINDS: dict[str, type[Body]] = {
    "measurement": Measurement,
    "track": Track,
    "alert": Alert,
    "health": Health,
    "change": Change,
    "decay": Decay,
    "tone": Tone,
    "level": Level,
    "clock": Clock,
    "covariate": CovariateValue,
    "note": Note,
    "baseline": Baseline,
    "command": CommandDone,
    "run": Run,
}
"""Every kind of stored and numbered record, by the word it carries on the wire."""

KIND_OF: dict[type[Body], str] = {body: kind for kind, body in KINDS.items()}


@dataclass(frozen=True, slots=True)
class Envelope:
    """A body with its place in the run: who, when, and what came before."""

    station: str
    run: str  # UUID of the run
    origin: Origin
    sequence: int  # counts all records of the run from 1, without holes
    previous: int | None  # sequence of the record before it on the same topic
    time_ns: int  # stream time
    time_quality: TimeQuality
    body: Body

    @property
    def kind(self) -> str:
        """The word for the body's kind on the wire."""
        return KIND_OF[type(self.body)]


@dataclass(frozen=True, slots=True)
class Heartbeat:
    """Every second on the bus; neither numbered nor stored."""

    station: str
    run: str
    origin: Origin
    time_ns: int
    time_quality: TimeQuality
    uptime_s: float
    sample_age_s: float | None  # since the last sample arrived; None before the first
    queue_fill: float  # 0 empty to 1 full
    worst_alert: Priority | None  # highest priority that stands
    sequence: int  # of the last record published
    unsaved: int = 0  # records that could not be stored when they were due, and so were not published: they wait
    unsaved_s: float = 0.0  # since the store first took no rows, until all that waited is stored


# ---------------------------------------------------------------------------------------------- topics


def topic_of(body: Body) -> str:
    """Return the bus topic of a body: its kind, then what it is about, spaces as ``_``."""
    kind = KIND_OF[type(body)]
    match body:
        case Measurement() | Track() | Change() | Decay() | Baseline():
            about = f"{body.channel}/{body.mode}"
        case Alert():
            about = body.alert
        case Tone() | Level():
            about = body.channel
        case Health():
            about = body.channel or ""
        case Clock():
            about = body.source
        case CovariateValue():
            about = body.name
        case _:
            about = ""
    return f"{kind}/{about}".replace(" ", "_") if about else kind


# ---------------------------------------------------------------------------------------------- times at the edges

_RFC3339 = re.compile(
    r"(\d{4}-\d\d-\d\d)[Tt ](\d\d:\d\d:\d\d)(?:\.(\d{1,9}))?([Zz]|[+-]\d\d:\d\d)",
    re.ASCII,  # digits of other scripts are no RFC 3339
)
_EPOCH = dt.datetime(1970, 1, 1, tzinfo=dt.UTC)


@lru_cache(maxsize=4096)
def _second_text(second: int) -> str:
    return (_EPOCH + dt.timedelta(seconds=second)).strftime("%Y-%m-%dT%H:%M:%S")


def time_text(time_ns: int) -> str:
    """Return UTC nanoseconds as RFC 3339 text with nine decimals and ``Z`` (so that texts sort like times)."""
    second, rest = divmod(time_ns, NS)
    return f"{_second_text(second)}.{rest:09d}Z"


def parse_time(text: str) -> int:
    """Return the UTC nanoseconds of an RFC 3339 text.

    Raises
    ------
    ValueError
        When the text is no RFC 3339 time with a zone, or its nanoseconds need more than 64 bits, saying what was
        expected.
    """
    found = _RFC3339.fullmatch(text.strip())
    if found is None:
        raise ValueError(f"{text!r} is not a time; expected RFC 3339 with a zone, such as 2026-03-01T06:00:00Z")
    date, clock, fraction, zone = found.groups()
    try:
        moment = dt.datetime.fromisoformat(f"{date}T{clock}{'+00:00' if zone in 'Zz' else zone}")
    except ValueError as error:
        raise ValueError(f"{text!r} is not a time: {error}") from None
    since = moment - _EPOCH
    time_ns = (since.days * 86_400 + since.seconds) * NS + int((fraction or "").ljust(9, "0"))
    if not -(2**63) <= time_ns < 2**63:
        raise ValueError(f"{text!r} is not a time of our day; expected one between the years 1678 and 2262")
    return time_ns


def sample_time_ns(start_ns: int, sample: int, rate_hz: int) -> int:
    """Return the stream time of a sample, counted from `start_ns` at `rate_hz`; exact to 1 ns for ever."""
    return start_ns + (sample * NS) // rate_hz


# ---------------------------------------------------------------------------------------------- fields


@dataclass(frozen=True, slots=True)
class FieldInfo:
    """One field of a body as the edges see it."""

    name: str  # in the dataclass
    edge_name: str  # on the wire: without the ``_ns`` of a time
    type: type  # float, int, str, bool, tuple or an enumeration
    item: typing.Any  # what a tuple holds: a type, or None
    optional: bool  # may be None
    is_time: bool  # integer nanoseconds here, RFC 3339 on the wire


@cache
def fields_of(cls: type) -> tuple[FieldInfo, ...]:
    """Return the fields of a body or of `Envelope`, in order."""
    hints: Mapping[str, typing.Any] = typing.get_type_hints(cls)
    return tuple(_field_info(field.name, hints[field.name]) for field in fields(cls) if field.name != "body")


def _field_info(name: str, hint: typing.Any) -> FieldInfo:
    optional = False
    if isinstance(hint, types.UnionType):
        inner = [part for part in typing.get_args(hint) if part is not type(None)]
        hint, optional = inner[0], True
    item = None
    if typing.get_origin(hint) is tuple:
        hint, item = tuple, typing.get_args(hint)[0]
    is_time = name.endswith("_ns")
    return FieldInfo(name, name.removesuffix("_ns") if is_time else name, hint, item, optional, is_time)
