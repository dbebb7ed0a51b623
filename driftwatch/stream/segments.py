"""Segments of the raw recorder as one stream, laid out exactly by their side files."""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import TYPE_CHECKING

from driftwatch.records import Fault, time_text
from driftwatch.stream.files import Piece, RecordingFile, inspect_recording
from driftwatch.stream.shelf import Found, find_segments, found_segment
from driftwatch.stream.sidefile import NoSideFileError, read_side_file, side_of
from driftwatch.stream.source import SourceRefusedError

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence
    from pathlib import Path

    from driftwatch.stream.sidefile import Identity


@dataclass(frozen=True, slots=True)
class Segments:
    """Segments of one run."""

    identity: Identity  # the same for all
    files: tuple[RecordingFile, ...]  # by time
    pieces: tuple[Piece, ...]  # in order, at least one
    warnings: tuple[str, ...]  # what a person should be told, one line each


def open_segments(paths: Sequence[Path], start_ns: int | None) -> Segments | None:
    """Check segments and lay them out; None where no path is a segment or a folder with segments in it.

    Parameters
    ----------
    paths
        Files and folders, in any order. Of a folder all segments are taken, and nothing else in it.
    start_ns
        What was told of the time of the first sample; with segments it must be None.

    Raises
    ------
    SourceRefusedError
        When they are no segments of one run, are given twice, come with other recordings, or cannot be read.
    """
    found, others, warnings, problems = _gather(paths)
    if not found and not problems:
        return None
    if others and found:
        problems += [
            f"{path}: no segment of the recorder; expected segments alone, as {found[0].wav} is one; "
            "replay it on its own"
            for path in others
        ]
    if start_ns is not None and found:
        problems.append(
            f"--start: got {time_text(start_ns)}; expected none, for the side files of segments say when their samples "
            "were taken; leave it out"
        )
    problems += _several_runs(found) or _overlaps(found)
    if problems:
        raise SourceRefusedError(problems)
    return _laid_out(found, warnings)


def _gather(paths: Sequence[Path]) -> tuple[list[Found], list[Path], list[str], list[str]]:
    """Return the segments by their place in the stream, the paths that are none, warnings, and problems."""
    found: list[Found] = []
    others: list[Path] = []
    warnings: list[str] = []
    problems: list[str] = []
    for path in paths:
        try:
            if path.is_dir():
                inside, unreadable = find_segments(path)
                filled = [one for one in inside if one.frames]
                warnings += unreadable
                found += filled
                if not filled:
                    others.append(path)
                continue
            side = read_side_file(path)
        except NoSideFileError as error:
            problems.append(
                f"{path}: its side file {side_of(path).name} cannot be read ({error}); expected what the recorder "
                "wrote; copy both files again, or rename the recording and replay it without its place"
            )
            continue
        except OSError as error:
            problems.append(
                f"{path}: {error.strerror or error}; expected a folder that can be read; correct its rights"
            )
            continue
        if side is None:
            others.append(path)
        else:
            found.append(found_segment(path, side))
    found.sort(key=lambda one: one.side.parts[0].first_sample)
    return found, others, warnings, problems


# ---------------------------------------------------------------------------------------------- checking


def _several_runs(found: Sequence[Found]) -> list[str]:
    """Return what there is to say where the segments are of more than one run or source."""
    runs: dict[tuple[str, str], list[Found]] = {}
    for one in found:
        runs.setdefault((one.side.identity.run, one.side.identity.source), []).append(one)
    if len(runs) < 2:
        return []
    groups = sorted(runs.values(), key=lambda group: _begin_ns(group[0]))
    return [f"segments: got those of {len(runs)} runs; expected one run; name the files of one:"] + [
        f"  {group[0].wav.parent}/*-{group[0].side.identity.run[:8]}-*.wav: run {group[0].side.identity.run} of source "
        f'"{group[0].side.identity.source}", {time_text(_begin_ns(group[0]))} to {time_text(_end_ns(group[-1]))}, '
        f"{_count(group)}"
        for group in groups
    ]


def _begin_ns(one: Found) -> int:
    return one.side.identity.time_ns(one.side.parts[0].first_sample)


def _end_ns(one: Found) -> int:
    return one.side.identity.time_ns(one.end)


def _count(group: Sequence[Found]) -> str:
    return "1 segment" if len(group) == 1 else f"{len(group)} segments"


def _overlaps(found: Sequence[Found]) -> Iterator[str]:
    """Yield what keeps segments of one run from being one stream."""
    for before, one in itertools.pairwise(found):
        first = one.side.parts[0].first_sample
        if one.side.identity != before.side.identity:
            yield (
                f"{one.wav}: another station, rate or begin than in {before.wav}; expected the same for one run; "
                "leave one out"
            )
        elif one.wav.resolve() == before.wav.resolve():
            yield f"{one.wav}: given twice; expected each segment once; leave one out"
        elif first < before.end:
            yield (
                f"{one.wav}: begins at sample {first}; expected {before.end} or later, where {before.wav} ends; "
                "leave out what was copied twice"
            )


# ---------------------------------------------------------------------------------------------- laying out


def _laid_out(found: Sequence[Found], warnings: list[str]) -> Segments:
    """Return the segments with their parts in their places.

    Raises
    ------
    SourceRefusedError
        When one cannot be read, or is not what its side file says.
    """
    files: list[RecordingFile] = []
    pieces: list[Piece] = []
    problems: list[str] = []
    for one in found:
        try:
            file = inspect_recording(one.wav)
        except SourceRefusedError as error:
            problems += error.problems
            continue
        identity = one.side.identity
        if (file.rate_hz, file.inputs) != (identity.rate_hz, identity.inputs):
            problems.append(
                f"{one.wav}: {file.inputs} inputs at {file.rate_hz} Hz; expected {identity.inputs} at "
                f"{identity.rate_hz} Hz by its side file; copy both files again"
            )
            continue
        files.append(file)
        frames = file.frames if one.side.frames is None else min(file.frames, one.side.frames)
        if one.side.frames is not None and frames < one.side.frames:
            missing = (one.side.frames - frames) / identity.rate_hz
            warnings.append(f"{one.wav} is cut short: {missing:.3f} s are missing; it is read as far as it goes")
        if one.side.frames is None:
            warnings.append(f"{one.wav} was not finished, or is being written; it is read as far as it goes")
        pieces += _pieces(one, file, frames, pieces[-1].end if pieces else None)
    if problems:
        raise SourceRefusedError(problems)
    return Segments(found[0].side.identity, tuple(files), tuple(pieces), tuple(warnings))


def _pieces(one: Found, file: RecordingFile, frames: int, end: int | None) -> Iterator[Piece]:
    """Yield the parts of a segment; `end` is where the stream ended before it.

    The recorder's cause of a gap holds where the gap is the one it saw; where a segment is missing too, it is not.
    """
    for part, count in one.side.placed(frames):
        gap = None if end is None else part.first_sample - end
        cause = part.cause if part.cause is not None and gap == part.missing else Fault.GAP
        yield Piece(file, part.first_sample, count, part.frame, cause)
        end = part.first_sample + count
