"""What may be asked of a daemon, and what is wrong with what came. Nothing here knows a socket or a thread."""

from __future__ import annotations

import json
import math
import re
import uuid
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any, NoReturn

from driftwatch.bus.errors import KeysError, WireError
from driftwatch.bus.keys import Role, checked_name
from driftwatch.records import HANDOVER

LARGEST_REQUEST = 16_384
"""Bytes of a request."""

LONGEST_REQUEST_ID = LONGEST_BY = 64
LONGEST_TARGET = 200
LONGEST_REASON = 2000
LONGEST_UNIT = 32
"""Characters."""

FIELDS: Mapping[str, tuple[str, ...]] = {
    "status": (),
    "since": ("run", "sequence"),
    "acknowledge": ("target", "reason"),
    "note": ("target", "reason"),
    "covariate": ("target", "value", "unit", "reason"),
    "reload": ("reason",),
    "stop": ("reason",),
}
"""Every action, and what it takes beside ``request``, ``action`` and ``by``."""

LOOKING = frozenset({"status", "since"})
"""Actions that change nothing."""

_ALL_FIELDS = ("request", "action", "by", "target", "reason", "value", "unit", "run", "sequence")
_LINES = re.compile(r"[\n\t]")


class RequestError(WireError):
    """A request cannot be understood.

    Attributes
    ----------
    request
        Its id, where that much could be read.
    """

    def __init__(self, text: str, request: str | None = None) -> None:
        super().__init__(text)
        self.request = request


@dataclass(frozen=True, slots=True)
class Request:
    """What somebody asks for; what its action does not take is None."""

    request: str  # id chosen by the asker: the same again gets the same answer and is not done again
    action: str  # a key of `FIELDS`
    by: str | None = None  # the person, where the asker says who
    target: str | None = None
    reason: str | None = None
    value: float | None = None  # finite
    unit: str | None = None
    run: str | None = None  # UUID
    sequence: int = 0


def may(role: Role, action: str) -> bool:
    """Say whether a key of a role may ask for an action."""
    return role is Role.OPERATE or action in LOOKING


def parse_request(raw: bytes) -> Request:
    """Return the request in a message.

    Raises
    ------
    RequestError
        When it is none, saying what came and what was expected.
    """
    found = _object(raw)
    identity = found.get("request")
    if not isinstance(identity, str) or not 1 <= len(identity) <= LONGEST_REQUEST_ID or not identity.isprintable():
        _refuse("request", identity, f"an id of 1 to {LONGEST_REQUEST_ID} printable characters", None)
    try:
        return _request(found, identity)
    except RequestError as error:
        raise RequestError(str(error), identity) from None


def _object(raw: bytes) -> dict[str, Any]:
    if len(raw) > LARGEST_REQUEST:
        raise RequestError(f"got {len(raw)} bytes; expected at most {LARGEST_REQUEST}")
    try:
        found = json.loads(raw.decode("utf-8"), object_pairs_hook=_once, parse_constant=_no_constant)
    except (ValueError, RecursionError) as error:
        raise RequestError(f"got {raw[:40]!r}: {str(error)[:200]}; expected one JSON object in UTF-8") from None
    if not isinstance(found, dict):
        raise RequestError(f"got {raw[:40]!r}; expected one JSON object")
    return {name: value for name, value in found.items() if value is not None}


def _once(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) < len(pairs):
        raise ValueError("a field came twice")
    return found


def _no_constant(text: str) -> NoReturn:
    raise ValueError(f"{text} is no JSON")


def _request(found: dict[str, Any], identity: str) -> Request:
    action = found.get("action")
    if not isinstance(action, str) or action not in FIELDS:
        _refuse("action", action, f"one of {', '.join(FIELDS)}", identity)
    for name in found:
        if name not in ("request", "action", "by", *FIELDS[action]):
            takes = ", ".join(("request", "action", "by", *FIELDS[action]))
            _refuse(name if name in _ALL_FIELDS else "a field", name, f"only {takes} with {action}", identity)
    request = Request(
        identity,
        action,
        _text(found, "by", LONGEST_BY),
        _text(found, "target", LONGEST_TARGET),
        _text(found, "reason", LONGEST_REASON, lines=True),
        _number(found),
        _text(found, "unit", LONGEST_UNIT, empty=True),
        _run(found),
        _sequence(found),
    )
    _check(request)
    if action == "covariate":
        return replace(request, target=checked_name(request.target or ""))  # equal looks are equal names
    return request


def _check(request: Request) -> None:
    """Refuse a request that lacks what its action needs."""
    match request.action:
        case "acknowledge" if request.target is None:
            _refuse("target", None, "the name of an alert: channel/mode/band", request.request)
        case "note" if request.reason is None:
            _refuse("reason", None, "the text of the note", request.request)
        case "note" if request.target not in (None, HANDOVER):
            _refuse("target", request.target, f"{HANDOVER}, for the next shift, or none", request.request)
        case "covariate":
            _check_covariate(request)
        case _:
            return


def _check_covariate(request: Request) -> None:
    try:
        checked_name(request.target or "")
    except KeysError:
        _refuse("target", request.target, "a name of 1 to 64 letters, digits, spaces, . or -", request.request)
    if request.unit is None:
        _refuse("unit", None, "the unit of the value", request.request)


def _text(found: dict[str, Any], name: str, longest: int, *, lines: bool = False, empty: bool = False) -> str | None:
    value = found.get(name)
    if value is None:
        return None
    seen = _LINES.sub("", value) if lines and isinstance(value, str) else value
    if not isinstance(value, str) or len(value) > longest or not seen.isprintable() or not (empty or value.strip()):
        least = 0 if empty else 1
        _refuse(name, value, f"text of {least} to {longest} printable characters", None)
    return value


def _number(found: dict[str, Any]) -> float | None:
    value = found.get("value")
    if value is None:
        return None
    if isinstance(value, bool) or not isinstance(value, int | float) or abs(value) > 1e308 or math.isnan(value):
        _refuse("value", value, "a finite number", None)
    return float(value)


def _run(found: dict[str, Any]) -> str | None:
    value = found.get("run")
    if value is None:
        return None
    try:
        return str(uuid.UUID(value))
    except (ValueError, AttributeError, TypeError):
        _refuse("run", value, "the UUID of a run, or null", None)


def _sequence(found: dict[str, Any]) -> int:
    value = found.get("sequence", 0)
    if type(value) is not int or not 0 <= value < 2**63:
        _refuse("sequence", value, "a whole number, the last sequence that came", None)
    return int(value)


def _refuse(name: str, came: object, expected: str, identity: str | None) -> NoReturn:
    raise RequestError(f"{name}: got {_shown(came)}; expected {expected}", identity)


def _shown(came: object) -> str:
    """Return what came, short and printable; what is nested is not shown, for it may be nested deeply."""
    match came:
        case None:
            return "nothing"
        case list():
            return "a list"
        case dict():
            return "an object"
    text = ascii(came)
    return text if len(text) <= 60 else f"{text[:57]}..."
