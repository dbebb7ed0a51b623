"""The JSON Schema (2020-12) of all that the bus carries, made from the vocabulary."""

from __future__ import annotations

import inspect
import re
from enum import StrEnum
from functools import cache
from typing import Any

from driftwatch.bus.wire import HEADER_FIELDS, HEARTBEAT, REPEATED
from driftwatch.records import KINDS, REASONS, SCHEMA, Envelope, FieldInfo, Heartbeat, fields_of

DIALECT = "https://json-schema.org/draft/2020-12/schema"

PROMISE = (
    f"Within schema {SCHEMA} the names of members, their meaning, their units and their types do not change, none goes "
    "away, and a word keeps its meaning. What may come at any time: new members of an object, new kinds of objects "
    "with topics of their own, and new words in `reason`, `reasons`, `fault` and `condition`. So pass over members, "
    "kinds and words that you do not know. Whatever else changes raises the number `schema`."
)
"""What whoever reads the bus can rely on."""

CONVENTIONS = (
    "Each message is two frames: the topic (the kind, then what it is about, parted by /, spaces as _) and one object "
    "of this schema, UTF-8. Records are stored before they are published. Times are UTC, RFC 3339; frequencies are "
    "undamped natural frequencies in Hz on the nominal sample rate; Q is 1/(2 zeta); _std is a standard uncertainty; "
    "q_low and q_high bound the 95 % interval. What is not known, or no finite number, is null."
)

_TIME = r"^\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d\.\d{9}Z$"

_GROWING = {("health", "fault"), ("alert", "condition")}
"""Kind and field of words of which more may come."""

_HEADER_WORDS = {
    "kind": "What this object is.",
    "schema": "Version of the record layout.",
    "time": "Stream time.",
    "previous": "Sequence of the record before it on the same topic; null: it is the first one of the run there.",
}

_REPEATED_WORDS = (
    "This was sent before, and is sent again since somebody subscribed: the last value of its topic, nothing new."
)

_FIELD = re.compile(r"^    (\w+): [^#\n]+#\s*(.+)$", re.MULTILINE)


def schema() -> dict[str, Any]:
    """Return the schema of a message's object: one definition for each kind, told apart by ``kind``."""
    definitions = {kind: _record(kind) for kind in KINDS} | {HEARTBEAT: _heartbeat()}
    return {
        "$schema": DIALECT,
        "title": f"What driftwatch publishes, schema {SCHEMA}",
        "description": f"{CONVENTIONS} {PROMISE}",
        "type": "object",
        "required": ["kind", "schema"],
        "oneOf": [{"$ref": f"#/$defs/{kind}"} for kind in definitions],
        "$defs": definitions,
    }


def _record(kind: str) -> dict[str, Any]:
    header = {field.edge_name: _value(field, _HEADER_WORDS | _words(Envelope), "") for field in fields_of(Envelope)}
    header |= _named(kind)
    cls: Any = KINDS[kind]
    body = {field.edge_name: _value(field, _words(cls), kind) for field in fields_of(cls)}
    properties = {name: header[name] for name in HEADER_FIELDS} | body
    repeated = {REPEATED: {"const": True, "description": _REPEATED_WORDS}}
    return _object(_first_line(cls), properties, repeated)


def _heartbeat() -> dict[str, Any]:
    words = _HEADER_WORDS | _words(Heartbeat)
    fields = {field.edge_name: _value(field, words, HEARTBEAT) for field in fields_of(Heartbeat)}
    return _object(_first_line(Heartbeat), _named(HEARTBEAT) | fields, {})


def _named(kind: str) -> dict[str, Any]:
    return {
        "kind": {"const": kind, "description": _HEADER_WORDS["kind"]},
        "schema": {"const": SCHEMA, "description": _HEADER_WORDS["schema"]},
    }


def _object(description: str, required: dict[str, Any], more: dict[str, Any]) -> dict[str, Any]:
    return {
        "type": "object",
        "description": description,
        "properties": required | more,
        "required": list(required),
    }


def _value(field: FieldInfo, words: dict[str, str], kind: str) -> dict[str, Any]:
    found = _type(field, growing=(kind, field.name) in _GROWING)
    if field.edge_name in words:
        found["description"] = words[field.edge_name]
    if field.edge_name in ("reason", "reasons") and kind in ("measurement", "track"):
        told = "; ".join(f"{word}: {meaning}" for word, meaning in REASONS.items())
        found["description"] = f"Why, in fixed words, of which more may come. {told}."
    return found


def _type(field: FieldInfo, *, growing: bool) -> dict[str, Any]:
    if field.is_time:
        return {"type": _or_null("string", field.optional), "format": "date-time", "pattern": _TIME}
    if field.type is tuple:
        return {"type": _or_null("array", field.optional), "items": {"type": _simple(field.item, optional=False)}}
    if issubclass(field.type, StrEnum):
        names = [word.value for word in field.type]
        if growing:
            return {"type": _or_null("string", field.optional), "examples": names}
        return {"enum": [*names, None] if field.optional else names}
    return {"type": _simple(field.type, optional=field.optional)}


def _simple(kind: type, *, optional: bool) -> str | list[str]:
    if kind is float:  # one that is not finite is null
        return ["number", "null"]
    return _or_null({int: "integer", bool: "boolean", str: "string"}[kind], optional)


def _or_null(name: str, optional: bool) -> str | list[str]:
    return [name, "null"] if optional else name


def _first_line(cls: type) -> str:
    return (inspect.getdoc(cls) or "").partition("\n")[0]


@cache
def _words(cls: type) -> dict[str, str]:
    """Return what stands behind the fields of a class in its source, by edge name: its unit and meaning."""
    try:
        source = inspect.getsource(cls)
    except OSError:  # installed without sources
        return {}
    names = {field.name: field.edge_name for field in fields_of(cls)}
    return {names[name]: _sentence(words) for name, words in _FIELD.findall(source) if name in names}


def _sentence(words: str) -> str:
    is_word = words[:2].isalpha()  # and no formula
    return f"{words[0].upper() if is_word else words[0]}{words[1:]}."
