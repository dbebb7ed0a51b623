"""A recording is written whole or not at all."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
import soundfile
from driftwatch.records import Block, TimeQuality
from driftwatch.stream.recording import open_recordings
from driftwatch.stream.source import NotWrittenError
from driftwatch.stream.writing import LARGEST_WAV, whole, write_recording
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class Given:
    """A source of given samples."""

    samples: NDArray[np.float32]
    name: str = "given"
    rate_hz: int = 8000
    start_ns: int = 0
    time_quality: TimeQuality = TimeQuality.ASSUMED
    sources: tuple[str, ...] = ()
    assumed: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()
    length: int | None = 0
    gap: int = 0
    breaks: bool = False

    @property
    def inputs(self) -> int:
        return int(self.samples.shape[1])

    def blocks(self, frames: int) -> Iterator[Block]:
        for at in range(0, len(self.samples), frames):
            yield Block(self.name, at + self.gap, 0, self.samples[at : at + frames])
        if self.breaks:
            raise OSError(28, "No space left on device")


def samples(frames: int = 1000, inputs: int = 2) -> NDArray[np.float32]:
    return np.random.default_rng(0).uniform(-1, 1, (frames, inputs)).astype(np.float32)


def read(path: Path) -> NDArray[np.float32]:
    blocks = list(open_recordings([path], 0, "tape").blocks(10_000))
    return np.concatenate([block.samples for block in blocks])


def test_float_keeps_every_sample_bit_for_bit(tmp_path: Path) -> None:
    x = samples(100_000) * 3
    x[7, 1] = np.nan
    told: list[int] = []
    written = write_recording(Given(x), tmp_path / "a.wav", "float", told.append)
    assert np.array_equal(read(tmp_path / "a.wav"), x, equal_nan=True)
    assert (written.container, written.samples, written.clipped) == ("WAV", 100_000, 0)
    assert told == [65_536, 100_000]


@pytest.mark.parametrize(("subtype", "bits"), [("pcm16", 16), ("pcm24", 24)])
def test_integers_are_rounded_to_the_nearest_step(tmp_path: Path, subtype: str, bits: int) -> None:
    x = samples() * np.float32(0.999)
    write_recording(Given(x), tmp_path / "a.wav", subtype)
    assert soundfile.info(tmp_path / "a.wav").subtype == f"PCM_{bits}"
    assert np.max(np.abs(read(tmp_path / "a.wav").astype(np.float64) - x)) <= 0.5 * 2.0 ** (1 - bits)


@pytest.mark.parametrize(("subtype", "bits"), [("pcm16", 16), ("pcm24", 24)])
def test_values_beyond_full_scale_are_cut_to_it_and_counted(tmp_path: Path, subtype: str, bits: int) -> None:
    x = np.array([[1.5, -1.5], [1.0, -1.0], [0.5, -7.0]], np.float32)
    assert write_recording(Given(x), tmp_path / "a.wav", subtype).clipped == 3
    top = 1 - 2.0 ** (1 - bits)
    assert read(tmp_path / "a.wav").tolist() == [[top, -1], [top, -1], [0.5, -1]]


def test_a_recording_too_large_for_32_bit_sizes_becomes_rf64(tmp_path: Path) -> None:
    """By the length that the source promises: here one that then ends early, so that the test stays small."""
    length = LARGEST_WAV // 8 + 1
    written = write_recording(Given(samples(), length=length), tmp_path / "a.wav")
    assert written.container == "RF64"
    assert (tmp_path / "a.wav").read_bytes()[:4] == b"RF64"
    assert np.array_equal(read(tmp_path / "a.wav"), samples())


def test_a_failure_leaves_what_was_there_and_nothing_else(tmp_path: Path) -> None:
    path = tmp_path / "a.wav"
    path.write_text("precious")
    with pytest.raises(NotWrittenError, match="No space left on device"):
        write_recording(Given(samples(), breaks=True), path)
    assert path.read_text() == "precious"
    assert list(tmp_path.iterdir()) == [path]


def test_an_interrupt_leaves_nothing(tmp_path: Path) -> None:
    def interrupt(_: int) -> None:
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        write_recording(Given(samples()), tmp_path / "a.wav", "float", interrupt)
    assert not list(tmp_path.iterdir())


def test_a_folder_that_is_missing_is_told(tmp_path: Path) -> None:
    with pytest.raises(NotWrittenError, match="No such file or directory"):
        write_recording(Given(samples()), tmp_path / "none" / "a.wav")


def test_a_source_without_end_or_with_a_gap_is_not_written(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match="no end"):
        write_recording(Given(samples(), length=None), tmp_path / "a.wav")
    with pytest.raises(ValueError, match="a gap before sample 7"):
        write_recording(Given(samples(), gap=7), tmp_path / "a.wav")
    assert not list(tmp_path.iterdir())


def test_a_new_file_has_the_rights_of_any_new_file(tmp_path: Path) -> None:
    (tmp_path / "plain").touch()
    with whole(tmp_path / "a") as unfinished:
        unfinished.write_text("text")
    assert (tmp_path / "a").stat().st_mode == (tmp_path / "plain").stat().st_mode
