"""What a recording's file holds: checked before anything is read from it.

A header may promise more than its file holds, since the recorder lost power or the copy broke off. Whoever looks into
an accident wants what is there, so such a file is read as far as it goes, and said so.
"""

from __future__ import annotations

import stat
import struct
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, BinaryIO

import numpy as np
import soundfile

from driftwatch.records import Fault
from driftwatch.stream.source import SourceRefusedError

if TYPE_CHECKING:
    from collections.abc import Iterator

_UNKNOWN_SIZE = 0xFFFFFFFF  # a writer to a pipe, which cannot come back and fill in the length; RF64 too
_UNKNOWN_FRAMES = 2**62  # from here on the sound-file library means: the header does not say
_WRAP = 2**32  # where a plain WAV header's sizes begin anew


@dataclass(frozen=True, slots=True)
class RecordingFile:
    """One recording as it lies on the disk."""

    path: Path
    rate_hz: int
    inputs: int
    frames: int  # samples per input that can be read
    promised: int  # samples per input that the header speaks of; more than `frames` where the file is cut short
    surplus: int  # bytes behind what the header speaks of that may be samples; 0 where all is well
    modified_ns: int  # the file's date: UTC nanoseconds of its last change

    @property
    def seconds(self) -> float:
        """Length of what can be read, in seconds."""
        return self.frames / self.rate_hz


@dataclass(frozen=True, slots=True)
class Piece:
    """Samples of one recording that follow each other, with their place in the stream."""

    file: RecordingFile
    first_sample: int  # index of its first sample, counted from the start of the stream
    frames: int  # samples
    offset: int = 0  # where in the recording it begins, in samples
    cause: Fault = Fault.GAP  # why samples are missing before it, where they are

    @property
    def end(self) -> int:
        """Index of the sample after its last."""
        return self.first_sample + self.frames


def inspect_recording(path: Path) -> RecordingFile:
    """Check one recording and say what can be read from it.

    Raises
    ------
    SourceRefusedError
        When it is missing, no file, empty, not audio, or holds no sample that can be read.
    """
    try:
        status = path.stat()
    except OSError as error:
        raise _refused(path, f"{error.strerror or error}; expected a recording", "check the path") from None
    if not stat.S_ISREG(status.st_mode):
        what = "a directory" if stat.S_ISDIR(status.st_mode) else "no regular file"
        raise _refused(path, f"{what}; expected a recording", "name the files in it one by one")
    if status.st_size == 0:
        raise _refused(path, "empty (0 bytes); expected a recording", "copy it again or leave it out")
    return _inspect_audio(path, status.st_size, status.st_mtime_ns)


def _inspect_audio(path: Path, size: int, modified_ns: int) -> RecordingFile:
    try:
        with soundfile.SoundFile(path) as file:
            rate_hz, inputs, frames = int(file.samplerate), int(file.channels), int(file.frames)
    except TypeError:  # headerless samples: the library asks for what no file can tell
        raise _refused(path, "raw samples without a header; expected WAV or FLAC", "convert it to WAV") from None
    except (soundfile.SoundFileError, OSError) as error:
        what = f"not readable as audio ({_why(error)}); expected WAV, FLAC or the like"
        raise _refused(path, what, "convert it or leave it out") from None
    header = promised_frames(path)
    readable = _readable_frames(path, frames)
    if readable == 0:
        what = f"no sample in {size} bytes; expected a recording"
        raise _refused(path, what, "copy it again, or have its header repaired if its recorder was cut off")
    promised = max(frames if frames < _UNKNOWN_FRAMES else readable, header.frames if header else 0)
    return RecordingFile(path, rate_hz, inputs, readable, promised, header.surplus if header else 0, modified_ns)


def _refused(path: Path, what: str, remedy: str) -> SourceRefusedError:
    return SourceRefusedError([f"{path}: {what}; {remedy}"])


def _why(error: Exception) -> str:
    """Return the library's reason without the path that it puts before it."""
    text = str(getattr(error, "error_string", "") or error).strip()
    return text.rstrip(".") or "no reason given"


def _readable_frames(path: Path, frames: int) -> int:
    """Return how many of `frames` can be read, by halving: a compressed file that is cut short still promises all."""
    if frames == 0 or _can_read(path, frames - 1):
        return frames
    low, high = 0, frames - 1  # so many can be read; this one cannot
    while high > low:
        middle = (low + high) // 2
        if _can_read(path, middle):
            low = middle + 1
        else:
            high = middle
    return low


def _can_read(path: Path, frame: int) -> bool:
    """Say whether one sample can be read; in a file opened afresh, since a decoder that failed does not recover."""
    with soundfile.SoundFile(path) as file:
        one = np.empty((1, file.channels), np.float32)
        try:
            file.seek(frame)
            return len(file.read(out=one)) == 1
        except soundfile.SoundFileError:
            return False


# ---------------------------------------------------------------------------------------------- headers


@dataclass(frozen=True, slots=True)
class Header:
    """What a chunked header says of its samples."""

    frames: int  # samples per input; 0: it does not say
    surplus: int  # bytes behind the samples that belong to no chunk a 32-bit size could describe


def promised_frames(path: Path) -> Header | None:
    """Return what the header of a WAV, RF64 or AIFF file promises; None for any other format.

    The sound-file library shortens the promise to what the file holds, so a cut can be seen only here.

    Notes
    -----
    RF64 (EBU Tech 3306) keeps its 64-bit sizes in a ``ds64`` chunk. A plain WAV past 4 GiB has a size that began anew
    at 0 (it cannot be trusted): the rest shows as a surplus of 4 GiB or more.
    """
    size = path.stat().st_size
    with path.open("rb") as file:
        head = file.read(12)
        if head[:4] in (b"RIFF", b"RF64") and head[8:] == b"WAVE":
            return _wave_header(file, size)
        if head[:4] == b"FORM" and head[8:] in (b"AIFF", b"AIFC"):
            return _aiff_header(file)
    return None


def _wave_header(file: BinaryIO, size: int) -> Header:
    align, long_size = 1, 0
    for name, length, at in _chunks(file, "<"):
        if name == b"ds64":
            long_size = _unpack("<8xQ", file)
        elif name == b"fmt ":
            align = max(1, _unpack("<12xH", file))
        elif name == b"data" and length == _UNKNOWN_SIZE:
            return Header(long_size // align, 0)
        elif name == b"data":
            rest = size - at - length
            return Header(length // align, rest if rest >= _WRAP else 0)
    return Header(0, 0)


def _aiff_header(file: BinaryIO) -> Header:
    for name, _, _ in _chunks(file, ">"):
        if name == b"COMM":
            return Header(_unpack(">2xI", file), 0)
    return Header(0, 0)


def _chunks(file: BinaryIO, order: str) -> Iterator[tuple[bytes, int, int]]:
    """Yield the name, length and place of each chunk, with the file standing at its content."""
    at = 12
    while True:
        file.seek(at)
        head = file.read(8)
        if len(head) < 8:
            return
        name, length = struct.unpack(f"{order}4sI", head)
        yield name, length, at + 8
        at += 8 + length + length % 2


def _unpack(layout: str, file: BinaryIO) -> int:
    """Read one number; 0 where the file ends before it."""
    content = file.read(struct.calcsize(layout))
    return int(struct.unpack(layout, content)[0]) if len(content) == struct.calcsize(layout) else 0
