"""Keys: how a place in the file is written, and which known key an unknown one comes nearest to."""

from __future__ import annotations

import difflib
import typing
from collections.abc import Mapping
from functools import cache
from typing import Any

from pydantic import BaseModel

from driftwatch.config.models import Configuration

Loc = tuple[int | str, ...]
"""A place in the document: keys, and indices from 0."""


def place(document: Any, loc: Loc) -> str:
    """Return a place as a person finds it, items counted from 1 and named: ``mode[2] "rocking" . search_hz``."""
    parts: list[str] = []
    here = document
    for step in loc:
        here = _down(here, step)
        if isinstance(step, str):
            parts.append(step)
            continue
        name = here.get("name") if isinstance(here, Mapping) else None
        parts[-1:] = [f"{parts[-1] if parts else ''}[{step + 1}]" + (f' "{name}"' if isinstance(name, str) else "")]
    return " . ".join(parts) if parts else "file"


def _down(here: Any, step: int | str) -> Any:
    if isinstance(here, Mapping) and isinstance(step, str):
        return here.get(step)
    if isinstance(here, list) and isinstance(step, int) and step < len(here):
        return here[step]
    return None


def known_at(document: Mapping[str, Any], loc: Loc) -> tuple[str, ...]:
    """Return the keys that the table at a place may have, as the file writes them."""
    models: list[type[BaseModel]] = [Configuration]
    here: Any = document
    for step in loc:
        here = _down(here, step)
        if isinstance(step, str):
            models = [inner for model in models for inner in _models_under(model, step)]
        if len(models) > 1 and isinstance(here, Mapping):
            models = [model for model in models if _kind(model) == here.get("kind")]
    return _keys(models[0]) if models else ()


def _keys(model: type[BaseModel]) -> tuple[str, ...]:
    return tuple(field.alias or name for name, field in model.model_fields.items())


def _models_under(model: type[BaseModel], key: str) -> list[type[BaseModel]]:
    """Return the models that a key of a table may hold: several where the kind decides."""
    hints = [field.annotation for name, field in model.model_fields.items() if (field.alias or name) == key]
    return [inner for hint in hints for inner in _models_in(hint)]


def _models_in(hint: Any) -> list[type[BaseModel]]:
    """Return the models that an annotation names, however deep."""
    if isinstance(hint, type):
        return [hint] if issubclass(hint, BaseModel) else []
    return [model for part in typing.get_args(hint) for model in _models_in(part)]


def _kind(model: type[BaseModel]) -> Any:
    field = model.model_fields.get("kind")
    return field.default if field else None


@cache
def _headings() -> dict[str, str]:
    """Return for every known key where it belongs: the heading of the first table that has it."""
    found: dict[str, str] = {}

    def walk(model: type[BaseModel], path: str, heading: str) -> None:
        for key in _keys(model):
            found.setdefault(key, heading)
        for name, field in model.model_fields.items():
            inside = f"{path}.{name}" if path else name
            is_array = typing.get_origin(field.annotation) is tuple
            for inner in _models_in(field.annotation):
                kind = f" of kind {_kind(inner)}" if _kind(inner) else ""
                walk(inner, inside, f"into [[{inside}]]{kind}" if is_array else f"into [{inside}]")

    walk(Configuration, "", "to the top of the file")
    return found


def nearest(unknown: str, known: tuple[str, ...]) -> str:
    """Return the remedy for an unknown key: where it is known, or the nearest known one, in its table first."""
    headings = _headings()
    lower = unknown.lower()
    close = difflib.get_close_matches(lower, known, n=1, cutoff=0.6)
    if lower in headings and not difflib.get_close_matches(lower, close, cutoff=0.85):
        return f"{lower} belongs {headings[lower]}"
    if close:
        return f"did you mean {close[0]}?"
    close = difflib.get_close_matches(lower, list(headings), n=1, cutoff=0.8)
    if close:
        return f"did you mean {close[0]}, which belongs {headings[close[0]]}?"
    return "take it out"
