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


def known_here(model: type[BaseModel]) -> tuple[str, ...]:
    """Return the keys of a table as the file writes them."""
    return tuple(field.alias or name for name, field in model.model_fields.items())


def tables_at(loc: Loc, kind: str | None = None) -> type[BaseModel] | None:
    """Return the model of the table at a place; `kind` chooses among the sources."""
    model: type[BaseModel] = Configuration
    for step in loc:
        if isinstance(step, int):
            continue
        field = next((field for name, field in model.model_fields.items() if step in (name, field.alias)), None)
        choices = _models_in(field.annotation) if field else []
        if not choices:
            return None
        model = next((one for one in choices if _is_kind(one, kind)), choices[0])
    return model


def _is_kind(model: type[BaseModel], kind: str | None) -> bool:
    field = model.model_fields.get("kind")
    return field is not None and field.default == kind


def _models_in(hint: Any) -> list[type[BaseModel]]:
    """Return the models that an annotation names, however deep."""
    if isinstance(hint, type):
        return [hint] if issubclass(hint, BaseModel) else []
    return [model for part in typing.get_args(hint) for model in _models_in(part)]


@cache
def _tables_of_keys() -> dict[str, str]:
    """Return for every known key the first table that has it, as its heading is written."""
    found: dict[str, str] = {}

    def walk(model: type[BaseModel], heading: str) -> None:
        for key in known_here(model):
            found.setdefault(key, heading)
        for name, field in model.model_fields.items():
            for inner in _models_in(field.annotation):
                walk(inner, f"{heading}.{name}" if heading else name)

    walk(Configuration, "")
    return found


def nearest(unknown: str, known: tuple[str, ...]) -> str:
    """Return the remedy for an unknown key: the nearest one known in its table, or elsewhere."""
    close = difflib.get_close_matches(unknown.lower(), known, n=1, cutoff=0.6)
    if close:
        return f"did you mean {close[0]}?"
    elsewhere = _tables_of_keys()
    close = difflib.get_close_matches(unknown.lower(), list(elsewhere), n=1, cutoff=0.8)
    if close:
        heading = elsewhere[close[0]]
        return f"{close[0]} belongs {f'into the table {heading}' if heading else 'to the top of the file'}"
    return "take it out"
