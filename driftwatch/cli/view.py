"""What a run shows a person: a line per mode now and then, every alert at once, a summary at the end."""

from __future__ import annotations

import math
from collections.abc import Sequence

import click

from driftwatch.records import NS, Alert, AlertState, Envelope, Health, Phase, Track, TrackStatus, time_text

NAME_WIDTH = 34
"""Columns for the name of a mode."""


def figure(value: float, std: float) -> str:
    """Return a value with its standard uncertainty, both to the uncertainty's second digit."""
    if not (math.isfinite(value) and std > 0 and math.isfinite(std)):
        return f"{value:g}"
    decimals = max(0, 1 - math.floor(math.log10(std)))
    return f"{value:.{decimals}f} ± {std:.{decimals}f}"


def mode_line(track: Track) -> str:
    """Return one line about a mode."""
    name = f"{track.channel} / {track.mode}".ljust(NAME_WIDTH)
    if track.frequency_hz is None or track.frequency_std_hz is None or track.q is None:
        return f"{name}  {track.status}{f' ({track.reason})' if track.reason else ''}"
    parts = [
        f"{figure(track.frequency_hz, track.frequency_std_hz):>17} Hz",
        f"Q {track.q:.4g} ({track.q_low:.3g} to {track.q_high:.3g})".ljust(26),
        f"{track.status}{f' ({track.reason})' if track.reason else ''}",
    ]
    return f"{name}  {'  '.join(parts)}"


def alert_line(alert: Alert) -> str:
    """Return one line about a transition of an alert."""
    words = f"{alert.alert}: {alert.reason or alert.state}"
    if alert.state is alert.previous_state:
        return f"{'can tell again' if alert.determinate else 'CANNOT TELL'}  {words}"
    back = alert.state in (AlertState.NORMAL, AlertState.RETURNED_UNACKNOWLEDGED)
    return f"{'back inside' if back else f'ALERT {alert.priority}'}  {words}"


class RunView:
    """Prints what a run makes known.

    Parameters
    ----------
    every_s
        Stream time between two rounds of mode lines; None: no such lines.
    """

    def __init__(self, every_s: float | None) -> None:
        self._every_ns = None if every_s is None else round(every_s * NS)
        self._due_ns: int | None = None
        self._tracks: dict[tuple[str, str], Track] = {}
        self._standing: dict[str, Alert] = {}
        self._raised = 0
        self._first_ns: int | None = None
        self._last_ns = 0
        self.run = ""

    def show(self, envelopes: Sequence[Envelope]) -> None:
        """Take a group of records and print what is worth a line."""
        for envelope in envelopes:
            self._first_ns = envelope.time_ns if self._first_ns is None else self._first_ns
            self._last_ns = max(self._last_ns, envelope.time_ns)
            self.run = envelope.run
            match envelope.body:
                case Alert() as alert:
                    self._alert(alert, envelope.time_ns)
                case Track() as track:
                    self._tracks[track.channel, track.mode] = track
                case Health() as health if health.phase is not Phase.CONTINUE:
                    where = health.channel or "daemon"
                    self._say(envelope.time_ns, f"{health.fault} {health.phase} on {where}: {health.detail}", "yellow")
        self._round()

    def summary(self) -> list[str]:
        """Return the lines that close a run."""
        seconds = (self._last_ns - (self._first_ns or self._last_ns)) / NS
        lines = [f"Run {self.run}: {seconds:.1f} s of signal."]
        lines += [f"  {mode_line(track)}" for track in self._tracks.values()]
        unfollowed = [track for track in self._tracks.values() if track.status is TrackStatus.SEARCHING]
        if unfollowed:
            lines.append(f"  {len(unfollowed)} of {len(self._tracks)} modes were not found.")
        lines.append(f"Alerts: {self._raised} raised, {len(self._standing)} standing.")
        lines += [f"  {alert_line(alert)}" for alert in self._standing.values()]
        return lines

    def _alert(self, alert: Alert, time_ns: int) -> None:
        moved = alert.state is not alert.previous_state
        fired = moved and alert.state is AlertState.UNACKNOWLEDGED
        self._raised += fired
        if alert.state is AlertState.UNACKNOWLEDGED:
            self._standing[alert.alert] = alert
        else:
            self._standing.pop(alert.alert, None)
        self._say(time_ns, alert_line(alert), "red" if fired else "green" if moved else "yellow")

    def _round(self) -> None:
        if self._every_ns is None or not self._tracks:
            return
        if self._due_ns is None or self._last_ns >= self._due_ns:
            self._due_ns = self._last_ns + self._every_ns
            for track in self._tracks.values():
                self._say(self._last_ns, mode_line(track))

    @staticmethod
    def _say(time_ns: int, text: str, colour: str | None = None) -> None:
        click.echo(f"{time_text(time_ns)[11:19]}  {click.style(text, fg=colour, bold=colour == 'red')}")
