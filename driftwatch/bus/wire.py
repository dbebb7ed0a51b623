"""The encoding of records on the wire and under ``--json``: one flat JSON object each.

First the header (`HEADER_FIELDS`), then the body's fields by their edge names. Times are RFC 3339 text with ``Z``;
what is unknown or not finite is null; real numbers are written with all their digits, so that `decode` gives back
exactly what `encode` was given.
"""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from enum import StrEnum
from functools import cache, lru_cache
from operator import attrgetter
from typing import TYPE_CHECKING, Any

from driftwatch.bus.errors import WireError
from driftwatch.records import (
    KIND_OF,
    KINDS,
    SCHEMA,
    Body,
    Envelope,
    FieldInfo,
    Heartbeat,
    Origin,
    TimeQuality,
    fields_of,
    parse_time,
    time_text,
)

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping, Sequence

HEADER_FIELDS = ("kind", "schema", "station", "run", "origin", "sequence", "previous", "time", "time_quality")
"""The first fields of every object, in this order."""

HEARTBEAT = "heartbeat"
"""Kind and topic of the message that says every second that the daemon lives."""

REPEATED = "repeated"
"""Last member of a message that was sent before and is sent again for somebody who came late; always true."""

_encode_finite = json.JSONEncoder(
    ensure_ascii=False, check_circular=False, allow_nan=False, separators=(",", ":")
).encode

_MARK = "\0"
"""Between the values of a line in the making; JSON text never holds it, for control characters are escaped."""

_encode_values = json.JSONEncoder(
    ensure_ascii=False, check_circular=False, allow_nan=False, separators=(_MARK, ":")
).encode


@dataclass(frozen=True, slots=True)
class _Form:
    """How one kind of body stands on the wire."""

    names: tuple[str, ...]  # edge names, in order
    values: Callable[[Any], tuple[Any, ...]]
    times: tuple[tuple[int, str], ...]  # places and edge names of the times


@cache
def _form_of(kind: str) -> _Form:
    body: Any = KINDS[kind]
    fields = fields_of(body)
    getter = attrgetter(*(field.name for field in fields))
    values = getter if len(fields) > 1 else lambda body: (getter(body),)
    times = tuple((place, field.edge_name) for place, field in enumerate(fields) if field.is_time)
    return _Form(tuple(field.edge_name for field in fields), values, times)


@lru_cache(maxsize=256)
def _template(kind: str, station: str, run: str, origin: Origin, time_quality: TimeQuality) -> str:
    """Return the line of a kind with what a run's records share filled in, and ``%s`` for each value that varies."""
    fixed = {"kind": kind, "schema": SCHEMA, "station": station, "run": run, "origin": origin}
    before = _encode_finite(fixed).replace("%", "%%")
    body = "".join(f',"{name}":%s' for name in _form_of(kind).names)
    return f'{before[:-1]},"sequence":%s,"previous":%s,"time":%s,"time_quality":"{time_quality}"{body}}}'


def _encoded(envelope: Envelope) -> dict[str, Any]:
    kind = envelope.kind
    form = _form_of(kind)
    message: dict[str, Any] = {
        "kind": kind,
        "schema": SCHEMA,
        "station": envelope.station,
        "run": envelope.run,
        "origin": envelope.origin,
        "sequence": envelope.sequence,
        "previous": envelope.previous,
        "time": time_text(envelope.time_ns),
        "time_quality": envelope.time_quality,
    }
    message.update(zip(form.names, form.values(envelope.body), strict=True))
    for _, name in form.times:
        if (time_ns := message[name]) is not None:
            message[name] = time_text(time_ns)
    return message


def _plain(value: Any) -> Any:
    """Return what JSON knows: null for a number that is not finite, lists for tuples, words for enumerations."""
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, StrEnum):
        return value.value
    if isinstance(value, tuple):
        return [_plain(item) for item in value]
    return value


def line_of(message: dict[str, Any]) -> bytes:
    """Return an object as the bus carries it: a line of UTF-8 without its end, with null for a number not finite."""
    try:
        return _encode_finite(message).encode()
    except ValueError:  # some number is not finite: rare, so looked for only then
        return _encode_finite({name: _plain(value) for name, value in message.items()}).encode()


def encode(envelope: Envelope) -> dict[str, Any]:
    """Return the object of an envelope, of JSON's own types only."""
    return {name: _plain(value) for name, value in _encoded(envelope).items()}


def encode_json(envelope: Envelope) -> bytes:
    """Return the object of an envelope as one line of UTF-8 without its end."""
    # The values go through the C encoder as one list and into a prepared line: twice as fast as an object with names.
    kind = KIND_OF[type(envelope.body)]
    form = _form_of(kind)
    values: Sequence[Any] = form.values(envelope.body)
    if form.times:
        values = _with_times(form, values)
    try:
        text = _encode_values([envelope.sequence, envelope.previous, time_text(envelope.time_ns), *values])
    except ValueError:  # some number is not finite
        return line_of(_encoded(envelope))
    parts = tuple(text[1:-1].split(_MARK))
    if len(parts) != 3 + len(values):  # a list of several items was cut as well
        return line_of(_encoded(envelope))
    line = _template(kind, envelope.station, envelope.run, envelope.origin, envelope.time_quality) % parts
    return line.encode()


def _with_times(form: _Form, values: Sequence[Any]) -> list[Any]:
    changed = list(values)
    for place, _ in form.times:
        if (time_ns := changed[place]) is not None:
            changed[place] = time_text(time_ns)
    return changed


def encode_heartbeat(heartbeat: Heartbeat) -> bytes:
    """Return the object of a heartbeat as one line of UTF-8 without its end."""
    message: dict[str, Any] = {"kind": HEARTBEAT, "schema": SCHEMA}
    for field in fields_of(Heartbeat):
        value = getattr(heartbeat, field.name)
        message[field.edge_name] = time_text(value) if field.is_time else value
    return line_of(message)


def as_repeated(line: bytes) -> bytes:
    """Return the line of a message with the mark that it was sent before."""
    return line[:-1] + f',"{REPEATED}":true}}'.encode()


def is_repeated(message: Mapping[str, Any]) -> bool:
    """Whether a message was sent before: it tells a last value, and nothing of what has happened since."""
    return message.get(REPEATED) is True


def decode(message: Mapping[str, Any]) -> Envelope:
    """Return the envelope of an object, the inverse of `encode`.

    Members that this version does not know, and the mark `REPEATED`, are passed over. A null where a number must stand
    (it was not finite) becomes NaN.

    Raises
    ------
    WireError
        When the object is no record, saying which field is wrong.
    """
    kind = message.get("kind")
    if not isinstance(kind, str) or kind not in KINDS:
        raise WireError(f"kind {kind!r} is unknown; expected one of {', '.join(KINDS)}")
    if message.get("schema") != SCHEMA:
        raise WireError(f"schema {message.get('schema')!r} is unknown; expected {SCHEMA}; use the version that sent it")
    cls: Any = KINDS[kind]
    body: Body = cls(**_decoded(cls, message))
    return Envelope(**_decoded(Envelope, message), body=body)


def decode_heartbeat(message: Mapping[str, Any]) -> Heartbeat:
    """Return the heartbeat of an object, the inverse of `encode_heartbeat`.

    Raises
    ------
    WireError
        When the object is no heartbeat, saying which field is wrong.
    """
    if message.get("kind") != HEARTBEAT:
        raise WireError(f"kind {message.get('kind')!r} is no {HEARTBEAT}")
    return Heartbeat(**_decoded(Heartbeat, message))


def _decoded(cls: type, message: Mapping[str, Any]) -> dict[str, Any]:
    return {field.name: _field(field, message) for field in fields_of(cls)}


def _field(field: FieldInfo, message: Mapping[str, Any]) -> Any:
    if field.edge_name not in message:
        raise WireError(f"{message.get('kind')} has no field {field.edge_name!r}")
    value = message[field.edge_name]
    if value is None and field.optional:
        return None
    try:
        return _value(field, value)
    except (TypeError, ValueError) as error:
        raise WireError(f"{message.get('kind')}.{field.edge_name} is {value!r}: {error}") from None


def _value(field: FieldInfo, value: Any) -> Any:
    if field.is_time:
        return parse_time(_checked(value, str))
    if field.type is tuple:
        return tuple(_number(item) if field.item is float else item for item in _checked(value, list))
    if issubclass(field.type, StrEnum):
        return field.type(value)
    return _number(value) if field.type is float else _checked(value, field.type)


def _number(value: Any) -> float:
    return math.nan if value is None else float(_checked(value, (int, float)))


def _checked(value: Any, kind: type | tuple[type, ...]) -> Any:
    if not isinstance(value, kind) or (isinstance(value, bool) and kind is not bool):
        words = " or ".join(one.__name__ for one in (kind if isinstance(kind, tuple) else (kind,)))
        raise TypeError(f"expected {words}")
    return value
