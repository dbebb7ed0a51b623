"""The folder of the raw recorder: which segments lie in it, and which of them go first."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass
from typing import TYPE_CHECKING

from driftwatch.stream.segment_writer import HEADER_BYTES
from driftwatch.stream.sidefile import NAME, NoSideFileError, SideFile, read_side_file, remove_segment, side_of

if TYPE_CHECKING:
    from pathlib import Path


@dataclass(frozen=True, slots=True)
class Found:
    """A segment that lies in a folder."""

    wav: Path
    side: SideFile
    bytes: int  # of both files; 0 for a WAV file that is not there
    frames: int  # samples in the WAV file

    @property
    def end(self) -> int:
        """Index of the sample after its last; of its first sample where it holds none."""
        placed = list(self.side.placed(self.frames))
        return placed[-1][0].first_sample + placed[-1][1] if placed else self.side.parts[0].first_sample


def find_segments(folder: Path) -> tuple[list[Found], list[str]]:
    """Return the segments in a folder, and in words what looks like one and cannot be read.

    A segment is what has a name of our pattern and a readable side file; nothing else is ever counted or deleted.

    Raises
    ------
    OSError
        When the folder cannot be read. Files that vanish meanwhile are none.
    """
    segments, unreadable = [], []
    for wav in sorted({path.with_suffix(".wav") for path in folder.iterdir() if NAME.fullmatch(path.name)}):
        try:
            side = read_side_file(wav)
        except NoSideFileError as error:
            unreadable.append(f"{wav} is left out, for its side file {side_of(wav).name} cannot be read: {error}")
            continue
        if side is not None:
            segments.append(found_segment(wav, side))
    return segments, unreadable


def found_segment(wav: Path, side: SideFile) -> Found:
    """Return a segment with what it holds, where its side file was read."""
    data, beside = _size(wav), _size(side_of(wav))
    frames = max(0, data - HEADER_BYTES) // side.identity.align
    return Found(wav, side, data + beside, frames if side.frames is None else min(frames, side.frames))


def _size(path: Path) -> int:
    try:
        return path.stat().st_size
    except FileNotFoundError:
        return 0


@dataclass(frozen=True, slots=True)
class Kept:
    """A segment that may be deleted."""

    wav: Path
    bytes: int
    end_ns: int  # stream time of its end


class Shelf:
    """The segments that may be deleted, the first to go first."""

    def __init__(self, most_bytes: int, kept: list[Kept]) -> None:
        self._most_bytes = most_bytes
        self._kept = deque(kept)
        self._bytes = sum(one.bytes for one in kept)

    def add(self, one: Kept) -> None:
        """Take one as the last to go."""
        self._kept.append(one)
        self._bytes += one.bytes

    def forget(self, oldest_ns: int) -> None:
        """Delete what ended before a time."""
        for one in [one for one in self._kept if one.end_ns < oldest_ns]:
            self._delete(one)

    def make_room(self, wanted: int) -> None:
        """Delete until `wanted` bytes fit into the budget beside what is left, or nothing is."""
        while self._kept and self._bytes + wanted > self._most_bytes:
            self._delete(self._kept[0])

    def _delete(self, one: Kept) -> None:
        remove_segment(one.wav)
        self._kept.remove(one)
        self._bytes -= one.bytes
