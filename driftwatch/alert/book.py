"""All alerts of a station: track points and ticks in, alert records out. Pure functions of values and stream time."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from driftwatch.alert.band import UNITS, Band, figure_of, judge
from driftwatch.alert.machine import UNKNOWN, Delays, Event, Finding, Life
from driftwatch.alert.watch import Seen, Subject, Watch
from driftwatch.alert.words import band_words, track_words
from driftwatch.records import NS, Alert, AlertState, Condition, Priority, Track, TrackStatus

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

_PRIORITIES = tuple(Priority)  # from low to urgent


@dataclass(frozen=True, slots=True)
class WatchedMode:
    """A mode and its bands."""

    channel: str
    mode: str
    bands: tuple[Band, ...] = ()


@dataclass(frozen=True, slots=True)
class ConditionSettings:
    """How an alert that is no band behaves."""

    name: str
    on_delay_s: float
    off_delay_s: float = 0.0
    priority: Priority = Priority.MEDIUM


@dataclass(frozen=True, slots=True)
class AlertSettings:
    """The alerts that exist without being named."""

    lost: ConditionSettings = field(
        default=ConditionSettings("lost", on_delay_s=60.0, priority=Priority.MEDIUM),
    )
    no_data: ConditionSettings = field(
        default=ConditionSettings("no data", on_delay_s=30.0, priority=Priority.HIGH),
    )


@dataclass(frozen=True, slots=True)
class StandingAlert:
    """An alert that is not normal, or of which nobody can tell."""

    alert: str
    condition: Condition
    state: AlertState
    determinate: bool
    priority: Priority
    since_ns: int | None  # begin of the occurrence; None: nothing came yet


@dataclass(frozen=True, slots=True)
class Standing:
    """What stands at a station, worst first."""

    alerts: tuple[StandingAlert, ...]  # not normal: highest priority first, then the oldest
    cannot_tell: tuple[StandingAlert, ...]  # those, normal or not, of which nobody can tell
    worst: Priority | None  # highest priority that stands


class AlertBook:
    """Every alert of a station.

    * Each band of each mode (`Condition.BAND`, named channel/mode/band).
    * ``channel/mode/lost`` for each mode: fires when for `lost.on_delay_s` the mode could not be told (searching, held
      or lost, or no track point at all), whether it was ever found or not: silence is not health. Returns when it is
      tracked again.
    * ``no data`` for the station: fires when for `no_data.on_delay_s` no samples came, returns when they come.

    Parameters
    ----------
    station : str
        Name of the station; the occurrences' UUIDs depend on it.
    modes : sequence of WatchedMode
    settings : AlertSettings
    """

    def __init__(self, station: str, modes: Sequence[WatchedMode], settings: AlertSettings | None = None) -> None:
        settings = AlertSettings() if settings is None else settings
        self._station = station
        self._modes = {(each.channel, each.mode): _ModeAlerts(station, each, settings) for each in modes}
        subject = _condition_subject(station, settings.no_data.name, Condition.NO_DATA, settings.no_data)
        self._no_data = Watch(subject, Life())
        self._samples_ns: int | None = None

    def on_track(
        self, track: Track, sequence: int, time_ns: int, measurement_sequence: int | None = None
    ) -> list[Alert]:
        """Judge one track point.

        Parameters
        ----------
        track : Track
            Of a mode named to the constructor.
        sequence : int
            Of the track record.
        time_ns : int
            Stream time of the track point.
        measurement_sequence : int, optional
            Of the measurement record behind it.

        Returns
        -------
        list of Alert
            Transitions and changes of what can be told, in the order of the configuration, the mode's own last.

        Raises
        ------
        KeyError
            When the mode was not named to the constructor.
        """
        because = (sequence,) if measurement_sequence is None else (measurement_sequence, sequence)
        return self._modes[track.channel, track.mode].on_track(track, because, time_ns)

    def on_samples(self, time_ns: int) -> list[Alert]:
        """Note that samples came up to a stream time; return what that changes."""
        self._samples_ns = time_ns
        records = [] if self._no_data.quiet else self._see_no_data(Finding.RETURNED, time_ns)
        return records + self._look_at_silent_modes(time_ns)

    def on_tick(self, time_ns: int) -> list[Alert]:
        """Note that time went by without samples; return what that changes."""
        records: list[Alert] = []
        if self._samples_ns is not None:  # samples have been missing since the last of them
            records += self._see_no_data(Finding.VIOLATED, self._samples_ns)
            self._samples_ns = None
        records += self._see_no_data(Finding.VIOLATED, time_ns)
        return records + self._look_at_silent_modes(time_ns)

    def acknowledge(self, alert: str, by: str, reason: str, because: int) -> Alert | None:
        """Note that a person took note of an alert; return the record of it, None where it has nothing to take note of.

        Parameters
        ----------
        alert : str
            Its name, without regard to case.
        by, reason : str
            Who, and what to write.
        because : int
            Sequence of the command's record.

        Raises
        ------
        KeyError
            When no alert has this name.
        """
        for watch in self._watches():
            if watch.subject.alert.casefold() == alert.casefold():
                return watch.acknowledge(by, reason, because)
        raise KeyError(alert)

    def reload(self, modes: Sequence[WatchedMode], settings: AlertSettings) -> list[Alert]:
        """Take over other bands and settings of the same modes; return the ends of alerts that are no more.

        An alert that keeps its name goes on where it stands, and is judged by the new limits and delays from now on.

        Raises
        ------
        ValueError
            When the modes are not the same ones.
        """
        if {(each.channel, each.mode) for each in modes} != self._modes.keys():
            raise ValueError("a reload has other modes; expected the same ones: that needs a restart")
        before = {watch.subject.alert: watch for watch in self._watches()}
        for each in modes:
            self._modes[each.channel, each.mode].reload(self._station, each, settings, before)
        name = settings.no_data.name
        subject = _condition_subject(self._station, name, Condition.NO_DATA, settings.no_data)
        self._no_data = _taken_over(before, subject, Life())
        gone = [watch for watch in before.values() if all(watch is not one for one in self._watches())]
        ends = [watch.withdraw("no longer watched: the configuration was reloaded") for watch in gone]
        return [end for end in ends if end is not None]

    def standing(self) -> Standing:
        """Return what stands now."""
        every = [_standing(watch) for watch in self._watches()]
        violated = [each for each in every if each.state is not AlertState.NORMAL]
        violated.sort(key=lambda each: (-_PRIORITIES.index(each.priority), each.since_ns or 0))
        cannot_tell = tuple(each for each in every if not each.determinate)
        return Standing(tuple(violated), cannot_tell, violated[0].priority if violated else None)

    def _watches(self) -> Iterable[Watch]:
        for mode in self._modes.values():
            yield from mode.watches()
        yield self._no_data

    def _see_no_data(self, finding: Finding, time_ns: int) -> list[Alert]:
        record = self._no_data.see(Seen(finding), time_ns, _no_data_words)
        return [] if record is None else [record]

    def _look_at_silent_modes(self, time_ns: int) -> list[Alert]:
        records: list[Alert] = []
        for mode in self._modes.values():
            if not mode.followed:
                records += mode.on_silence(time_ns)
        return records


class _ModeAlerts:
    """The alerts of one mode."""

    def __init__(self, station: str, watched: WatchedMode, settings: AlertSettings) -> None:
        self._bands = [(band, Watch(_band_subject(station, watched, band), UNKNOWN)) for band in watched.bands]
        name = f"{watched.channel}/{watched.mode}/{settings.lost.name}"
        subject = _condition_subject(station, name, Condition.LOST, settings.lost, watched)
        self._lost = Watch(subject, Life())
        self._last_words = str(TrackStatus.SEARCHING)
        self._last_because: tuple[int, ...] = ()
        self.followed = False

    def reload(self, station: str, watched: WatchedMode, settings: AlertSettings, before: dict[str, Watch]) -> None:
        self._bands = [
            (band, _taken_over(before, _band_subject(station, watched, band), UNKNOWN)) for band in watched.bands
        ]
        name = f"{watched.channel}/{watched.mode}/{settings.lost.name}"
        subject = _condition_subject(station, name, Condition.LOST, settings.lost, watched)
        self._lost = _taken_over(before, subject, Life())

    def watches(self) -> Iterable[Watch]:
        for _, watch in self._bands:
            yield watch
        yield self._lost

    def on_track(self, track: Track, because: tuple[int, ...], time_ns: int) -> list[Alert]:
        records = [self._see_band(band, watch, track, because, time_ns) for band, watch in self._bands]
        self.followed = track.status is TrackStatus.TRACKING
        self._last_words, self._last_because = track_words(track), because
        records.append(self._see_lost(time_ns))
        return [record for record in records if record is not None]

    def on_silence(self, time_ns: int) -> list[Alert]:
        record = self._see_lost(time_ns)
        return [] if record is None else [record]

    def _see_band(self, band: Band, watch: Watch, track: Track, because: tuple[int, ...], time_ns: int) -> Alert | None:
        figure = figure_of(track, band.quantity)
        if figure is None:
            if not watch.determinate:
                return None  # stopped timers stay stopped
            seen = Seen(Finding.CANNOT_TELL, because=because)
            return watch.see(seen, time_ns, lambda *_: f"cannot tell: {track_words(track)}")
        judgement = judge(figure, band)
        finding = _finding(judgement.beyond, judgement.inside, band.confidence)
        seen = Seen(finding, figure.value, figure.std, judgement.beyond, because)
        return watch.see(seen, time_ns, lambda event, held_s: band_words(event, held_s, band, figure, judgement))

    def _see_lost(self, time_ns: int) -> Alert | None:
        if self.followed and self._lost.quiet:
            return None
        finding = Finding.RETURNED if self.followed else Finding.VIOLATED
        return self._lost.see(Seen(finding, because=self._last_because), time_ns, self._lost_words)

    def _lost_words(self, event: Event | None, held_s: float) -> str:
        if event is Event.RETURNED:
            return "tracked again"
        return f"the mode could not be told for {held_s:.6g} s: {self._last_words}"


def _taken_over(before: dict[str, Watch], subject: Subject, life: Life) -> Watch:
    """Return the watch that had this name, now about `subject`; a new one where there was none of its kind."""
    known = before.get(subject.alert)
    if known is None or (known.subject.condition, known.subject.quantity) != (subject.condition, subject.quantity):
        return Watch(subject, life)
    known.subject = subject
    return known


def _finding(beyond: float, inside: float, confidence: float) -> Finding:
    if beyond >= confidence:
        return Finding.VIOLATED
    return Finding.RETURNED if inside >= confidence else Finding.NEITHER


def _no_data_words(event: Event | None, held_s: float) -> str:
    return "samples come again" if event is Event.RETURNED else f"no samples for {held_s:.6g} s"


def _standing(watch: Watch) -> StandingAlert:
    subject = watch.subject
    return StandingAlert(
        subject.alert, subject.condition, watch.state, watch.determinate, subject.priority, watch.since_ns
    )


def _delays(on_delay_s: float, off_delay_s: float) -> Delays:
    return Delays(round(on_delay_s * NS), round(off_delay_s * NS))


def _band_subject(station: str, watched: WatchedMode, band: Band) -> Subject:
    return Subject(
        station=station,
        alert=f"{watched.channel}/{watched.mode}/{band.name}",
        condition=Condition.BAND,
        channel=watched.channel,
        mode=watched.mode,
        quantity=str(band.quantity),
        basis=str(band.limits),
        unit=UNITS[band.quantity],
        low=band.low,
        high=band.high,
        confidence=band.confidence,
        priority=band.priority,
        delays=_delays(band.on_delay_s, band.off_delay_s),
    )


def _condition_subject(
    station: str,
    alert: str,
    condition: Condition,
    settings: ConditionSettings,
    watched: WatchedMode | None = None,
) -> Subject:
    return Subject(
        station=station,
        alert=alert,
        condition=condition,
        channel=None if watched is None else watched.channel,
        mode=None if watched is None else watched.mode,
        quantity=None,
        basis=None,
        unit=None,
        low=None,
        high=None,
        confidence=None,
        priority=settings.priority,
        delays=_delays(settings.on_delay_s, settings.off_delay_s),
    )
