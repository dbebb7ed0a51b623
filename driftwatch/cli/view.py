"""What a run shows a person: a line per mode now and then, every alert at once, a summary at the end."""

from __future__ import annotations

import re
import shutil
import sys
import textwrap
from collections.abc import Iterable, Sequence

import click

from driftwatch.cli.figures import duration, known_with_std, moment, with_interval
from driftwatch.records import (
    NS,
    Alert,
    AlertState,
    Envelope,
    Fault,
    Health,
    Heartbeat,
    Note,
    Phase,
    Track,
    TrackStatus,
    time_text,
)

WIDTH = 110
"""No line is wider, nor wider than the terminal; what is longer goes on in the next one."""

NAME_WIDTH = 34
"""Most columns for the name of a mode."""

LEGEND = "Times are UTC, frequencies ± standard uncertainty, Q with its 95 % interval."

_MISSING = (Fault.GAP, Fault.OVERFLOW, Fault.SLOW_CONSUMER, Fault.DEVICE)
"""Faults for which samples never came."""

_INDENT = " " * 10  # under the text, beside the time
_VALUE = re.compile(r"(\d) (\S)")


def folded(text: str, indent: str = "", width: int | None = None) -> str:
    """Return a text in lines of at most `width` columns, or `WIDTH`, the second and later ones indented."""
    joined = _VALUE.sub("\\1\N{NO-BREAK SPACE}\\2", text)  # a value and its unit stay on one line
    if width is None:
        width = min(WIDTH, shutil.get_terminal_size().columns) if sys.stdout.isatty() else WIDTH
    lines = textwrap.fill(joined, width, subsequent_indent=indent, break_on_hyphens=False, replace_whitespace=False)
    return lines.replace("\N{NO-BREAK SPACE}", " ")


def mode_line(name: str, track: Track | None) -> str:
    """Return one line about a mode; None: nothing is known of it yet."""
    if track is None:
        return f"{name}  no reading yet: no full window, no decay"
    status = f"{track.status}{f' ({track.reason})' if track.reason else ''}".replace("_", " ")
    if track.frequency_hz is None:
        return f"{name}  {status}"
    frequency = known_with_std(track.frequency_hz, track.frequency_std_hz)
    q = with_interval(track.q, track.q_low, track.q_high)
    return f"{name}  {frequency:>19} Hz  Q {q:<22}  {status}"


def alert_line(alert: Alert) -> str:
    """Return one line about a transition of an alert."""
    words = f"{alert.alert}: {alert.reason or alert.state}"
    if alert.state is alert.previous_state:
        return f"{alert.alert}: can tell again" if alert.determinate else f"CANNOT TELL  {words}"
    if alert.by is not None:  # a person moved it, no figure did
        return words
    return f"{'back inside' if is_back(alert) else f'ALERT {alert.priority}'}  {words}"


INPUT_FAULTS = frozenset({Fault.GAP, Fault.OVERFLOW, Fault.SLOW_CONSUMER, Fault.DEVICE})
"""Faults of no channel that are of the input; all others without a channel are of the daemon itself."""


def health_place(health: Health) -> str:
    """Return what a fault is of: a channel, the input, or the daemon."""
    return health.channel or ("the input" if health.fault in INPUT_FAULTS else "the daemon")


def health_line(health: Health) -> str:
    """Return one line about a fault that begins or ends."""
    where = health_place(health)
    fault = str(health.fault).replace("_", " ")
    if health.phase is Phase.END:
        return f"fault over  {where}: {fault}, after {duration(health.seconds)}"
    return f"FAULT  {where}: {fault}: {health.detail or 'no more is known'}"


def note_line(note: Note) -> str:
    """Return one line about a note."""
    return f"note by {note.by}{' for the next shift' if note.handover else ''}: {note.text}"


def is_back(alert: Alert) -> bool:
    """Say whether an alert has come back, acknowledged or not."""
    return alert.state in (AlertState.NORMAL, AlertState.RETURNED_UNACKNOWLEDGED)


def elided(names: Sequence[str], width: int = NAME_WIDTH) -> list[str]:
    """Return names no longer than `width`, except those that would then be the same as others.

    Both ends of a name tell more than its middle.
    """
    short = [_cut(name, width) for name in names]
    return [cut if short.count(cut) == 1 else name for name, cut in zip(names, short, strict=True)]


def _cut(name: str, width: int) -> str:
    if len(name) <= width:
        return name
    kept = width - 1
    return f"{name[: kept // 2]}…{name[kept // 2 - kept :]}"


class RunView:
    """Prints what a run makes known.

    Parameters
    ----------
    modes
        Channel and mode of each line, in the order in which they are shown.
    every_s
        Stream time between two rounds of mode lines; None: no such lines.
    """

    def __init__(self, modes: Iterable[tuple[str, str]], every_s: float | None) -> None:
        known = {key_of(channel, mode): f"{channel} / {mode}" for channel, mode in modes}
        names = elided(list(known.values()))
        width = max(map(len, names), default=0)
        self._names = {key: name.ljust(width) for key, name in zip(known, names, strict=True)}
        self._every_ns = None if every_s is None else round(every_s * NS)
        self._due_ns: int | None = None
        self._tracks: dict[tuple[str, str], Track] = {}
        self._told: set[str] = set()  # alerts of which something was known before
        self._standing: dict[str, Alert] = {}
        self._raised = self._returned = 0
        self._missing_s = 0.0
        self._first_ns: int | None = None
        self._last_ns = 0
        self._state = ""
        self.run = ""

    @property
    def is_drawn(self) -> bool:
        """Whether it is redrawn in place, so that nothing else may print there."""
        return False

    @property
    def seconds(self) -> float:
        """Stream time from the first record to the last."""
        return (self._last_ns - (self._last_ns if self._first_ns is None else self._first_ns)) / NS

    def show(self, envelopes: Sequence[Envelope]) -> None:
        """Take a group of records and print what is worth a line; before the first, what the figures mean."""
        if self._first_ns is None:
            self._put(folded(LEGEND))
        for envelope in envelopes:
            self._first_ns = envelope.time_ns if self._first_ns is None else self._first_ns
            self._last_ns = max(self._last_ns, envelope.time_ns)
            self.run = envelope.run
            match envelope.body:
                case Note() as note:
                    self._say(envelope.time_ns, note_line(note))
                case Alert() as alert:
                    self._alert(alert, envelope.time_ns)
                case Track() as track:
                    self._tracks[key_of(track.channel, track.mode)] = track
                case Health() as health if health.phase is not Phase.CONTINUE:
                    self._health(health, envelope.time_ns)
        self._round()
        sys.stdout.flush()

    def status(self, text: str) -> None:
        """Tell what the run itself does, such as wait for its device; the same text again is no news."""
        if text and text != self._state:
            sys.stdout.flush()
            click.echo(text, err=True)  # standard output is for what was measured
        self._state = text

    def beat(self, heartbeat: Heartbeat) -> None:
        """Take a sign of life; lines have no use for it."""

    def close(self) -> None:
        """Leave the terminal as it was found; nothing more is shown after it but the summary."""

    def summary(self) -> list[str]:
        """Return the lines that close a run."""
        missing = f", {duration(self._missing_s)} of it missing" if self._missing_s else ""
        lines = [f"Run {self.run}: {self.seconds:.1f} s from {moment(self._first_ns or 0)} on{missing}."]
        lines += [f"  {line}" for line in self._mode_lines()]
        unfound = [track for track in self._tracks.values() if track.status is TrackStatus.SEARCHING]
        if unfound:
            lines.append(
                f"  Not followed: {len(unfound)} of {len(self._names)} modes; it takes two readings that agree. "
                "`readings` shows each one."
            )
        lines.append(f"Alerts: {self._raised} raised, {self._returned} came back, {len(self._standing)} standing.")
        lines += [f"  {alert_line(alert)}" for alert in self._standing.values()]
        return [folded(line, "    ") for line in lines]

    def _alert(self, alert: Alert, time_ns: int) -> None:
        moved = alert.state is not alert.previous_state
        fired = moved and alert.state is AlertState.UNACKNOWLEDGED
        new, known = alert.alert not in self._told, alert.determinate
        self._told.add(alert.alert)
        if new and known and not moved:
            return  # every alert can be told for a first time: no news
        self._raised += fired
        self._returned += moved and is_back(alert) and alert.by is None
        if fired:
            self._standing[alert.alert] = alert
        elif is_back(alert):
            self._standing.pop(alert.alert, None)
        self._say(time_ns, alert_line(alert), "red" if fired else "green" if moved else "yellow")

    def _health(self, health: Health, time_ns: int) -> None:
        if health.fault in _MISSING and health.phase is Phase.END:
            self._missing_s += health.seconds
        self._say(time_ns, health_line(health), "yellow")

    def _round(self) -> None:
        if self._every_ns is None or not self._tracks:
            return
        if self._due_ns is None or self._last_ns >= self._due_ns:
            self._due_ns = self._last_ns + self._every_ns
            for line in self._mode_lines():
                self._say(self._last_ns, line)

    def _mode_lines(self) -> list[str]:
        return [mode_line(name, self._tracks.get(key)).rstrip() for key, name in self._names.items()]

    def _say(self, time_ns: int, text: str, colour: str | None = None) -> None:
        self._put(folded(f"{time_text(time_ns)[11:19]}  {text}", _INDENT), colour)

    def _put(self, lines: str, colour: str | None = None) -> None:
        if colour and sys.stdout.isatty():
            lines = f"{lines[:10]}{click.style(lines[10:], fg=colour, bold=colour == 'red')}"
        # Not by click: it writes past whoever stands in for standard output to keep a progress bar below the lines.
        sys.stdout.write(f"{lines}\n")


def key_of(channel: str, mode: str) -> tuple[str, str]:
    """Return by what a mode is known: names are unique without regard to case."""
    return channel.casefold(), mode.casefold()
