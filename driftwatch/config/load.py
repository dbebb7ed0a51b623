"""From a file to a configuration, or to everything that is wrong with it."""

from __future__ import annotations

import hashlib
import math
import tomllib
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, get_args

from pydantic import ValidationError
from pydantic_core import ErrorDetails

from driftwatch.config.cross import cross_problems
from driftwatch.config.errors import ConfigError, Problem
from driftwatch.config.keys import Loc, known_at, nearest, place
from driftwatch.config.models import Configuration
from driftwatch.config.sources import SourceConfig


def load(path: Path | str) -> Configuration:
    """Return the configuration in a TOML file.

    Raises
    ------
    ConfigError
        With everything that is wrong: the file missing or no text, its syntax, or its values.
    """
    file = Path(path)
    raw = _bytes_of(file)
    try:
        text = raw.decode("utf-8")
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        came = f"byte 0x{raw[error.start]:02x} in line {line}"
        remedy = "save it as UTF-8, or name a configuration here: recordings come behind it"
        raise ConfigError((Problem(str(file), came, "text in UTF-8", remedy),)) from None
    config = loads(text.removeprefix("\ufeff"), file.parent, name=str(file))
    config._path = file.absolute()
    config._sha256 = hashlib.sha256(raw).hexdigest()
    return config


def _bytes_of(file: Path) -> bytes:
    try:
        return file.read_bytes()
    except FileNotFoundError:
        problem = Problem(str(file), "no such file", "a configuration in TOML", "check the path")
    except IsADirectoryError:
        problem = Problem(str(file), "a directory", "a configuration in TOML", "name the file inside it")
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        problem = Problem(str(file), f"an error on reading: {reason}", "a readable file", "check its permissions")
    raise ConfigError((problem,))


def loads(text: str, base: Path | str = ".", *, name: str = "text") -> Configuration:
    """Return the configuration in a text.

    Parameters
    ----------
    text
        TOML.
    base
        Directory that the relative paths in it start from.
    name
        What to call the text where its syntax is wrong.

    Raises
    ------
    ConfigError
        With everything that is wrong.
    """
    try:
        document = tomllib.loads(text.replace("\r\n", "\n"))
    except tomllib.TOMLDecodeError as error:
        problem = Problem(name, f"no TOML: {error}", "TOML", "correct the line; texts stand in quotes")
        raise ConfigError((problem,)) from None
    except (RecursionError, ValueError) as error:
        problem = Problem(name, f"no TOML: {error}", "TOML", "correct the file")
        raise ConfigError((problem,)) from None
    return from_document(document, base)


def from_document(document: Mapping[str, Any], base: Path | str = ".") -> Configuration:
    """Return the configuration in a parsed document; raise `ConfigError` with everything that is wrong."""
    problems: list[Problem] = []
    config = None
    try:
        config = Configuration.model_validate({"store": {}, **document}, context={"base": Path(base)})
    except ValidationError as error:
        problems += _translated(document, error)
    problems += cross_problems(document)
    if config is None or problems:
        raise ConfigError(tuple(dict.fromkeys(problems)))
    return config


# ---------------------------------------------------------------------------------------------- translation


def _translated(document: Mapping[str, Any], error: ValidationError) -> Iterator[Problem]:
    for detail in error.errors(include_url=False):
        if detail["type"] != "default_factory_not_called":  # follows from another error of the same table
            yield _problem(document, detail)


def _problem(document: Mapping[str, Any], detail: ErrorDetails) -> Problem:
    loc = _without_kind(detail["loc"])
    if detail["type"] == "extra_forbidden":
        return _unknown_key(document, loc)
    context = detail.get("ctx", {})
    key = place(document, loc)
    if detail["type"] == "refused":
        came = context["came"] or shown(detail["input"])
        return Problem(key, came, context["expected"], context["remedy"])
    if detail["type"] in ("missing", "union_tag_not_found"):
        wanted = (*loc, "kind") if detail["type"] == "union_tag_not_found" else loc
        return Problem(place(document, wanted), "nothing", _needed(str(wanted[-1])), f"add {wanted[-1]}")
    if detail["type"] == "union_tag_invalid":
        came = shown(detail["input"]["kind"])
        return Problem(f"{key} . kind", came, _needed("kind"), "correct it")
    expected, remedy = _expected(detail["type"], context, loc)
    return Problem(key, shown(detail["input"]), expected, remedy)


def _without_kind(loc: Loc) -> Loc:
    """Return the place without the tag that the choice among sources puts after a source's index."""
    is_tagged = len(loc) > 2 and loc[0] == "source" and isinstance(loc[2], str) and loc[2] in KINDS
    return (*loc[:2], *loc[3:]) if is_tagged else loc


KINDS: tuple[str, ...] = tuple(str(model.model_fields["kind"].default) for model in get_args(get_args(SourceConfig)[0]))
"""Every kind of source."""


def _needed(key: str) -> str:
    return {"kind": "one of " + ", ".join(KINDS), "schema": "schema = 1"}.get(key, "a value, for it has no default")


def _unknown_key(document: Mapping[str, Any], loc: Loc) -> Problem:
    known = known_at(document, loc[:-1])
    return Problem(place(document, loc), "an unknown key", "one of " + ", ".join(known), nearest(str(loc[-1]), known))


_PLAIN = {
    "string_type": ("text in quotes", "put it in quotes"),
    "string_too_short": ("text that is not empty", "write something or leave the key out"),
    "float_type": ("a number", "write it without quotes"),
    "int_type": ("a whole number", "write it without quotes and without a decimal point"),
    "int_from_float": ("a whole number", "write it without a decimal point"),
    "bool_type": ("true or false", "write it without quotes"),
    "finite_number": ("a finite number", "nan and inf are no values here"),
    "model_type": ("a table", "write it under a heading of its own, or in braces"),
    "model_attributes_type": ("a table", "write it under a heading of its own, or in braces"),
    "tuple_type": ("an array", "write it in [ ]"),
}
_BOUNDS = {
    "greater_than": ("a number over {gt:g}", "correct it"),
    "greater_than_equal": ("a number of at least {ge:g}", "correct it"),
    "less_than": ("a number under {lt:g}", "correct it"),
    "less_than_equal": ("a number of at most {le:g}", "correct it"),
    "string_too_long": ("text of at most {max_length} characters", "shorten it"),
    "literal_error": ("{expected}", "correct it"),
    "enum": ("{expected}", "correct it"),
}
_ARRAYS_OF_TABLES = ("source", "channel", "regime", "mode", "alert", "band", "resonator", "tone")


def _expected(kind: str, context: dict[str, Any], loc: Loc) -> tuple[str, str]:
    """Return what was expected and the remedy for an error of the validation library's own."""
    if kind == "tuple_type" and loc and loc[-1] in _ARRAYS_OF_TABLES:
        heading = ".".join(str(step) for step in loc if isinstance(step, str))
        return "an array of tables", f"write the heading as [[{heading}]]"
    if kind in _PLAIN:
        return _PLAIN[kind]
    if kind in _BOUNDS:
        expected, remedy = _BOUNDS[kind]
        return expected.format(**context), remedy
    return f"another value ({kind.replace('_', ' ')})", "correct it"


def shown(value: Any) -> str:
    """Return a value as the file would show it, on one line and not too long."""
    match value:
        case bool():
            text = str(value).lower()
        case float() if not math.isfinite(value):
            text = str(value)
        case float():
            text = f"{value:.12g}"
        case str():
            text = f'"{value}"'
        case Mapping():
            text = "a table"
        case list() | tuple():
            text = "[" + ", ".join(shown(item) for item in value[:8]) + (", ...]" if len(value) > 8 else "]")
        case int() if abs(value) > 10**40:
            text = "a number of more than 40 digits"
        case _:
            text = str(value)
    return text if len(text) <= 120 else text[:117] + "..."
