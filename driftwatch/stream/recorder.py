"""The raw recorder: the last hours of a source as they came, in segments on the disk, within a budget.

It writes what it is given straight to the disk and holds no samples itself, so a kill at any instant loses only what
was not given to it yet. It runs in a process of its own, where a slow disk keeps nobody else waiting.
"""

from __future__ import annotations

import contextlib
import dataclasses
from typing import TYPE_CHECKING, Any, Self

from driftwatch.records import NS
from driftwatch.stream.segment_writer import SegmentWriter, encoded, most_frames
from driftwatch.stream.shelf import Kept, Shelf, find_segments
from driftwatch.stream.sidefile import Identity, Part, remove_segment
from driftwatch.stream.source import StreamError

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping
    from pathlib import Path
    from types import TracebackType

    import numpy as np
    from numpy.typing import NDArray

    from driftwatch.config import RecordConfig
    from driftwatch.records import Block, Clock, Fault

MOST_PARTS = 200
"""Gaps kept in one segment: the side file is written anew at each, so it must stay short."""

LEAST_SEGMENTS = 4
"""The budget holds at least so many segments, so that deleting one leaves something."""

_VALUES = 65_536  # converted and written at a time


class NotRecordedError(StreamError):
    """Samples could not be kept; what was recorded before stands, and writing may be tried again."""


class Recorder:
    """Keeps the last hours of one source in a folder of its own.

    All inputs of the source are kept, also those that no channel names.

    Parameters
    ----------
    folder : Path
        Made where it is missing. Other recorders must not write to it at the same time; segments of earlier runs in
        it count towards the budget and are deleted like its own. Nothing else in it is touched.
    settings : RecordConfig
        ``keep_hours`` must be over 0.
    identity : Identity
        Whose samples they are.

    Notes
    -----
    Segments begin on a grid of the stream index, every ``segment_s``; shorter where a WAV header's sizes or
    the budget ask for it. A gap is a new part inside a segment. A recorder that is started again within a run goes on
    where the segments on the disk end, and leaves out what it is given a second time.
    """

    def __init__(self, folder: Path, settings: RecordConfig, identity: Identity) -> None:
        if settings.keep_hours <= 0:
            raise ValueError(f"keep_hours is {settings.keep_hours:g}; expected over 0; start no recorder then")
        self.identity = identity
        self._folder = folder
        self._keep_ns = round(settings.keep_hours * 3600 * NS)
        self._most_bytes = round(settings.most_gb * 1e9)
        self._grid = segment_frames(settings, identity)
        self._shelf: Shelf | None = None  # None: the folder was not looked into yet
        self._segment: SegmentWriter | None = None  # that is being written
        self._next = 0  # index after the last sample kept
        self._knows_before = False  # all that came from `_next` on was given to us
        self._clock: Mapping[str, Any] | None = None

    @property
    def next_sample(self) -> int:
        """Index after the last sample that is kept; 0 before the first."""
        return self._next

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def clock(self, body: Clock) -> None:
        """Take what is known of the sample clock now; it stands in every side file written from here on."""
        self._clock = dataclasses.asdict(body)

    def write(self, block: Block) -> None:
        """Keep a block: when this returns, the system has it all.

        Parameters
        ----------
        block : Block
            The next samples; what lies before `next_sample` is left out.

        Raises
        ------
        NotRecordedError
            When the disk is full or fails. The next call begins a new segment; whether it gets the same block again or
            a later one, what was kept is kept once, and what was missed is not there.
        ValueError
            When the samples have other inputs than the source, or are none of a 16-bit device although the
            identity says so.
        """
        samples = block.samples
        if samples.ndim != 2 or samples.shape[1] != self.identity.inputs:
            raise ValueError(f"samples of shape {samples.shape}; expected (n, {self.identity.inputs})")
        try:
            shelf = self._shelf = self._shelf or self._look()
            known = max(0, self._next - block.first_sample)
            for first, rows in _cells(block.first_sample + known, samples[known:], self._grid):
                self._put(shelf, first, rows, block.cause)
        except OSError as error:
            self._give_up()
            raise self._not_recorded(block.first_sample, error) from error

    def close(self) -> None:
        """Finish the segment; the recorder may be written to again.

        Raises
        ------
        NotRecordedError
            When the disk fails; the segment is readable nevertheless.
        """
        try:
            self._finish()
        except OSError as error:
            self._give_up()
            raise self._not_recorded(self._next, error) from error
        self._knows_before = False

    # ------------------------------------------------------------------------------------------ steps

    def _look(self) -> Shelf:
        """Return the segments that lie in the folder, and take up where an earlier recorder of this run ended."""
        self._folder.mkdir(parents=True, exist_ok=True)
        kept = []
        for found in find_segments(self._folder)[0]:
            other = found.side.identity
            is_own_run = (other.run, other.source) == (self.identity.run, self.identity.source)
            if found.frames == 0 and (is_own_run or not found.wav.exists()):
                remove_segment(found.wav)  # killed between its begin and its first sample, or in its deletion
                continue
            if is_own_run:
                self._next = max(self._next, found.end)
            kept.append((is_own_run, Kept(found.wav, found.bytes, other.time_ns(found.end))))
        # Earlier runs first, whatever their dates: a clock that went wrong must not cost what is recorded now.
        kept.sort(key=lambda item: (item[0], item[1].end_ns))
        return Shelf(self._most_bytes, [one for _, one in kept])

    def _put(self, shelf: Shelf, first: int, rows: NDArray[np.float32], cause: Fault) -> None:
        """Keep consecutive samples of one cell of the grid."""
        segment, cell = self._segment, first // self._grid
        if segment is not None and (segment.cell != cell or len(segment.parts) >= MOST_PARTS):
            self._finish()
            segment = None
        if segment is None:
            shelf.forget(self.identity.time_ns(first) - self._keep_ns)
            part = Part(0, first, *self._before(first, cause))
            self._segment = segment = SegmentWriter(self._folder, self.identity, part, cell, self._clock)
        elif first > self._next:
            segment.begin_part(Part(segment.frames, first, *self._before(first, cause)), self._clock)
        self._next, self._knows_before = first, True
        step = max(1, _VALUES // self.identity.inputs)
        for start in range(0, len(rows), step):
            content = encoded(rows[start : start + step], self.identity)
            shelf.make_room(segment.bytes + len(content))
            segment.append(content)
            self._next = segment.end

    def _before(self, first: int, cause: Fault) -> tuple[int | None, Fault | None]:
        """Return how many samples are missing before `first`, and why, as far as is known."""
        if not self._knows_before:
            return None, None
        missing = first - self._next
        return missing, cause if missing else None

    def _finish(self) -> None:
        if self._segment is not None:
            self._segment.finish(self._clock)
            self._set_aside(self._segment)

    def _give_up(self) -> None:
        """Leave the segment as it is after an error; what it holds can be read."""
        self._knows_before = False
        segment = self._segment
        if segment is None:
            return
        with contextlib.suppress(OSError):  # the disk's error is on its way to the caller; unfinished it reads as well
            segment.finish(self._clock)
        self._set_aside(segment)

    def _set_aside(self, segment: SegmentWriter) -> None:
        self._segment = None
        segment.release()
        if segment.frames and self._shelf is not None:
            self._next = segment.end
            self._shelf.add(Kept(segment.wav, segment.bytes, self.identity.time_ns(segment.end)))
        else:
            with contextlib.suppress(OSError):  # nothing is lost with an empty one; the next start clears it away
                remove_segment(segment.wav)

    def _not_recorded(self, first: int, error: OSError) -> NotRecordedError:
        return NotRecordedError(
            f"{self._folder}: the recording of {self.identity.source} stopped at sample {first} "
            f"({error.strerror or error}); expected leave to write there and room for {self._most_bytes / 1e9:g} GB; "
            "make room, lower [record] most_gb or correct the folder: it goes on by itself then"
        )


def segment_frames(settings: RecordConfig, identity: Identity) -> int:
    """Return the most samples in a segment: ``segment_s``, and less where a WAV header or the budget holds less."""
    wanted = round(settings.segment_s * identity.rate_hz)
    budget = int(settings.most_gb * 1e9 / LEAST_SEGMENTS) // identity.align
    return max(1, min(wanted, most_frames(identity), max(budget, identity.rate_hz)))  # a second is held in any case


def _cells(first: int, samples: NDArray[np.float32], grid: int) -> Iterator[tuple[int, NDArray[np.float32]]]:
    """Yield samples cut at the multiples of `grid`, each piece with the stream index of its first."""
    done = 0
    while done < len(samples):
        count = min(len(samples) - done, grid - (first + done) % grid)
        yield first + done, samples[done : done + count]
        done += count
