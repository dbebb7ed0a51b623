"""The station: one ordered stream of items in, one ordered and numbered stream of records out.

Nothing here reads a clock, opens a file or a socket. The same items give the same records, however the samples were
cut into blocks: what a block makes known is sorted by the stream index at which it could be known.
"""

from __future__ import annotations

import uuid
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from driftwatch import __version__
from driftwatch.alert.book import AlertBook, AlertSettings, ConditionSettings, WatchedMode
from driftwatch.pipeline.channel import ChannelLine
from driftwatch.pipeline.reading import Reading
from driftwatch.records import (
    NS,
    Block,
    Body,
    Command,
    CommandDone,
    Condition,
    Covariate,
    CovariateValue,
    Envelope,
    Fault,
    Health,
    Measurement,
    Origin,
    Phase,
    Priority,
    Run,
    StreamItem,
    Tick,
    TimeQuality,
    Track,
    sample_time_ns,
    topic_of,
)

if TYPE_CHECKING:
    from driftwatch.config import ChannelConfig, Configuration
    from driftwatch.stream.source import Source


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

    def __init__(self, config: Configuration, header: RunHeader, sources: Sequence[Source]) -> None:
        self.header = header
        self._config_sha256 = config.sha256
        self._sources = {source.name: source for source in sources}
        self._lines = {source.name: list(_lines(config, source, len(sources) == 1)) for source in sources}
        self._late = {name: max((line.late for line in lines), default=0) for name, lines in self._lines.items()}
        self._position = dict.fromkeys(self._sources, 0)
        self._marked_from = dict.fromkeys(self._sources, 0)  # where the samples begin that are marked by seconds
        self._silent = False  # a tick has come since the last samples
        self._alerts = _alerts(config, header.station)
        self._sequence = 0
        self._last_of_topic: dict[str, int] = {}
        self._measured: dict[tuple[str, str], int] = {}  # sequence of each mode's last measurement
        self.now_ns = min(source.start_ns for source in sources)

    @property
    def sequence(self) -> int:
        """Number of the last record."""
        return self._sequence

    @property
    def worst_alert(self) -> Priority | None:
        """Highest priority among the alerts that stand."""
        return self._alerts.standing().worst

    @property
    def samples(self) -> int:
        """Samples taken in so far, per input, of the source that is furthest."""
        return max(self._position.values())

    def begin(self) -> list[Envelope]:
        """Return the record that opens the run."""
        return [self._stamp(self._run_record(Phase.BEGIN, None), self.now_ns)]

    def feed(self, item: StreamItem) -> list[Envelope]:
        """Take one item in and return the records that it makes known, in order.

        Raises
        ------
        ValueError
            When a block comes from an unknown source, or before one that came already.
        """
        match item:
            case Block():
                return list(self._block(item))
            case Tick():
                return list(self._tick(item))
            case Command():
                done = CommandDone(item.request, item.by, item.action, item.target, item.reason)
                return [self._stamp(done, item.time_ns)]
            case Covariate():
                return [self._stamp(CovariateValue(item.name, item.value, item.unit), item.time_ns)]

    def finish(self, reason: str | None = None) -> list[Envelope]:
        """Return what the last samples still make known, and the record that closes the run."""
        readings = [reading for lines in self._lines.values() for line in lines for reading in line.finish()]
        records = list(self._readings(readings))
        return [*records, self._stamp(self._run_record(Phase.END, reason), self.now_ns)]

    # ------------------------------------------------------------------------------------------ items

    def _block(self, block: Block) -> Iterator[Envelope]:
        if block.source not in self._lines:
            raise ValueError(f"a block of source {block.source!r} came; known are {', '.join(self._lines)}")
        end = block.first_sample + len(block.samples)
        source = self._sources[block.source]
        self.now_ns = max(self.now_ns, sample_time_ns(source.start_ns, end, source.rate_hz))
        readings = list(self._gap(block))
        for line in self._lines[block.source]:
            readings.extend(line.push(block.first_sample, block.samples))
        readings.extend(self._seconds(block, end))
        self._position[block.source] = end
        yield from self._readings(readings)

    def _seconds(self, block: Block, end: int) -> Iterator[Reading]:
        """Yield a mark for each second of samples, once all that can be known of it is known.

        The alerts' timers see these marks and not the blocks, so that they do not depend on how samples arrive.
        """
        source = self._sources[block.source]
        late = self._late[block.source]
        begin = self._marked_from[block.source]
        first = max(begin, block.first_sample - late) // source.rate_hz + 1
        for second in range(first, (end - late) // source.rate_hz + 1):
            yield Reading(second * source.rate_hz + late, source.start_ns + second * NS, None)

    def _rate(self, block: Block) -> int:
        return self._sources[block.source].rate_hz

    def _gap(self, block: Block) -> Iterator[Reading]:
        """Yield begin and end of the incident when samples are missing before a block."""
        expected = self._position[block.source]
        lost = block.first_sample - expected
        if lost <= 0:
            return
        if self._silent:
            self._silent = False
            self._marked_from[block.source] = block.first_sample
            yield Reading(block.first_sample, block.time_ns, None)
        rate_hz = self._rate(block)
        since_ns = block.time_ns - sample_time_ns(0, lost, rate_hz)
        incident = str(uuid.uuid5(uuid.NAMESPACE_URL, f"{self.header.station}/{block.source}/gap/{since_ns}"))
        for phase, time_ns, missing in ((Phase.BEGIN, since_ns, 0), (Phase.END, block.time_ns, lost)):
            health = Health(
                channel=None,
                fault=Fault.GAP,
                phase=phase,
                incident=incident,
                since_ns=since_ns,
                seconds=missing / rate_hz,
                first_sample=expected,
                lost_samples=missing,
                value=None,
                limit=None,
                unit=None,
                detail=f"source {block.source}: samples are missing; windows that touch them are not used",
            )
            yield Reading(block.first_sample, time_ns, health)

    def _tick(self, tick: Tick) -> Iterator[Envelope]:
        self.now_ns = max(self.now_ns, tick.time_ns)
        if not self._silent:
            self._silent = True
            last_ns = max(
                sample_time_ns(source.start_ns, self._position[name], source.rate_hz)
                for name, source in self._sources.items()
            )
            yield from (self._stamp(alert, last_ns) for alert in self._alerts.on_samples(last_ns))
        for lines in self._lines.values():
            for line in lines:
                for track in line.tick(tick.time_ns):
                    yield from self._judged(track, tick.time_ns)
        yield from (self._stamp(alert, tick.time_ns) for alert in self._alerts.on_tick(tick.time_ns))

    # ------------------------------------------------------------------------------------------ records

    def _readings(self, readings: list[Reading]) -> Iterator[Envelope]:
        """Stamp readings in the order in which they could be known; the sort keeps channels and modes in file order."""
        for reading in sorted(readings, key=lambda reading: reading.ready):
            if reading.body is None:
                yield from (self._stamp(alert, reading.time_ns) for alert in self._alerts.on_samples(reading.time_ns))
                continue
            if isinstance(reading.body, Track):
                yield from self._judged(reading.body, reading.time_ns)
                continue
            envelope = self._stamp(reading.body, reading.time_ns)
            if isinstance(reading.body, Measurement):
                self._measured[reading.body.channel, reading.body.mode] = envelope.sequence
            yield envelope

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


def _lines(config: Configuration, source: Source, only: bool) -> Iterator[ChannelLine]:
    """Yield the channels that a source feeds and that have modes, in file order."""
    for channel in config.channel:
        modes = [mode for mode in config.mode if mode.channel == channel.name]
        if modes and _feeds(source, channel, only):
            yield ChannelLine(channel, modes, source.rate_hz, source.start_ns)


def _feeds(source: Source, channel: ChannelConfig, only: bool) -> bool:
    return channel.source == source.name or (only and channel.source is None)


def _alerts(config: Configuration, station: str) -> AlertBook:
    """Return the alerts of a configuration: the bands, and the conditions that exist without being named."""
    modes = [WatchedMode(mode.channel, mode.name, mode.band) for mode in config.mode]
    named = {
        alert.condition: ConditionSettings(alert.name, alert.on_delay_s, priority=alert.priority)
        for alert in config.alert
    }
    usual = AlertSettings()
    return AlertBook(
        station,
        modes,
        AlertSettings(lost=named.get(Condition.LOST, usual.lost), no_data=named.get(Condition.NO_DATA, usual.no_data)),
    )
