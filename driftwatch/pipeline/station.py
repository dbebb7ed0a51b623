"""The station: one ordered stream of items in, one ordered and numbered stream of records out.

Nothing here reads a clock, opens a file or a socket. The same items give the same records, however the samples were
cut into blocks: what a block makes known is sorted by the stream index at which it could be known.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from driftwatch import __version__
from driftwatch.alert.book import AlertBook, AlertSettings, ConditionSettings, WatchedMode
from driftwatch.pipeline.commands import (
    DONE,
    acknowledgement,
    done_of,
    nothing_to_acknowledge,
    unknown_alert,
)
from driftwatch.pipeline.followed import FollowedMode
from driftwatch.pipeline.gaps import Gaps
from driftwatch.pipeline.group import ChannelGroup, measured_channels
from driftwatch.pipeline.reading import Reading
from driftwatch.records import (
    HANDOVER,
    NS,
    Action,
    Block,
    Body,
    Clock,
    Command,
    Condition,
    Covariate,
    CovariateValue,
    Envelope,
    Health,
    Measurement,
    Note,
    Origin,
    Phase,
    Priority,
    Run,
    StreamItem,
    Stretch,
    Tick,
    TimeQuality,
    Track,
    sample_time_ns,
    topic_of,
)

if TYPE_CHECKING:
    from driftwatch.alert.book import Standing
    from driftwatch.config import Configuration
    from driftwatch.stream.source import SourceFacts


@dataclass(frozen=True, slots=True)
class RunHeader:
    """What every record of a run carries."""

    station: str
    run: str  # UUID
    origin: Origin
    time_quality: TimeQuality


class Station:
    """The deterministic pipeline of a whole configuration.

    Parameters
    ----------
    config
        The configuration.
    header
        What every record of this run carries.
    sources
        The sources that feed it. A channel that names none of them is fed by the only one.

    Raises
    ------
    ValueError
        When a channel's source is not among several, or a search band does not fit the sample rate.
    """

    def __init__(self, config: Configuration, header: RunHeader, sources: Sequence[SourceFacts]) -> None:
        self.header = header
        self._config_sha256 = config.sha256
        self._sources = {source.name: source for source in sources}
        self._groups = {source.name: _group(config, source, len(sources) == 1) for source in sources}
        self._late = {name: group.late for name, group in self._groups.items()}
        self._gaps = {source.name: Gaps(header.station, source) for source in sources}
        self._marked_from = {source.name: source.first_sample for source in sources}  # where marks by seconds begin
        self._silent = False  # a tick has come since the last samples
        self._modes = dict(_modes(config, self._groups, sources))
        self._alerts = AlertBook(header.station, _watched(config), _settings(config))
        self._sequence = 0
        self._last_of_topic: dict[str, int] = {}
        self._measured: dict[tuple[str, str], int] = {}  # sequence of each mode's last measurement
        self.now_ns = min(gaps.position_ns for gaps in self._gaps.values())

    @property
    def sequence(self) -> int:
        """Number of the last record."""
        return self._sequence

    @property
    def standing(self) -> Standing:
        """Return what stands now, worst first."""
        return self._alerts.standing()

    @property
    def worst_alert(self) -> Priority | None:
        """Highest priority among the alerts that stand."""
        return self._alerts.standing().worst

    @property
    def samples(self) -> int:
        """Samples taken in so far, per input, of the source that is furthest."""
        return max(gaps.position for gaps in self._gaps.values())

    def source(self, name: str) -> SourceFacts:
        """Return what is known of a source."""
        return self._sources[name]

    def position(self, name: str) -> int:
        """Return the stream index of a source's next sample."""
        return self._gaps[name].position

    def begin(self) -> list[Envelope]:
        """Return the record that opens the run."""
        return [self._stamp(self._run_record(Phase.BEGIN, None), self.now_ns)]

    def again(self) -> Envelope:
        """Return the record that opens the run in another database, where its begin is not."""
        return self._stamp(self._run_record(Phase.CONTINUE, None), self.now_ns)

    def feed(self, item: StreamItem) -> list[Envelope]:
        """Take one item in and return the records that it makes known, in order.

        Raises
        ------
        ValueError
            When a block comes from an unknown source, or before one that came already.
        """
        match item:
            case Block():
                self._refuse_unknown(item.source)
                return self.measured(item, self._groups[item.source].push(item))
            case Tick():
                return list(self._tick(item))
            case Command():
                return list(self._command(item))
            case Covariate():
                return [self._stamp(CovariateValue(item.name, item.value, item.unit), item.time_ns)]

    def measured(self, block: Block | Stretch, readings: Sequence[Reading]) -> list[Envelope]:
        """Take in a block that was measured elsewhere, by groups of channels in file order, and return the records.

        Raises
        ------
        ValueError
            When the block comes from an unknown source, or before one that came already.
        """
        self._refuse_unknown(block.source)
        return list(self._block(block, readings))

    def finish(
        self, reason: str | None = None, readings: Sequence[Reading] | None = None, until_ns: int | None = None
    ) -> list[Envelope]:
        """Return what the last samples still make known, and the record that closes the run.

        Parameters
        ----------
        reason
            Why it ends.
        readings
            What was measured elsewhere; None: here.
        until_ns
            Stream time of the end, where that is later than the last sample and the last tick.
        """
        self.now_ns = max(self.now_ns, until_ns or self.now_ns)
        last = [one for group in self._groups.values() for one in group.finish()] if readings is None else readings
        records = list(self._readings(last))
        records += [
            self._stamp(health, self.now_ns)
            for gaps in self._gaps.values()
            if (health := gaps.finish(self.now_ns)) is not None
        ]
        return [*records, self._stamp(self._run_record(Phase.END, reason), self.now_ns)]

    def reload(self, config: Configuration) -> list[Envelope]:
        """Take over the bands and alert settings of another configuration of the same modes; return what that ends.

        Raises
        ------
        ValueError
            When it has other modes.
        """
        ends = self._alerts.reload(_watched(config), _settings(config))
        return [self._stamp(alert, self.now_ns) for alert in ends]

    def note(self, body: Health | Clock) -> Envelope:
        """Return the record of what the daemon knows of itself or of a sample clock, at this point of the stream."""
        return self._stamp(body, self.now_ns)

    # ------------------------------------------------------------------------------------------ items

    def _refuse_unknown(self, source: str) -> None:
        if source not in self._groups:
            raise ValueError(f"a block of source {source!r} came; known are {', '.join(self._groups)}")

    def _block(self, block: Block | Stretch, measured: Sequence[Reading]) -> Iterator[Envelope]:
        source = self._sources[block.source]
        end = block.first_sample + block.count
        self.now_ns = max(self.now_ns, sample_time_ns(source.start_ns, end, source.rate_hz))
        readings = list(self._gap(block, end))
        readings.extend(measured)
        readings.extend(self._seconds(block, end))
        yield from self._readings(readings)

    def _seconds(self, block: Block | Stretch, end: int) -> Iterator[Reading]:
        """Yield a mark for each second of samples, once all that can be known of it is known.

        The alerts' timers see these marks and not the blocks, so that they do not depend on how samples arrive.
        """
        source = self._sources[block.source]
        late = self._late[block.source]
        begin = self._marked_from[block.source]
        first = max(begin, block.first_sample - late) // source.rate_hz + 1
        for second in range(first, (end - late) // source.rate_hz + 1):
            yield Reading(second * source.rate_hz + late, source.start_ns + second * NS, None)

    def _gap(self, block: Block | Stretch, end: int) -> Iterator[Reading]:
        """Yield begin and end of the incident when samples are missing before a block."""
        if self._silent:
            self._silent = False
            self._marked_from[block.source] = block.first_sample
            yield Reading(block.first_sample, block.time_ns, None)
        for health in self._gaps[block.source].block(block.first_sample, end, block.cause):
            yield Reading(block.first_sample, health.since_ns if health.phase is Phase.BEGIN else block.time_ns, health)

    def _tick(self, tick: Tick) -> Iterator[Envelope]:
        self.now_ns = max(self.now_ns, tick.time_ns)
        if not self._silent:
            self._silent = True
            last_ns = max(gaps.position_ns for gaps in self._gaps.values())
            yield from (self._stamp(alert, last_ns) for alert in self._alerts.on_samples(last_ns))
            for gaps in self._gaps.values():
                if (health := gaps.tick(tick.cause)) is not None:
                    yield self._stamp(health, health.since_ns)
        for mode in self._modes.values():
            if (track := mode.tick(tick.time_ns)) is not None:
                yield from self._judged(track, tick.time_ns)
        yield from (self._stamp(alert, tick.time_ns) for alert in self._alerts.on_tick(tick.time_ns))

    # ------------------------------------------------------------------------------------------ commands

    def _command(self, command: Command) -> Iterator[Envelope]:
        """Yield the record of a command, and those of what it does."""
        self.now_ns = max(self.now_ns, command.time_ns)
        sequence = self._sequence + 1  # of the command's record, which says what came of it
        outcome, bodies = command.outcome, list[Body]()
        if outcome is None:
            outcome, bodies = self._effect(command, sequence)
        for body in (done_of(command, outcome), *bodies):
            yield self._stamp(body, command.time_ns)

    def _effect(self, command: Command, sequence: int) -> tuple[str, list[Body]]:
        """Return what comes of a command, in words, and the bodies of the records that say so."""
        match command.action:
            case Action.ACKNOWLEDGE:
                return self._acknowledge(command, sequence)
            case Action.NOTE:
                return DONE, [Note(command.by, command.reason or "", command.target == HANDOVER)]
            case Action.COVARIATE:
                return DONE, [CovariateValue(command.target or "", command.value, command.unit or "")]
        return f"refused: {command.action} is nothing that the pipeline does", []

    def _acknowledge(self, command: Command, sequence: int) -> tuple[str, list[Body]]:
        name = command.target or ""
        try:
            alert = self._alerts.acknowledge(name, command.by, acknowledgement(command), sequence)
        except KeyError:
            return unknown_alert(name), []
        return (DONE, [alert]) if alert is not None else (nothing_to_acknowledge(name), [])

    # ------------------------------------------------------------------------------------------ records

    def _readings(self, readings: Sequence[Reading]) -> Iterator[Envelope]:
        """Stamp readings in the order in which they could be known; the sort keeps channels and modes in file order."""
        for reading in sorted(readings, key=lambda reading: reading.ready):
            if reading.body is None:
                yield from (self._stamp(alert, reading.time_ns) for alert in self._alerts.on_samples(reading.time_ns))
                continue
            envelope = self._stamp(reading.body, reading.time_ns)
            yield envelope
            if isinstance(reading.body, Measurement):
                about = (reading.body.channel, reading.body.mode)
                self._measured[about] = envelope.sequence
                yield from self._judged(*self._modes[about].measured(reading.body, reading.time_ns))

    def _judged(self, track: Track, time_ns: int) -> Iterator[Envelope]:
        """Yield a track point and the alert transitions that it causes."""
        envelope = self._stamp(track, time_ns)
        yield envelope
        measured = self._measured.get((track.channel, track.mode))
        for alert in self._alerts.on_track(track, envelope.sequence, time_ns, measured):
            yield self._stamp(alert, time_ns)

    def _stamp(self, body: Body, time_ns: int) -> Envelope:
        self._sequence += 1
        topic = topic_of(body)
        previous = self._last_of_topic.get(topic)
        self._last_of_topic[topic] = self._sequence
        header = self.header
        return Envelope(
            header.station,
            header.run,
            header.origin,
            self._sequence,
            previous,
            time_ns,
            header.time_quality,
            body,
        )

    def _run_record(self, phase: Phase, reason: str | None) -> Run:
        sources = self._sources.values()
        return Run(
            phase=phase,
            config_sha256=self._config_sha256,
            version=__version__,
            sources=tuple(text for source in sources for text in source.sources),
            assumed=tuple(text for source in sources for text in source.assumed),
            samples=self.samples,
            reason=reason,
        )


def _group(config: Configuration, source: SourceFacts, only: bool) -> ChannelGroup:
    return ChannelGroup(config, source, [channel.name for channel in measured_channels(config, source.name, only=only)])


def _modes(
    config: Configuration, groups: dict[str, ChannelGroup], sources: Sequence[SourceFacts]
) -> Iterator[tuple[tuple[str, str], FollowedMode]]:
    """Yield what follows each mode, by channel and mode, in the order of the channels."""
    for source in sources:
        start_ns = sample_time_ns(source.start_ns, source.first_sample, source.rate_hz)
        for line in groups[source.name].lines:
            modes = [mode for mode in config.mode if mode.channel == line.name]
            for mode, step_s in zip(modes, line.steps_s, strict=True):
                yield (mode.channel, mode.name), FollowedMode(mode, step_s, start_ns)


def _watched(config: Configuration) -> list[WatchedMode]:
    return [WatchedMode(mode.channel, mode.name, mode.band) for mode in config.mode]


def _settings(config: Configuration) -> AlertSettings:
    """Return how the alerts behave that exist without being named."""
    named = {
        alert.condition: ConditionSettings(alert.name, alert.on_delay_s, priority=alert.priority)
        for alert in config.alert
    }
    usual = AlertSettings()
    return AlertSettings(
        lost=named.get(Condition.LOST, usual.lost), no_data=named.get(Condition.NO_DATA, usual.no_data)
    )
