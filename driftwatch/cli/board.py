"""How things stand at a station: records and signs of life in, a verdict and what stands out, worst first."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from enum import IntEnum

from driftwatch.cli.figures import duration
from driftwatch.cli.view import key_of
from driftwatch.records import (
    NS,
    Alert,
    AlertState,
    Clock,
    Envelope,
    Health,
    Heartbeat,
    Phase,
    Priority,
    Run,
    Track,
    TrackStatus,
)

SAMPLES_LATE_S = 3.0
"""Age of the last sample from which on samples do not advance, seconds."""

_PRIORITIES = tuple(Priority)  # from low to urgent
_ASIDE = (AlertState.NORMAL, AlertState.SHELVED, AlertState.SUPPRESSED_BY_DESIGN, AlertState.OUT_OF_SERVICE)
_WORST_FIRST = (TrackStatus.LOST, TrackStatus.HELD, TrackStatus.SEARCHING, None, TrackStatus.TRACKING)

Key = tuple[str, str]
"""Channel and mode without regard to case."""


class Verdict(IntEnum):
    """How things stand in one word; its number is the exit status of ``status``."""

    QUIET = 0  # everything is measured, nothing stands
    UNREACHABLE = 1  # no sign of life
    ALERT = 3  # at least one alert stands
    CANNOT_TELL = 4  # none stands, yet something cannot be told

    @property
    def word(self) -> str:
        """The word for people."""
        return self.name.replace("_", " ")


class Board:
    """The last word on everything at a station.

    Parameters
    ----------
    modes
        Channel and mode of each mode that is expected, in the order of the configuration; others are added as they
        come.
    silent_after_s
        Stream time, by key of a mode, without a track point after which a tracked mode cannot be told any more; a mode
        that is not named here may be silent for ever, as one whose decays come when somebody strikes.
    """

    def __init__(
        self, modes: Iterable[tuple[str, str]] = (), silent_after_s: Mapping[Key, float] | None = None
    ) -> None:
        self.names: dict[Key, tuple[str, str]] = {key_of(*names): names for names in modes}
        self.tracks: dict[Key, Envelope] = {}
        self.alerts: dict[str, Envelope] = {}
        self.incidents: dict[str, Envelope] = {}
        self.heartbeat: Heartbeat | None = None
        self.clock: Clock | None = None
        self.begun_ns: int | None = None
        self.ended: Run | None = None
        self.doubts: tuple[str, ...] = ()  # why the records themselves may not tell how things stand
        self.station = self.run = self.origin = ""
        self._silent_after_s = silent_after_s or {}
        self._now_ns = 0

    def take(self, envelopes: Iterable[Envelope]) -> None:
        """Take records in, in their order."""
        for envelope in envelopes:
            self._now_ns = max(self._now_ns, envelope.time_ns)
            self.station, self.run, self.origin = envelope.station, envelope.run, envelope.origin
            match envelope.body:
                case Track() as track:
                    key = key_of(track.channel, track.mode)
                    self.names.setdefault(key, (track.channel, track.mode))
                    self.tracks[key] = envelope
                case Alert() as alert:
                    self.alerts[alert.alert] = envelope
                case Health(phase=Phase.END) as health:
                    self.incidents.pop(health.incident, None)
                case Health() as health:
                    self.incidents[health.incident] = envelope
                case Clock() as clock:
                    self.clock = clock
                case Run(phase=Phase.BEGIN):
                    self.begun_ns = envelope.time_ns
                case Run(phase=Phase.CONTINUE):  # in another database, which does not know the begin
                    self.begun_ns = self.begun_ns or envelope.time_ns
                case Run() as run:
                    self.ended = run

    def beat(self, heartbeat: Heartbeat) -> None:
        """Take a sign of life."""
        self.heartbeat = heartbeat
        self.station, self.run, self.origin = heartbeat.station, heartbeat.run, heartbeat.origin
        self._now_ns = max(self._now_ns, heartbeat.time_ns)

    @property
    def now_ns(self) -> int:
        """Stream time of the latest that is known; what ages are counted to."""
        return self._now_ns

    # ------------------------------------------------------------------------------------------ what stands out

    @property
    def standing(self) -> list[Alert]:
        """Alerts that are not normal and not put aside by somebody, highest priority first, then the oldest."""
        found = [alert for alert in self._alerts() if alert.state not in _ASIDE]
        return sorted(found, key=lambda alert: (-_PRIORITIES.index(alert.priority), alert.since_ns))

    @property
    def untold(self) -> list[Alert]:
        """Alerts that do not stand as far as is known, and of which nobody can tell now, highest priority first."""
        found = [alert for alert in self._alerts() if alert.state in _ASIDE and not alert.determinate]
        return sorted(found, key=lambda alert: (-_PRIORITIES.index(alert.priority), alert.alert))

    @property
    def faults(self) -> list[Health]:
        """Incidents that have not ended, the oldest first."""
        bodies = [envelope.body for envelope in self.incidents.values()]
        return sorted((body for body in bodies if isinstance(body, Health)), key=lambda health: health.since_ns)

    @property
    def modes(self) -> list[tuple[tuple[str, str], Track | None]]:
        """Names and last track point of each mode, worst first; those alike in the order of the configuration."""
        found = [(key, names, self.track(key)) for key, names in self.names.items()]
        found.sort(key=lambda one: self._badness(one[0], one[2]))
        return [(names, track) for _, names, track in found]

    @property
    def unfollowed(self) -> int:
        """Number of modes that are not tracked now."""
        return sum(self._badness(key, self.track(key)) < len(_WORST_FIRST) - 1 for key in self.names)

    def track(self, key: Key) -> Track | None:
        """Return the last track point of a mode."""
        envelope = self.tracks.get(key)
        return envelope.body if envelope is not None and isinstance(envelope.body, Track) else None

    def silent_s(self, key: Key) -> float | None:
        """Return since when, in seconds, a mode has been silent that should not be; None: it is not."""
        if key not in self.tracks or key not in self._silent_after_s:
            return None
        silent_s = (self.now_ns - self.tracks[key].time_ns) / NS
        return silent_s if silent_s > self._silent_after_s[key] else None

    def _badness(self, key: Key, track: Track | None) -> float:
        rank = _WORST_FIRST.index(None if track is None else track.status)
        return rank if self.silent_s(key) is None else min(rank, 1.5)  # silence is no better than a search

    def _alerts(self) -> Iterator[Alert]:
        for envelope in self.alerts.values():
            if isinstance(envelope.body, Alert):
                yield envelope.body

    # ------------------------------------------------------------------------------------------ the verdict

    @property
    def not_told(self) -> list[str]:
        """What keeps everything else from being told, in words, beside alerts, faults and modes."""
        found = list(self.doubts)
        beat = self.heartbeat
        if beat is not None and beat.sample_age_s is None and beat.uptime_s > SAMPLES_LATE_S:
            found.append(f"no sample has come in the {duration(round(beat.uptime_s))} since the start")
        elif beat is not None and beat.sample_age_s is not None and beat.sample_age_s > SAMPLES_LATE_S:
            found.append(f"samples do not advance: the last came {duration(round(beat.sample_age_s, 1))} ago")
        if beat is not None and beat.unsaved:
            since = f"in trouble for {duration(round(beat.unsaved_s, 1))}"
            found.append(f"the store takes no rows: {beat.unsaved} records wait for it, {since}; see the daemon's log")
        if not self.names and not self.doubts:
            found.append("no mode has a reading yet")
        return found

    @property
    def verdict(self) -> Verdict:
        """How things stand; that there is a sign of life is taken for granted."""
        if self.standing:
            return Verdict.ALERT
        # An open fault is no alert, yet where one is nobody should take silence for health.
        unsure = self.not_told or self.untold or self.faults or self.unfollowed
        return Verdict.CANNOT_TELL if unsure else Verdict.QUIET
