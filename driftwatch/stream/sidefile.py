"""A segment of the raw recorder on the disk: a WAV file, and beside it a side file that gives every sample its place.

``NAME.wav`` holds nothing but samples; ``NAME.json`` says whose they are, the stream index of each part between two
gaps, why samples are missing before it, and what the sample clock did. The side file is always replaced as a whole, and
a part stands in it before its samples are in the WAV file: whatever is killed when, the two agree.
"""

from __future__ import annotations

import dataclasses
import itertools
import json
import os
import re
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal, get_args

from driftwatch.records import Fault, TimeQuality, sample_time_ns, time_text

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

SCHEMA = 1
"""Version of the side file's layout; a key that changes its meaning or goes away raises it."""

KIND = "driftwatch segment"
"""What a side file says of itself, so that other programs' JSON beside a WAV file is not taken for one."""

NAME = re.compile(r"(?P<source>.+)-(?P<time>\d{8}T\d{6}Z)-(?P<run>[0-9a-f]{8})-(?P<first>\d{15,})\.(?:wav|json)")
"""Names of both files of a segment."""

_LONGEST_SOURCE = 160  # bytes of a source's name in a file's: a file system allows 255 in all

SampleFormat = Literal["float32", "int16", "int32"]
"""As asked of the device."""


class NoSideFileError(ValueError):
    """A side file cannot be understood; the text says why."""


# ---------------------------------------------------------------------------------------------- what is written


@dataclass(frozen=True, slots=True)
class Identity:
    """Whose samples they are, the same for every segment of a run."""

    station: str
    run: str  # UUID
    source: str  # name of the source
    rate_hz: int  # nominal
    inputs: int
    start_ns: int  # stream time of sample 0
    time_quality: TimeQuality
    sample_format: SampleFormat  # int16 is kept as 16-bit integers, the others as float32, which is what is measured

    @property
    def width(self) -> int:
        """Bytes of one value in the WAV file."""
        return 2 if self.sample_format == "int16" else 4

    @property
    def align(self) -> int:
        """Bytes of one sample of all inputs."""
        return self.width * self.inputs

    def time_ns(self, sample: int) -> int:
        """Return the stream time of a sample."""
        return sample_time_ns(self.start_ns, sample, self.rate_hz)


@dataclass(frozen=True, slots=True)
class Part:
    """Samples without a gap."""

    frame: int  # where in the WAV file it begins, in samples
    first_sample: int  # stream index of its first sample
    missing: int | None  # samples missing before it in the stream; None: not known, since nobody recorded
    cause: Fault | None  # why, where any are known to be missing


@dataclass(frozen=True, slots=True)
class SideFile:
    """All that a side file says."""

    identity: Identity
    parts: tuple[Part, ...]  # at least one, in order
    frames: int | None  # samples in the WAV file; None: it is being written, or its writer was killed
    clock: Mapping[str, Any] | None  # what was known of the sample clock when it was written, as the record's fields

    def text(self) -> str:
        """Return it as JSON, each integer beside the time that it means."""
        me = self.identity
        content = {
            "schema": SCHEMA,
            "kind": KIND,
            **dataclasses.asdict(me),
            "start": time_text(me.start_ns),
            "finished": self.frames is not None,
            "frames": self.frames,
            "parts": [
                {**dataclasses.asdict(part), "time": time_text(me.time_ns(part.first_sample))} for part in self.parts
            ],
            "clock": self.clock,
        }
        return json.dumps(content, indent=1, ensure_ascii=False, allow_nan=False) + "\n"

    def placed(self, frames: int) -> Iterator[tuple[Part, int]]:
        """Yield each part with its length in samples, where the WAV file holds so many; none that is empty."""
        ends = [*(part.frame for part in self.parts[1:]), frames]
        for part, end in zip(self.parts, ends, strict=True):
            if min(end, frames) > part.frame:
                yield part, min(end, frames) - part.frame


def segment_name(identity: Identity, first_sample: int) -> str:
    """Return the name of the WAV file of a segment; names of one source sort by time."""
    source = identity.source.encode()[:_LONGEST_SOURCE].decode(errors="ignore")
    second = time_text(identity.time_ns(first_sample))[:19]
    return f"{source}-{re.sub('[-:]', '', second)}Z-{identity.run[:8]}-{first_sample:015d}.wav"


def write_side_file(wav: Path, side: SideFile) -> int:
    """Write the side file of a WAV file, as a whole or not at all; return its length in bytes.

    Raises
    ------
    OSError
        When it cannot be written; an earlier one stands then.
    """
    content = side.text().encode()
    unfinished = _unfinished(wav)
    try:
        with unfinished.open("wb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        unfinished.replace(side_of(wav))
    except OSError:
        unfinished.unlink(missing_ok=True)
        raise
    return len(content)


def side_of(wav: Path) -> Path:
    """Return where the side file of a WAV file lies."""
    return wav.with_suffix(".json")


def _unfinished(wav: Path) -> Path:
    """Return where a side file lies while it is written."""
    return wav.with_suffix(".json.part")


def remove_segment(wav: Path) -> None:
    """Delete a segment; its side file last, so that a WAV file never lies there without.

    Raises
    ------
    OSError
        When one of the files cannot be deleted; that it is gone already is none.
    """
    for path in (wav, _unfinished(wav), side_of(wav)):
        path.unlink(missing_ok=True)


# ---------------------------------------------------------------------------------------------- what is read


def read_side_file(wav: Path) -> SideFile | None:
    """Return what the side file of a WAV file says; None where it is no segment: there is none, or another program's.

    Raises
    ------
    NoSideFileError
        When a segment's cannot be read, is not there, is damaged, or has another version's layout.
    """
    is_ours = NAME.fullmatch(wav.name) is not None
    try:
        content = side_of(wav).read_bytes()
    except OSError as error:
        if is_ours and wav.exists():
            raise NoSideFileError(error.strerror or str(error)) from None
        return None
    return parse_side_file(content, is_ours=is_ours)


def parse_side_file(content: bytes, *, is_ours: bool) -> SideFile | None:
    """Return what a side file says; None where it is another program's.

    Parameters
    ----------
    content
        The bytes of the file.
    is_ours
        The name says that it is ours, so that what does not say so itself is damaged.

    Raises
    ------
    NoSideFileError
        When it is ours and damaged, or of another version's layout.
    """
    try:
        found = json.loads(content)
    except (ValueError, RecursionError):
        found = None
    if not isinstance(found, dict) or found.get("kind") != KIND:
        if is_ours:
            raise NoSideFileError("no side file of a segment, or damaged")
        return None
    if found.get("schema") != SCHEMA:
        raise NoSideFileError(f"layout {found.get('schema')}, and this version reads layout {SCHEMA}")
    try:
        return _understood(found)
    except (KeyError, TypeError, ValueError) as error:
        raise NoSideFileError(f"damaged: {type(error).__name__} {error}") from None


def _understood(found: dict[str, Any]) -> SideFile:
    identity = Identity(
        station=_text(found["station"]),
        run=_text(found["run"]),
        source=_text(found["source"]),
        rate_hz=_whole(found["rate_hz"], 1),
        inputs=_whole(found["inputs"], 1),
        start_ns=_whole(found["start_ns"], None),
        time_quality=TimeQuality(found["time_quality"]),
        sample_format=found["sample_format"],
    )
    if identity.sample_format not in get_args(SampleFormat):
        raise ValueError(f"sample_format {identity.sample_format}")
    parts = tuple(_part(part) for part in found["parts"])
    if not parts or parts[0].frame != 0 or any(b.frame < a.frame for a, b in itertools.pairwise(parts)):
        raise ValueError("parts that are none, or out of order")
    if any(b.first_sample - b.frame < a.first_sample - a.frame for a, b in itertools.pairwise(parts)):
        raise ValueError("parts that overlap")
    frames = None if found["frames"] is None else _whole(found["frames"], 0)
    return SideFile(identity, parts, frames, None if found["clock"] is None else dict(found["clock"]))


def _part(found: dict[str, Any]) -> Part:
    missing, cause = found["missing"], found["cause"]
    return Part(
        _whole(found["frame"], 0),
        _whole(found["first_sample"], 0),
        None if missing is None else _whole(missing, 0),
        None if cause is None else Fault(cause),
    )


def _text(value: Any) -> str:
    if not isinstance(value, str):
        raise TypeError(f"{value!r} is no text")
    return value


def _whole(value: Any, least: int | None) -> int:
    if not isinstance(value, int) or isinstance(value, bool) or (least is not None and value < least):
        raise TypeError(f"{value!r} is no whole number, or too small")
    return value
