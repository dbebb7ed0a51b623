"""One segment of the raw recorder, while it is written.

The WAV header is written here, byte by byte, with its sizes left open until the segment is finished, as a writer to a
pipe leaves them: readers then take what the file holds, and an error of the disk arrives as the disk's own.
"""

from __future__ import annotations

import contextlib
import errno
import os
import struct
from typing import TYPE_CHECKING, Any

import numpy as np

from driftwatch.stream.sidefile import Identity, Part, SideFile, remove_segment, segment_name, write_side_file

if TYPE_CHECKING:
    from collections.abc import Mapping
    from pathlib import Path

    from numpy.typing import NDArray

HEADER_BYTES = 58
"""Length of the WAV header: fmt with its extension's length, fact, data."""

_OPEN = 0xFFFFFFFF  # a size that is not known yet


def wave_header(identity: Identity, frames: int | None) -> bytes:
    """Return the WAV header for so many samples; None leaves the sizes open."""
    data = _OPEN if frames is None else frames * identity.align
    form = 1 if identity.sample_format == "int16" else 3  # WAVE_FORMAT_PCM, WAVE_FORMAT_IEEE_FLOAT
    riff = _OPEN if frames is None else HEADER_BYTES - 8 + data
    rate = (identity.rate_hz, identity.rate_hz * identity.align, identity.align, 8 * identity.width)
    return (
        struct.pack("<4sI4s", b"RIFF", riff, b"WAVE")
        + struct.pack("<4sIHHIIHHH", b"fmt ", 18, form, identity.inputs, *rate, 0)
        + struct.pack("<4sII", b"fact", 4, _OPEN if frames is None else frames)
        + struct.pack("<4sI", b"data", data)
    )


def most_frames(identity: Identity) -> int:
    """Return how many samples the WAV header's 32-bit sizes can speak of."""
    return (_OPEN - 1 - HEADER_BYTES) // identity.align


def encoded(rows: NDArray[np.float32], identity: Identity) -> memoryview:
    """Return samples as the bytes of the WAV file."""
    if identity.sample_format != "int16":
        return np.ascontiguousarray(rows, "<f4").data.cast("B")
    with np.errstate(over="ignore"):  # what is too large is refused below
        scaled = rows * np.float32(32768)  # exact: a power of two
    is_exact = (scaled >= -32768) & (scaled <= 32767) & (scaled == np.rint(scaled))
    if not is_exact.all():
        raise ValueError("samples between the steps of 16 bits; expected multiples of 2^-15; correct sample_format")
    return scaled.astype("<i2").data.cast("B")


def _write_all(file: int, content: bytes | memoryview) -> None:
    rest = memoryview(content)
    while rest:
        rest = rest[os.write(file, rest) :]


class SegmentWriter:
    """The segment that is being written."""

    def __init__(
        self, folder: Path, identity: Identity, part: Part, cell: int, clock: Mapping[str, Any] | None
    ) -> None:
        self.identity = identity
        self.cell = cell
        self.parts: tuple[Part, ...] = (part,)
        self.wav = folder / segment_name(identity, part.first_sample)
        self._data_bytes = 0
        self._file = -1
        folder.mkdir(parents=True, exist_ok=True)  # somebody may have cleared it away
        if self.wav.exists():
            raise FileExistsError(errno.EEXIST, "a file of that name is there", str(self.wav))
        try:
            self._side_bytes = write_side_file(self.wav, self._side(None, clock))  # first: no WAV file without one
            self._file = os.open(self.wav, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o666)
            _write_all(self._file, wave_header(identity, None))
        except OSError:
            self.release()
            remove_segment(self.wav)
            raise

    @property
    def frames(self) -> int:
        """Whole samples that were written."""
        return self._data_bytes // self.identity.align

    @property
    def bytes(self) -> int:
        """Of both files."""
        return HEADER_BYTES + self._data_bytes + self._side_bytes

    @property
    def end(self) -> int:
        """Index of the sample after its last."""
        return self.parts[-1].first_sample + self.frames - self.parts[-1].frame

    def append(self, content: memoryview) -> None:
        """Write samples behind the others."""
        try:
            _write_all(self._file, content)
        finally:  # where it fails in the midst, some of it is there
            self._data_bytes = max(0, os.fstat(self._file).st_size - HEADER_BYTES)

    def begin_part(self, part: Part, clock: Mapping[str, Any] | None) -> None:
        """Note a gap, before any sample behind it is written."""
        parts = (*self.parts, part)
        self._side_bytes = write_side_file(self.wav, SideFile(self.identity, parts, None, clock))
        self.parts = parts

    def finish(self, clock: Mapping[str, Any] | None) -> None:
        """Close the sizes, and say in the side file that it is whole."""
        os.ftruncate(self._file, HEADER_BYTES + self.frames * self.identity.align)
        os.pwrite(self._file, wave_header(self.identity, self.frames), 0)
        os.fsync(self._file)
        self._side_bytes = write_side_file(self.wav, self._side(self.frames, clock))

    def release(self) -> None:
        """Close the file; what was written is with the system already."""
        file, self._file = self._file, -1
        if file >= 0:
            with contextlib.suppress(OSError):
                os.close(file)

    def _side(self, frames: int | None, clock: Mapping[str, Any] | None) -> SideFile:
        return SideFile(self.identity, self.parts, frames, clock)
