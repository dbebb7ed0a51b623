"""What stands on a board as lines of text, worst first, for any width and height.

Colour is help, never the only sign: each line says in words what its colour means.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from driftwatch.alert.words import track_words, with_std
from driftwatch.cli.board import SAMPLES_LATE_S, Board, Verdict
from driftwatch.cli.figures import NONE, duration, known_with_std, moment, with_interval
from driftwatch.cli.view import elided, folded, health_place, is_back, key_of
from driftwatch.records import NS, Alert, AlertState, Health, Track, TrackStatus

LARGE_PER_DAY = 0.01
"""Drift, or its uncertainty, as a share of the frequency a day, from which on it is given by the hour."""

UNKNOWN_PER_HOUR = 0.1
"""Uncertainty of the drift as a share of the frequency an hour from which on a drift no larger than it is not told."""

COLOURS = {
    Verdict.QUIET: "green",
    Verdict.UNREACHABLE: "red",
    Verdict.ALERT: "red",
    Verdict.CANNOT_TELL: "yellow",
}

_STATUS_COLOUR = {TrackStatus.LOST: "red", TrackStatus.HELD: "yellow", TrackStatus.SEARCHING: "yellow"}

_INDENT = "    "
_GAP = "  "
_LAYOUTS = (  # places of status, name, frequency, Q, drift, seen: in one line where they fit, else in several
    ((0, 1, 2, 3, 4, 5),),
    ((0, 1, 5), (2, 3, 4)),
    ((0, 1, 5), (2, 3), (4,)),
    ((0, 1), (2, 5), (3,), (4,)),
)


@dataclass(frozen=True, slots=True)
class Entry:
    """One thing that is shown whole or not at all."""

    what: str  # kind of thing, for the count of what has no room
    lines: tuple[str, ...]
    colour: str | None = None


def drift_text(track: Track) -> str:
    """Return the drift in Hz a day, or an hour where it is large, ``-1.2 ± 0.3 Hz/d``."""
    rate, std, frequency_hz = track.drift_per_day, track.drift_std_per_day, track.frequency_hz
    if rate is None or frequency_hz is None or not math.isfinite(rate):
        return NONE
    known_std = std if std is not None and math.isfinite(std) else 0.0
    if known_std / 24 > UNKNOWN_PER_HOUR and abs(rate) < 2 * known_std:
        return "not known yet"
    per_day = max(abs(rate), known_std) <= LARGE_PER_DAY
    scale, unit = (frequency_hz, "Hz/d") if per_day else (frequency_hz / 24, "Hz/h")
    return f"{with_std(rate * scale, known_std * scale)} {unit}"


def head(board: Board) -> list[Entry]:
    """Return what stands at the top: the verdict with its counts, then since when and how the daemon does."""
    alerts, untold, faults = len(board.standing), len(board.untold), len(board.faults)
    modes = len(board.names)
    counts = [
        f"{_count(alerts, 'alert')} {'stands' if alerts == 1 else 'stand'}" if alerts else "no alert stands",
        *([f"{_count(untold, 'alert')} cannot be told"] if untold else []),
        *([f"{_count(faults, 'fault')} open"] if faults else []),
        f"{modes - board.unfollowed} of {_count(modes, 'mode')} tracked",
    ]
    verdict = board.verdict
    text = f"{verdict.word}{_GAP}{board.station or 'station'}: {', '.join(counts)}"
    return [Entry("verdict", (text,), COLOURS[verdict]), Entry("state", (_state(board),))]


def _state(board: Board) -> str:
    """Return since when it runs, and the daemon's own health."""
    told = []
    beat = board.heartbeat
    late = beat is None or beat.sample_age_s is None or beat.sample_age_s > SAMPLES_LATE_S
    if board.begun_ns is not None:
        told.append(f"{'running' if late and beat else 'measuring'} since {moment(board.begun_ns)}")
    if beat is not None:
        told.append(f"up {duration(round(beat.uptime_s))}")
        age = beat.sample_age_s
        told.append("no sample yet" if age is None else f"last sample {duration(round(age, 1))} ago")
        told.append(f"queue {100 * beat.queue_fill:.0f} % full")
    if board.clock is not None and board.clock.deviation_ppm is not None:
        clock = known_with_std(board.clock.deviation_ppm, board.clock.deviation_std_ppm)
        told.append(f"sample clock off by {clock} ppm")
    if board.run:
        told.append(f"run {board.run[:8]}, {board.origin}")
    return "; ".join(told)


def entries(board: Board, width: int) -> list[Entry]:
    """Return what is shown below the head, worst first, in lines of at most `width` columns.

    Alerts that stand by priority, then what cannot be told, then open faults, then the modes.
    """
    found = [Entry("alert that stands", (alert_text(alert, board.now_ns),), "red") for alert in board.standing]
    found += [Entry("doubt", (f"CANNOT TELL{_GAP}{text}",), "yellow") for text in board.not_told]
    found += [Entry("doubt", (text,), "yellow") for text in _untold(board)]
    found += [Entry("fault", (fault_text(fault, board.now_ns),), "yellow") for fault in board.faults]
    return [*(wrapped(entry, width) for entry in found), *mode_entries(board, width)]


def wrapped(entry: Entry, width: int) -> Entry:
    """Return an entry in lines that fit."""
    lines = tuple(line for text in entry.lines for line in folded(text, _INDENT, width).splitlines())
    return Entry(entry.what, lines, entry.colour)


def alert_text(alert: Alert, now_ns: int) -> str:
    """Return what stands and since when."""
    back = ", back inside, not acknowledged" if is_back(alert) else ""
    if alert.state is AlertState.ACKNOWLEDGED and alert.by is None:  # the record of the deed itself says by whom
        back = ", acknowledged"
    since = f"since {moment(alert.since_ns)} ({_span(alert.since_ns, now_ns)})"
    return f"ALERT {alert.priority}{_GAP}{alert.alert}: {_reason(alert)}; {since}{back}"


def _reason(alert: Alert) -> str:
    """Return why an alert stands; where the last record tells only that it can be told or not, what was judged."""
    if alert.state is not alert.previous_state:
        return alert.reason or str(alert.state).replace("_", " ")
    limits = "..".join("" if limit is None else f"{limit:.7g}" for limit in (alert.low, alert.high))
    unit = f" {alert.unit}" if alert.unit else ""
    told = [f"limits {limits}{unit}"] if limits != ".." else []
    if alert.value is not None:
        told.insert(0, f"{alert.quantity} {with_std(alert.value, alert.value_std)}{unit}")
    if not alert.determinate:
        told.append(f"cannot tell now: {_why_not(alert)}")
    return ", ".join(told) or str(alert.state).replace("_", " ")


def _why_not(alert: Alert) -> str:
    return (alert.reason or "no more is known").removeprefix("cannot tell: ").replace("_", " ")


def _untold(board: Board) -> list[str]:
    """Return a text for each reason for which alerts cannot be told."""
    names: dict[tuple[str | None, str | None, str], list[str]] = {}
    for alert in board.untold:
        names.setdefault((alert.channel, alert.mode, _why_not(alert)), []).append(alert.alert)
    return [f"CANNOT TELL{_GAP}{', '.join(alerts)}: {why}" for (_, _, why), alerts in names.items()]


def fault_text(health: Health, now_ns: int) -> str:
    """Return what is wrong, since when, and what it has cost."""
    lost = f", {health.lost_samples} samples lost" if health.lost_samples else ""
    since = f"since {moment(health.since_ns)} ({_span(health.since_ns, now_ns)}){lost}"
    fault = str(health.fault).replace("_", " ")
    return f"FAULT{_GAP}{health_place(health)}: {fault}: {health.detail or 'no more is known'}; {since}"


# ---------------------------------------------------------------------------------------------- modes


def mode_entries(board: Board, width: int) -> list[Entry]:
    """Return the modes, worst first, in columns of the first layout that fits."""
    modes = board.modes
    rows = [_cells(board, names, track) for names, track in modes]
    if not rows:
        return []
    layout = next((one for one in _LAYOUTS if _width(one, _widths(rows)) <= width), _LAYOUTS[-1])
    if _width(layout, _widths(rows)) > width:  # names are all that can be very long
        names = elided([row[1] for row in rows], max(8, width - _widths(rows)[0] - len(_GAP)))
        rows = [[row[0], name, *row[2:]] for row, name in zip(rows, names, strict=True)]
    found = []
    for (_, track), row in zip(modes, rows, strict=True):
        colour = "yellow" if track is None else _STATUS_COLOUR.get(track.status)
        what = "tracked mode" if row[0] == TrackStatus.TRACKING else "mode not tracked"
        entry = Entry(what, _placed(layout, row, _widths(rows)), colour)
        found.append(entry if max(map(len, entry.lines)) <= width else wrapped(entry, width))
    return found


def _widths(rows: Sequence[Sequence[str]]) -> list[int]:
    return [max(map(len, column)) for column in zip(*rows, strict=True)]


def _cells(board: Board, names: tuple[str, str], track: Track | None) -> list[str]:
    name = " / ".join(names)
    if track is None:
        return ["no reading yet", name, "", "", "", "never seen"]
    silent_s = board.silent_s(key_of(*names))
    status = track_words(track).replace("_", " ")
    seen_ns = track.last_measurement_ns
    return [
        status if silent_s is None else f"silent for {duration(round(silent_s))}, was {status}",
        name,
        f"{known_with_std(track.frequency_hz, track.frequency_std_hz)} Hz" if track.frequency_hz is not None else "",
        f"Q {with_interval(track.q, track.q_low, track.q_high)}" if track.q is not None else "",
        f"drift {drift_text(track)}" if track.frequency_hz is not None else "",
        "never seen" if seen_ns is None else f"seen {_span(seen_ns, board.now_ns)} ago",
    ]


def _width(layout: Sequence[Sequence[int]], widths: Sequence[int]) -> int:
    return max(
        (len(_INDENT) if number else 0) + sum(widths[place] for place in line) + len(_GAP) * (len(line) - 1)
        for number, line in enumerate(layout)
    )


def _placed(layout: Sequence[Sequence[int]], cells: Sequence[str], widths: Sequence[int]) -> tuple[str, ...]:
    lines = []
    for number, places in enumerate(layout):
        line = _GAP.join(cells[place].ljust(widths[place]) for place in places).rstrip()
        if line or number == 0:
            lines.append(f"{_INDENT if number else ''}{line}")
    return tuple(lines)


# ---------------------------------------------------------------------------------------------- room


def fitted(found: Sequence[Entry], width: int, height: int) -> list[Entry]:
    """Return the first entries that fit into so many lines; the last ones then say what is not shown."""
    used = sum(len(entry.lines) for entry in found)
    if used <= height:
        return list(found)
    shown = len(found)
    while True:
        shown -= 1
        used -= len(found[shown].lines)
        rest = _rest(found[shown:], width)
        if used + len(rest.lines) <= height or shown == 0:
            return [*found[:shown], rest]


def _rest(hidden: Sequence[Entry], width: int) -> Entry:
    counts: dict[str, int] = {}
    for entry in hidden:
        counts[entry.what] = counts.get(entry.what, 0) + 1
    text = ", ".join(_count(count, what) for what, count in counts.items())
    return wrapped(Entry("rest", (f"not shown, no room: {text}",), "bold"), width)


def _count(count: int, what: str) -> str:
    if count == 1:
        return f"1 {what}"
    noun, _, rest = what.partition(" that ")
    rest = {"stands": " that stand"}.get(rest, "")
    return f"{count} {noun.replace('mode', 'modes', 1) if noun.startswith('mode') else f'{noun}s'}{rest}"


def _span(first_ns: int, last_ns: int) -> str:
    return duration(round(max(last_ns - first_ns, 0) / NS, 1))
