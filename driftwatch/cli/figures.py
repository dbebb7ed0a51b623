"""Figures for people: a value with as many digits as its uncertainty allows."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from driftwatch.alert.words import decimals_of, with_std
from driftwatch.records import NS, time_text

if TYPE_CHECKING:
    from collections.abc import Mapping

NONE = "-"
"""Stands for what is not known."""


def known_with_std(value: float | None, std: float | None) -> str:
    """Return ``900.123 ± 0.012``, or what stands for the unknown."""
    return NONE if value is None else with_std(value, std)


def with_interval(value: float | None, low: float | None, high: float | None) -> str:
    """Return ``40.1 (37.5 to 42.8)``, to a thirtieth of the interval or finer."""
    if value is None:
        return NONE
    if low is None or high is None or not high > low:
        return f"{value:.4g}"
    places = decimals_of((high - low) / 3)
    return f"{value:.{places}f} ({low:.{places}f} to {high:.{places}f})"


def moment(time_ns: int) -> str:
    """Return a time to the millisecond."""
    return f"{time_text(time_ns)[:-7]}Z"


def duration(seconds: float) -> str:
    """Return a length of time in its two largest units: ``2 d 3 h``, ``4 min 10 s``, ``2.5 s``."""
    if seconds < 60:
        return f"{seconds:.3g} s"
    rest = round(seconds)
    for unit, length, below, small in (("d", 86_400, "h", 3600), ("h", 3600, "min", 60), ("min", 60, "s", 1)):
        if rest >= length:
            return f"{rest // length} {unit} {rest % length // small} {below}"
    return f"{rest} s"


def span(first_ns: int, last_ns: int) -> str:
    """Return the length of time between two moments."""
    return duration((last_ns - first_ns) / NS)


def in_words(message: Mapping[str, Any]) -> str:
    """Return what a message of the bus says, without its header, in one line for people."""
    match message["kind"]:
        case "measurement":
            told = ("not usable: " + ", ".join(message["reasons"])) if not message["usable"] else "usable"
            return f"{message['method']}  {_pole(message)}  {told}"
        case "track":
            reason = f" ({message['reason']})" if message["reason"] else ""
            return f"{message['status']}{reason}  {_pole(message)}"
        case "alert":
            return (
                f"{message['previous_state']} -> {message['state']}  {message['priority']}  {message['reason'] or ''}"
            )
        case "note":
            return f"{message['by']}{' for the next shift' if message['handover'] else ''}: {message['text']}"
        case "command":
            target = f" {message['target']}" if message["target"] else ""
            return (
                f"{message['action']}{target} by {message['by']}: {message['outcome'] or 'not known what came of it'}"
            )
        case "heartbeat":
            age = message["sample_age_s"]
            samples = "no sample yet" if age is None else f"last sample {duration(age)} ago"
            return f"up {duration(message['uptime_s'])}, {samples}, worst alert {message['worst_alert'] or 'none'}"
    skip = {"kind", "schema", "station", "run", "origin", "sequence", "previous", "time", "time_quality"}
    return "  ".join(
        f"{name} {value}" for name, value in message.items() if name not in skip and value not in (None, [])
    )


def _pole(message: Mapping[str, Any]) -> str:
    frequency = known_with_std(message["frequency_hz"], message["frequency_std_hz"])
    q = with_interval(message["q"], message["q_low"], message["q_high"])
    return f"{frequency} Hz  Q {q}"
