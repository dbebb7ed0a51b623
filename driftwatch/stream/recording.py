"""Recordings as one stream: file after file, with gaps where they do not join."""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import soundfile

from driftwatch.records import NS, Block, Fault, TimeQuality, sample_time_ns, time_text
from driftwatch.stream.files import Piece, RecordingFile, inspect_recording
from driftwatch.stream.segments import Segments, open_segments
from driftwatch.stream.source import SourceFailedError, SourceRefusedError

JOIN_S = 2.0
"""Files whose dates lie no further apart than this are taken as joined: some file systems date to 2 s only."""


@dataclass(frozen=True, slots=True)
class RecordingSource:
    """One or several recordings, read as one stream. Memory does not grow with their length."""

    name: str
    rate_hz: int
    inputs: int
    start_ns: int
    time_quality: TimeQuality
    sources: tuple[str, ...]
    assumed: tuple[str, ...]
    warnings: tuple[str, ...]
    pieces: tuple[Piece, ...]

    @property
    def first_sample(self) -> int:
        """Stream index of the first sample there is."""
        return self.pieces[0].first_sample

    @property
    def length(self) -> int:
        """Samples in all, gaps included."""
        return self.pieces[-1].end

    def blocks(self, frames: int) -> Iterator[Block]:
        """Yield the recordings in blocks of at most `frames` samples; no block reaches across a gap or a file's end.

        Raises
        ------
        SourceFailedError
            When a file changed since it was checked, or cannot be read on.
        """
        for piece in self.pieces:
            for first_sample, samples in _read(piece, frames):
                time_ns = sample_time_ns(self.start_ns, first_sample, self.rate_hz)
                cause = piece.cause if first_sample == piece.first_sample else Fault.GAP
                yield Block(self.name, first_sample, time_ns, samples, cause)
                del samples  # they may be large: the next ones are read only now


def open_recordings(
    paths: Iterable[str | Path],
    start_ns: int | None,
    name: str,
    *,
    rate_hz: int | None = None,
    least_inputs: int = 1,
) -> RecordingSource:
    """Check recordings and lay them out as one stream; nothing is held open yet.

    Parameters
    ----------
    paths : iterable of path
        WAV, FLAC and whatever else the sound-file library reads, in their order; or segments of the raw recorder in
        any order, or folders that hold some; at least one.
    start_ns : int or None
        Stream time of the first sample. None: the first file's date less its duration, since a recorder touches its
        file last when it ends. Either way the time is assumed, and `RecordingSource.assumed` says how. Segments say
        themselves when they were taken: None is the only choice there.
    name : str
        What the configuration calls the source.
    rate_hz : int, optional
        Sample rate that is configured. Left out: the first file's.
    least_inputs : int, optional
        Highest input that the configuration asks for.

    Raises
    ------
    SourceRefusedError
        With every problem of every file.

    Notes
    -----
    Segments have exact places by their side files, see `segments`; the rest of this is about other recordings.
    Where the next file begins follows from the files' dates: within `JOIN_S` of the end of the one before they join
    exactly, later there is a gap of as many samples, and where the dates overlap (copies carry the date of the
    copying) they say nothing and the files are taken to follow directly.
    """
    given = [Path(path) for path in paths]
    segments = open_segments(given, start_ns)
    files = segments.files if segments else _inspect_all(given)
    problems = [problem for file in files for problem in _misfits(file, files[0], rate_hz, least_inputs)]
    if problems:
        raise SourceRefusedError(problems)
    if segments:
        return _of_segments(segments, name, given)
    pieces, assumed, warnings = lay_out(files)
    return RecordingSource(
        name=name,
        rate_hz=files[0].rate_hz,
        inputs=files[0].inputs,
        start_ns=_begin_ns(files[0]) if start_ns is None else start_ns,
        time_quality=TimeQuality.ASSUMED,
        sources=tuple(str(file.path) for file in files),
        assumed=(_start_words(files[0], start_ns), *assumed),
        warnings=(*_cut_words(files), *warnings),
        pieces=pieces,
    )


def _of_segments(segments: Segments, name: str, given: Sequence[Path]) -> RecordingSource:
    return RecordingSource(
        name=name,
        rate_hz=segments.identity.rate_hz,
        inputs=segments.identity.inputs,
        start_ns=segments.identity.start_ns,
        time_quality=segments.identity.time_quality,
        sources=tuple(str(path) for path in given),
        assumed=(),
        warnings=segments.warnings,
        pieces=segments.pieces,
    )


# ---------------------------------------------------------------------------------------------- checking


def _inspect_all(paths: Sequence[Path]) -> list[RecordingFile]:
    """Inspect every file; all that is wrong with any is told together."""
    problems = [] if paths else ["no recording given; expected at least one path; name a WAV or FLAC file"]
    files: list[RecordingFile] = []
    seen: set[Path] = set()
    for path in paths:
        real = path.resolve()
        if real in seen:
            problems.append(f"{path}: given twice; expected each recording once; leave one out")
            continue
        seen.add(real)
        try:
            files.append(inspect_recording(path))
        except SourceRefusedError as error:
            problems.extend(error.problems)
    if problems:
        raise SourceRefusedError(problems)
    return files


def _misfits(file: RecordingFile, first: RecordingFile, rate_hz: int | None, least_inputs: int) -> Iterator[str]:
    """Yield what keeps a file out of the stream."""
    if rate_hz is not None and file.rate_hz != rate_hz:
        yield (
            f"{file.path}: {file.rate_hz} Hz; expected {rate_hz} Hz as configured; "
            "resample it or correct the source's rate_hz"
        )
    elif rate_hz is None and file.rate_hz != first.rate_hz:
        yield (
            f"{file.path}: {file.rate_hz} Hz; expected {first.rate_hz} Hz like {first.path}; "
            "resample it or replay it on its own"
        )
    if file.inputs != first.inputs:
        yield (
            f"{file.path}: {_inputs(file.inputs)}; expected {_inputs(first.inputs)} like {first.path}; "
            "replay it on its own"
        )
    elif file.inputs < least_inputs:
        yield (
            f"{file.path}: {_inputs(file.inputs)}; expected at least {least_inputs} as configured; "
            "correct the channels' input or name another file"
        )


def _inputs(count: int) -> str:
    return f"{count} input" if count == 1 else f"{count} inputs"


# ---------------------------------------------------------------------------------------------- laying out


def lay_out(files: Sequence[RecordingFile]) -> tuple[tuple[Piece, ...], tuple[str, ...], tuple[str, ...]]:
    """Return the files' places in the stream, what is assumed by it, and what to warn of, both in words."""
    pieces = [Piece(files[0], 0, files[0].frames)]
    assumed, warnings = [], []
    joined = 0
    for before, file in itertools.pairwise(files):
        apart_ns = _begin_ns(file) - before.modified_ns
        gap = 0
        if apart_ns > JOIN_S * NS:
            gap = round(apart_ns * file.rate_hz / NS)
            assumed.append(f"{apart_ns / NS:.3f} s are missing before {file.path}, by the files' dates")
        elif apart_ns < -JOIN_S * NS:
            text = (
                f"{file.path} is taken to follow {before.path} directly: their dates overlap by {-apart_ns / NS:.3f} s"
            )
            assumed.append(text)
            warnings.append(f"{text} and so say nothing; correct the dates if there was a pause")
        else:
            joined += 1
        pieces.append(Piece(file, pieces[-1].end + gap, file.frames))
    if joined:
        assumed.append(f"files dated within {JOIN_S:g} s of each other are taken to join without a gap: {joined} times")
    assumed.extend(_cut_words(files))
    return tuple(pieces), tuple(assumed), tuple(warnings)


def _begin_ns(file: RecordingFile) -> int:
    return file.modified_ns - file.frames * NS // file.rate_hz


def _start_words(first: RecordingFile, start_ns: int | None) -> str:
    if start_ns is not None:
        return f"the first sample of {first.path} was taken at {time_text(start_ns)}, as told"
    return f"{first.path} ended at {time_text(first.modified_ns)}, the date of the file"


def _cut_words(files: Iterable[RecordingFile]) -> list[str]:
    """Return what there is to say of files that hold less, or more, than their header says."""
    words = []
    for file in files:
        if file.promised > file.frames:
            missing = (file.promised - file.frames) / file.rate_hz
            words.append(
                f"{file.path} is cut short: {missing:.3f} s of {file.promised / file.rate_hz:.3f} s are missing; "
                "it is read as far as it goes"
            )
        if file.surplus:
            words.append(
                f"{file.path} has {file.surplus} bytes behind the {file.seconds:.3f} s its header can speak of; only "
                "those are read; convert it to RF64, whose sizes go past 4 GiB"
            )
    return words


# ---------------------------------------------------------------------------------------------- reading


def _read(piece: Piece, frames: int) -> Iterator[tuple[int, np.ndarray[tuple[int, int], np.dtype[np.float32]]]]:
    """Yield the stream index and the samples of one recording's blocks, each in an array of its own."""
    path, done = piece.file.path, 0
    try:
        with soundfile.SoundFile(path) as file:
            if piece.offset:
                file.seek(piece.offset)
            while done < piece.frames:
                samples = np.empty((min(frames, piece.frames - done), piece.file.inputs), np.float32)
                came = len(file.read(out=samples))
                if came < len(samples):
                    raise _stopped(piece, done + came, "it has become shorter")
                yield piece.first_sample + done, samples
                del samples
                done += came
    except (soundfile.SoundFileError, OSError, ValueError) as error:  # ValueError: other inputs than when checked
        raise _stopped(piece, done, str(error)) from error


def _stopped(piece: Piece, done: int, why: str) -> SourceFailedError:
    at, expected = (piece.offset + done) / piece.file.rate_hz, piece.file.seconds
    return SourceFailedError(
        f"{piece.file.path}: reading stopped at {at:.3f} s ({why}); expected {expected:.3f} s as when it was checked; "
        "see that nothing writes to it, and begin again"
    )
