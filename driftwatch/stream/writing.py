"""A source's samples written as a recording: all of it or nothing."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import soundfile
from numpy.typing import NDArray

from driftwatch.stream.source import NotWrittenError, Source

SUBTYPES = {"float": ("FLOAT", 4), "pcm24": ("PCM_24", 3), "pcm16": ("PCM_16", 2)}
"""How a sample may be written: the sound-file library's word, and bytes."""

LARGEST_WAV = 2**32 - 2**16
"""Bytes of samples that a plain WAV's 32-bit sizes can speak of, its header left room; beyond it is RF64."""

_FRAMES = 65_536  # written at a time


@dataclass(frozen=True, slots=True)
class Written:
    """What was written."""

    container: str  # WAV or RF64
    samples: int  # per input
    clipped: int  # values, over all inputs, beyond what the subtype can hold and so cut to its limit


def write_recording(
    source: Source, path: Path, subtype: str = "float", advance: Callable[[int], None] = lambda _: None
) -> Written:
    """Write all of a source to a WAV file; RF64 (EBU Tech 3306) where 32-bit sizes do not reach.

    Parameters
    ----------
    source : Source
        Its length must be known. Gaps are not written: the recording would lie about its times.
    path : Path
        Replaced if it exists, but only once the whole is written.
    subtype : str
        One of `SUBTYPES`; ``float`` keeps every sample bit for bit.
    advance : callable
        Told the samples written so far.

    Raises
    ------
    NotWrittenError
        When the disk is full or the like.
    ValueError
        When the source has no known end or has a gap.
    """
    if source.length is None:
        raise ValueError("the source has no end; expected one of known length; give it one")
    code, width = SUBTYPES[subtype]
    container = "WAV" if source.length * source.inputs * width <= LARGEST_WAV else "RF64"
    done = clipped = 0
    with whole(path) as unfinished, _told(path):
        form = {"subtype": code, "format": container}
        with soundfile.SoundFile(unfinished, "w", source.rate_hz, source.inputs, **form) as file:
            for block in source.blocks(_FRAMES):
                if block.first_sample != done:
                    raise ValueError(
                        f"a gap before sample {block.first_sample}; expected {done}; write the parts apart"
                    )
                samples, beyond = _encoded(block.samples, width)
                file.write(samples)
                done, clipped = done + len(samples), clipped + beyond
                advance(done)
    return Written(container, done, clipped)


@contextmanager
def whole(path: Path) -> Iterator[Path]:
    """Give a temporary name beside `path`; take it over as `path` at the end, or leave nothing when an error comes."""
    with _told(path):
        handle, name = tempfile.mkstemp(prefix=f".{path.name}.", suffix=".part", dir=path.parent)
        os.close(handle)
    unfinished = Path(name)
    try:
        yield unfinished
        with _told(path):
            mask = os.umask(0)
            os.umask(mask)
            unfinished.chmod(0o666 & ~mask)  # as any new file; a temporary one is its owner's alone
            unfinished.replace(path)
    finally:
        unfinished.unlink(missing_ok=True)


@contextmanager
def _told(path: Path) -> Iterator[None]:
    """Translate what the disk and the sound-file library say."""
    try:
        yield
    except (soundfile.SoundFileError, OSError) as error:
        why = getattr(error, "strerror", None) or str(error)
        text = f"{path} was not written ({why}); expected room and leave to write there; nothing is left of it"
        raise NotWrittenError(text) from error


def _encoded(samples: NDArray[np.float32], width: int) -> tuple[NDArray[np.float32] | NDArray[np.int32], int]:
    """Return samples as they are written and how many were cut to the subtype's limits."""
    if width == 4:
        return samples, 0
    bits = 8 * width
    scaled = np.rint(samples.astype(np.float64) * 2.0 ** (bits - 1))
    low, high = -(2 ** (bits - 1)), 2 ** (bits - 1) - 1
    beyond = int(np.count_nonzero((scaled < low) | (scaled > high + 1)))  # +1.0 itself is cut by one step: no harm
    return np.clip(scaled, low, high).astype(np.int32) << (32 - bits), beyond
