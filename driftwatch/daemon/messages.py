"""What the processes of a daemon say to each other, over pipes of their own. Samples go by the ring instead."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from driftwatch.records import Fault

if TYPE_CHECKING:
    from driftwatch.config import Configuration, SoundcardSourceConfig
    from driftwatch.pipeline.reading import Reading
    from driftwatch.records import Clock, TimeQuality
    from driftwatch.stream.source import Source

# ---------------------------------------------------------------------------------------------- orders


@dataclass(frozen=True, slots=True)
class ReadCard:
    """Read a sound card."""

    source: SoundcardSourceConfig
    least_inputs: int  # how many the device must have; up to as many as the ring has are opened
    start_ns: int | None = None  # stream time of sample 0, where an earlier process let it begin
    resumes: Fault = Fault.DEVICE  # why that process ended


@dataclass(frozen=True, slots=True)
class ReadSource:
    """Read a source that waits for its reader, at a pace."""

    source: Source
    pace: float  # times real time; 0: as fast as it can


@dataclass(frozen=True, slots=True)
class Measure:
    """Measure some channels."""

    config: Configuration
    source: LiveSource
    channels: tuple[str, ...]
    place: int  # of the reader in the ring
    number: int  # of the next block whose readings are wanted
    position: int  # up to which stream index readings were told before
    oldest: int = 0  # number of the first block that may be looked back to


@dataclass(frozen=True, slots=True)
class Record:
    """Record the raw samples."""

    config: Configuration
    source: LiveSource
    run: str
    folder: str  # where segments lie


@dataclass(frozen=True, slots=True)
class Enough:
    """End in good order."""


# ---------------------------------------------------------------------------------------------- answers


@dataclass(frozen=True, slots=True)
class LiveSource:
    """What is known of a source that is being read; a `Source` without its samples."""

    name: str
    rate_hz: int
    inputs: int
    start_ns: int
    time_quality: TimeQuality
    sources: tuple[str, ...]
    assumed: tuple[str, ...]
    first_sample: int = 0
    warnings: tuple[str, ...] = ()
    length: int | None = None


@dataclass(frozen=True, slots=True)
class Opened:
    """The source is open; said once, by the first process that reads it."""

    source: LiveSource
    waiting_for: str | None  # the device is not there yet: why; samples will come after a gap


@dataclass(frozen=True, slots=True)
class Told:
    """Something for the log."""

    text: str
    fault: bool  # whether it is one


@dataclass(frozen=True, slots=True)
class Refused:
    """The source cannot be read: told before anything began."""

    problems: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Failed:
    """Reading stopped before its time, and will not go on."""

    text: str


@dataclass(frozen=True, slots=True)
class ClockSeen:
    """How the sample clock stands."""

    clock: Clock


@dataclass(frozen=True, slots=True)
class ClockStepped:
    """The computer's clock was set."""

    seconds: float  # forward, where positive
    time_quality: TimeQuality


@dataclass(frozen=True, slots=True)
class Recorded:
    """Whether the recorder can keep what comes."""

    error: str | None  # why not; None: it can, again


@dataclass(frozen=True, slots=True)
class MeasuredBlock:
    """A block after it was measured."""

    number: int
    first_sample: int
    count: int
    cause: Fault
    arrived_ns: int
    readings: list[Reading]


@dataclass(frozen=True, slots=True)
class MeasuredBlocks:
    """Blocks that follow each other, measured."""

    blocks: list[MeasuredBlock]


@dataclass(frozen=True, slots=True)
class Finished:
    """The stream has ended, and this is what its last samples still made known."""

    readings: list[Reading]
