"""Between an envelope and a row: prepared once for each kind, so that a row costs a few attribute look-ups."""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from enum import StrEnum
from functools import cache
from operator import attrgetter
from typing import TYPE_CHECKING, Any

from driftwatch.records import KINDS, Body, Envelope, FieldInfo, Origin, TimeQuality, fields_of

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

HeaderKey = tuple[str, str, Origin, TimeQuality]
"""Run, station, origin and time quality: what picks a row of the table ``header``."""


def header_key(envelope: Envelope) -> HeaderKey:
    """Return what an envelope shares with the others of its run."""
    return (envelope.run, envelope.station, envelope.origin, envelope.time_quality)


def key_of_header(row: Any) -> HeaderKey:
    """Return what the records of a row of the table ``header`` share."""
    return (row.run, row.station, Origin(row.origin), TimeQuality(row.time_quality))


@dataclass(frozen=True, slots=True)
class RowForm:
    """How one kind of record lies in its table."""

    body: type[Body]
    values: Callable[[Body], tuple[Any, ...]]  # the body's fields in order, enumerations as their words
    to_row: tuple[tuple[int, Callable[[Any], Any]], ...]  # position among all columns, conversion
    from_row: tuple[tuple[int, Callable[[Any], Any]], ...]  # position among the body's fields, conversion

    def row(self, header: int, envelope: Envelope) -> tuple[Any, ...]:
        """Return the row of an envelope; `header` is the number of its shared part."""
        row = (header, envelope.sequence, envelope.previous, envelope.time_ns, *self.values(envelope.body))
        if not self.to_row:
            return row
        changed = list(row)
        for place, convert in self.to_row:
            changed[place] = convert(changed[place])
        return tuple(changed)

    def envelope(self, key: HeaderKey, row: Sequence[Any]) -> Envelope:
        """Return the envelope of a row (header, sequence, previous, time_ns, then the body's fields)."""
        run, station, origin, quality = key
        values = list(row[4:])
        for place, convert in self.from_row:
            values[place] = convert(values[place])
        return Envelope(station, run, origin, row[1], row[2], row[3], quality, self.body(*values))


@cache
def form_of(kind: str) -> RowForm:
    """Return how a kind of record lies in its table."""
    body: Any = KINDS[kind]
    fields = fields_of(body)
    getter = attrgetter(*(_path(field) for field in fields))
    values = getter if len(fields) > 1 else lambda value: (getter(value),)
    into = tuple((4 + place, convert) for place, field in enumerate(fields) if (convert := _to_row(field)))
    out = tuple((place, convert) for place, field in enumerate(fields) if (convert := _from_row(field)))
    return RowForm(body, values, into, out)


def _path(field: FieldInfo) -> str:
    # A word of an enumeration is fetched as plain text: the driver binds plain text several times faster.
    return f"{field.name}._value_" if issubclass(field.type, StrEnum) and not field.optional else field.name


def _to_row(field: FieldInfo) -> Callable[[Any], Any] | None:
    if field.type is tuple:
        return _tuple_text
    return None


def _from_row(field: FieldInfo) -> Callable[[Any], Any] | None:
    convert = _reader(field)
    if convert is None or not field.optional:
        return convert
    return lambda value: None if value is None else convert(value)


def _reader(field: FieldInfo) -> Callable[[Any], Any] | None:
    if field.type is tuple:
        return _tuple_of
    if issubclass(field.type, StrEnum):
        return field.type
    if field.type is bool:
        return bool
    if field.type is float and not field.optional:
        return lambda value: math.nan if value is None else value
    return None


def _tuple_text(values: tuple[Any, ...]) -> str:
    return json.dumps(values, ensure_ascii=False, separators=(",", ":")) if values else "[]"


def _tuple_of(text: str) -> tuple[Any, ...]:
    return tuple(json.loads(text)) if text != "[]" else ()
