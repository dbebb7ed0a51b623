"""Recordings as one stream."""

from __future__ import annotations

import os
import struct
import tracemalloc
from pathlib import Path

import numpy as np
import pytest
import soundfile
from driftwatch.records import NS, TimeQuality, sample_time_ns
from driftwatch.stream.files import RecordingFile, inspect_recording, promised_frames
from driftwatch.stream.recording import lay_out, open_recordings
from driftwatch.stream.source import Source, SourceFailedError, SourceRefusedError
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

RATE = 8000
DAY = 1_772_323_200  # 2026-03-01T00:00:00Z


def noise(frames: int, inputs: int = 1) -> NDArray[np.float32]:
    return np.random.default_rng(0).uniform(-1, 1, (frames, inputs)).astype(np.float32)


def write(
    path: Path, samples: NDArray[np.float32], subtype: str | None = "FLOAT", end_s: float = DAY, rate: int = RATE
) -> Path:
    soundfile.write(path, samples, rate, subtype=subtype)
    os.utime(path, ns=(0, round(end_s * NS)))
    return path


def cut(path: Path, keep: float) -> Path:
    whole = path.read_bytes()
    date = path.stat().st_mtime_ns
    path.write_bytes(whole[: round(len(whole) * keep)])
    os.utime(path, ns=(0, date))
    return path


def gather(source: Source, frames: int) -> NDArray[np.float32]:
    """The whole stream, with NaN where samples are missing."""
    assert source.length is not None
    out = np.full((source.length, source.inputs), np.nan, np.float32)
    for block in source.blocks(frames):
        assert block.samples.dtype == np.float32
        assert 1 <= len(block.samples) <= frames
        assert block.time_ns == sample_time_ns(source.start_ns, block.first_sample, source.rate_hz)
        out[block.first_sample : block.first_sample + len(block.samples)] = block.samples
    return out


# ---------------------------------------------------------------------------------------------- what is read


@pytest.mark.parametrize(
    ("name", "subtype", "bits"),
    [
        ("a.wav", "PCM_16", 16),
        ("a.wav", "PCM_24", 24),
        ("a.flac", "PCM_16", 16),
        ("a.flac", "PCM_24", 24),
        ("a.aiff", "PCM_24", 24),
        ("a.rf64", "PCM_24", 24),
        ("a.w64", "PCM_24", 24),
    ],
)
def test_integers_of_up_to_24_bits_arrive_exactly(tmp_path: Path, name: str, subtype: str, bits: int) -> None:
    limit = 2 ** (bits - 1)
    integers = np.random.default_rng(0).integers(-limit, limit, 5000)
    integers[:4] = [-limit, limit - 1, 1, -1]
    path = tmp_path / name
    soundfile.write(path, (integers << (32 - bits)).astype(np.int32), RATE, subtype=subtype)
    source = open_recordings([path], 0, "tape")
    assert np.array_equal(gather(source, 777)[:, 0].astype(np.float64) * limit, integers)


@given(frames=st.integers(1, 3000), cuts=st.lists(st.integers(1, 900), min_size=1, max_size=3))
def test_the_stream_is_the_same_however_it_is_cut(
    tmp_path_factory: pytest.TempPathFactory, frames: int, cuts: list[int]
) -> None:
    folder = tmp_path_factory.mktemp("cut")
    samples = noise(sum(cuts), 2)
    edges = np.cumsum([0, *cuts])
    paths = [
        write(folder / f"{k}.wav", samples[edges[k] : edges[k + 1]], end_s=DAY + edges[k + 1] / RATE)
        for k in range(len(cuts))
    ]
    source = open_recordings(paths, None, "tape")
    assert np.array_equal(gather(source, frames), samples)


def test_a_block_keeps_its_samples_while_later_ones_are_read(tmp_path: Path) -> None:
    samples = noise(1000)
    blocks = list(open_recordings([write(tmp_path / "a.wav", samples)], 0, "tape").blocks(100))
    assert np.array_equal(np.concatenate([block.samples for block in blocks]), samples)


def test_values_that_are_no_numbers_pass_through(tmp_path: Path) -> None:
    samples = noise(10)
    samples[3], samples[5] = np.nan, np.inf
    source = open_recordings([write(tmp_path / "a.wav", samples)], 0, "tape")
    assert np.array_equal(gather(source, 4), samples, equal_nan=True)


def test_a_stream_can_be_read_again_from_its_begin(tmp_path: Path) -> None:
    source = open_recordings([write(tmp_path / "a.wav", noise(500))], 0, "tape")
    next(source.blocks(10)).samples[:] = 0
    assert np.array_equal(gather(source, 64), gather(source, 65))


def test_closing_the_iterator_closes_the_file(tmp_path: Path) -> None:
    source = open_recordings([write(tmp_path / "a.wav", noise(500))], 0, "tape")

    def held() -> int:
        links = [link for link in Path("/proc/self/fd").iterdir() if link.is_symlink()]
        return sum(str(link.readlink()).endswith("a.wav") for link in links)

    blocks = source.blocks(10)
    next(blocks)
    assert held() == 1
    blocks.close()  # type: ignore[attr-defined]
    assert held() == 0


def test_memory_does_not_grow_with_length(tmp_path: Path) -> None:
    """Four times the samples take no more than one block more (numpy reports its arrays to tracemalloc)."""
    peaks = []
    for seconds in (20, 80):
        path = write(tmp_path / f"{seconds}.wav", np.zeros((seconds * RATE, 1), np.float32))
        source = open_recordings([path], 0, "tape")
        tracemalloc.start()
        for _ in source.blocks(RATE):
            pass
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    assert peaks[1] < peaks[0] + 4 * RATE


# ---------------------------------------------------------------------------------------------- times


def test_without_a_start_the_files_date_is_taken_as_the_end(tmp_path: Path) -> None:
    source = open_recordings([write(tmp_path / "a.wav", noise(RATE), end_s=DAY)], None, "tape")
    assert source.start_ns == (DAY - 1) * NS
    assert source.time_quality is TimeQuality.ASSUMED
    assert source.assumed == (f"{tmp_path / 'a.wav'} ended at 2026-03-01T00:00:00.000000000Z, the date of the file",)


def test_a_given_start_is_taken_and_still_called_assumed(tmp_path: Path) -> None:
    source = open_recordings([write(tmp_path / "a.wav", noise(RATE))], 17 * NS, "tape")
    assert source.start_ns == 17 * NS
    assert source.time_quality is TimeQuality.ASSUMED
    assert "1970-01-01T00:00:17.000000000Z, as told" in source.assumed[0]


def piece(name: str, seconds: float, end_s: float) -> RecordingFile:
    return RecordingFile(Path(name), RATE, 1, round(seconds * RATE), round(seconds * RATE), 0, round(end_s * NS))


@pytest.mark.parametrize("pause", [-2.0, -0.5, 0.0, 1.5, 2.0])
def test_files_dated_within_two_seconds_join_exactly(pause: float) -> None:
    pieces, assumed, warnings = lay_out([piece("a", 10, 100), piece("b", 5, 105 + pause)])
    assert pieces[1].first_sample == 10 * RATE
    assert "join without a gap: 1 times" in assumed[0]
    assert not warnings


def test_a_later_file_begins_after_a_gap_of_as_many_samples() -> None:
    pieces, assumed, warnings = lay_out([piece("a", 10, 100), piece("b", 5, 107.5), piece("c", 5, 112.5)])
    assert [p.first_sample for p in pieces] == [0, 12.5 * RATE, 17.5 * RATE]
    assert assumed[0] == "2.500 s are missing before b, by the files' dates"
    assert not warnings


def test_files_whose_dates_overlap_follow_directly_with_a_warning() -> None:
    pieces, _, warnings = lay_out([piece("a", 10, 100), piece("b", 5, 100)])
    assert pieces[1].first_sample == 10 * RATE
    assert "overlap by 5.000 s" in warnings[0]


def test_spacing_by_dates_holds_under_a_given_start(tmp_path: Path) -> None:
    first = write(tmp_path / "a.wav", noise(RATE), end_s=DAY)
    second = write(tmp_path / "b.wav", noise(RATE), end_s=DAY + 11)
    source = open_recordings([first, second], 0, "tape")
    blocks = list(source.blocks(RATE))
    assert [(block.first_sample, block.time_ns) for block in blocks] == [(0, 0), (11 * RATE, 11 * NS)]
    assert source.length == 12 * RATE


# ---------------------------------------------------------------------------------------------- bad input


def refused(*paths: Path, rate_hz: int | None = None, least_inputs: int = 1) -> tuple[str, ...]:
    with pytest.raises(SourceRefusedError) as caught:
        open_recordings(paths, None, "tape", rate_hz=rate_hz, least_inputs=least_inputs)
    return caught.value.problems


def test_every_file_that_cannot_be_read_is_told_at_once(tmp_path: Path) -> None:
    (tmp_path / "empty.wav").touch()
    (tmp_path / "foreign.wav").write_text("minutes of the meeting " * 100)
    (tmp_path / "folder").mkdir()
    (tmp_path / "bare.raw").write_bytes(bytes(100))
    names = ["missing.wav", "empty.wav", "foreign.wav", "folder", "bare.raw"]
    words = ["No such file", "empty (0 bytes)", "not readable as audio", "a directory", "without a header"]
    problems = refused(*[tmp_path / name for name in names])
    assert len(problems) == len(names)
    for problem, name, word in zip(problems, names, words, strict=True):
        assert problem.startswith(f"{tmp_path / name}: ")
        assert word in problem
        assert "; expected " in problem


def test_a_file_without_a_sample_is_refused(tmp_path: Path) -> None:
    assert "no sample in" in refused(write(tmp_path / "a.wav", noise(0)))[0]


def test_no_recording_at_all_is_refused() -> None:
    assert "no recording given" in refused()[0]


def test_the_same_recording_twice_is_refused_under_whatever_name(tmp_path: Path) -> None:
    path = write(tmp_path / "a.wav", noise(10))
    (tmp_path / "b.wav").symlink_to(path)
    assert "given twice" in refused(path, tmp_path / "b.wav")[0]


def test_another_rate_or_input_count_than_the_first_files_is_refused(tmp_path: Path) -> None:
    first = write(tmp_path / "a.wav", noise(10))
    other = write(tmp_path / "b.wav", noise(10, 2), rate=44100)
    rate, inputs = refused(first, other)
    assert "44100 Hz; expected 8000 Hz like" in rate
    assert "2 inputs; expected 1 input like" in inputs


def test_another_rate_or_fewer_inputs_than_configured_is_refused(tmp_path: Path) -> None:
    rate, inputs = refused(write(tmp_path / "a.wav", noise(10)), rate_hz=48000, least_inputs=2)
    assert "8000 Hz; expected 48000 Hz as configured" in rate
    assert "1 input; expected at least 2 as configured" in inputs


@pytest.mark.parametrize("name", ["a.wav", "a.rf64", "a.aiff"])
def test_a_recording_cut_short_is_read_as_far_as_it_goes_and_says_so(tmp_path: Path, name: str) -> None:
    samples = noise(10 * RATE)
    path = cut(write(tmp_path / name, samples, "PCM_24"), 0.5)
    source = open_recordings([path], None, "tape")
    got = gather(source, 999)
    assert abs(len(got) - 5 * RATE) < 40  # the header's share of half the bytes
    assert np.max(np.abs(got - samples[: len(got)])) <= 2**-23  # a step of 24 bits
    missing = (10 * RATE - len(got)) / RATE
    for words in (source.assumed, source.warnings):
        assert any(f"is cut short: {missing:.3f} s of 10.000 s are missing" in word for word in words)
    assert source.start_ns == DAY * NS - len(got) * NS // RATE


@pytest.mark.parametrize("keep", [0.2, 0.4999, 0.5, 0.9, 0.9999])
@pytest.mark.parametrize("frames", [64, 1000, 10 * RATE])
def test_a_compressed_recording_cut_short_is_read_to_its_last_whole_frame(
    tmp_path: Path, keep: float, frames: int
) -> None:
    samples = noise(10 * RATE)
    path = write(tmp_path / "a.flac", samples, "PCM_24")
    source = open_recordings([cut(path, keep)], None, "tape")
    got = gather(source, frames)
    assert len(got) == source.length > (keep - 0.07) * len(samples)  # a frame is 4096 samples, 5 % of the whole
    assert np.max(np.abs(got - samples[: len(got)])) <= 2**-23
    assert "is cut short" in source.warnings[0]


def test_a_recording_cut_short_within_its_header_is_refused(tmp_path: Path) -> None:
    path = write(tmp_path / "a.wav", noise(1000), "PCM_16")
    path.write_bytes(path.read_bytes()[:44])
    assert "no sample in 44 bytes" in refused(path)[0]
    path.write_bytes(path.read_bytes()[:20])
    assert "not readable as audio" in refused(path)[0]


def test_a_writer_to_a_pipe_leaves_the_length_open_and_nothing_is_missing(tmp_path: Path) -> None:
    path = write(tmp_path / "a.wav", noise(1000), "PCM_16")
    content = bytearray(path.read_bytes())
    struct.pack_into("<I", content, content.index(b"data") + 4, 0xFFFFFFFF)
    path.write_bytes(content)
    source = open_recordings([path], None, "tape")
    assert source.length == 1000
    assert not source.warnings


def test_a_compressed_recording_whose_length_was_left_open_is_read_to_its_end(tmp_path: Path) -> None:
    path = write(tmp_path / "a.flac", noise(10_000), "PCM_16")
    content = bytearray(path.read_bytes())
    content[21] &= 0xF0  # the low 36 bits of the stream information's last eight bytes are the number of samples
    content[22:26] = bytes(4)
    path.write_bytes(content)
    source = open_recordings([path], None, "tape")
    assert source.length in (9_999, 10_000)  # where no end is known the last sample may be given up
    assert not source.warnings


def test_a_plain_wav_past_4_gib_is_read_as_far_as_its_header_can_speak(tmp_path: Path) -> None:
    path = write(tmp_path / "a.wav", noise(1000), "PCM_16")
    with path.open("r+b") as file:
        file.truncate(file.seek(0, os.SEEK_END) + 2**32)
    source = open_recordings([path], None, "tape")
    assert source.length == 1000
    assert "4294967296 bytes behind" in source.warnings[0]


def test_reading_that_stops_in_the_midst_fails_after_what_was_read(tmp_path: Path) -> None:
    samples = noise(RATE)
    path = write(tmp_path / "a.wav", samples)
    source = open_recordings([path], None, "tape")
    cut(path, 0.5)
    blocks = source.blocks(1000)
    got = [next(blocks).samples for _ in range(3)]
    assert np.array_equal(np.concatenate(got), samples[:3000])
    with pytest.raises(SourceFailedError, match=r"stopped at 0\.\d+ s .*; expected 1\.000 s"):
        list(blocks)


def test_a_recording_that_vanished_after_the_check_fails_in_the_midst(tmp_path: Path) -> None:
    path = write(tmp_path / "a.wav", noise(100))
    source = open_recordings([path], None, "tape")
    path.unlink()
    with pytest.raises(SourceFailedError, match=r"stopped at 0\.000 s"):
        next(source.blocks(10))


def test_a_recording_that_gained_an_input_after_the_check_fails_in_the_midst(tmp_path: Path) -> None:
    path = write(tmp_path / "a.wav", noise(100))
    source = open_recordings([path], None, "tape")
    write(path, noise(100, 2))
    with pytest.raises(SourceFailedError, match=r"stopped at 0\.000 s"):
        next(source.blocks(10))


# ---------------------------------------------------------------------------------------------- headers


@pytest.mark.parametrize("name", ["a.wav", "a.rf64", "a.aiff"])
@pytest.mark.parametrize("inputs", [1, 3])
def test_a_header_promises_the_frames_that_were_written(tmp_path: Path, name: str, inputs: int) -> None:
    header = promised_frames(write(tmp_path / name, noise(1234, inputs), "PCM_24"))
    assert header is not None
    assert (header.frames, header.surplus) == (1234, 0)


def test_a_chunk_of_odd_length_before_the_samples_is_stepped_over_with_its_padding(tmp_path: Path) -> None:
    path = write(tmp_path / "a.wav", noise(1000), "PCM_16")
    content = path.read_bytes()
    at = content.index(b"data")
    path.write_bytes(content[:at] + struct.pack("<4sI3sx", b"note", 3, b"odd") + content[at:])
    header = promised_frames(path)
    assert header is not None
    assert header.frames == 1000


def test_other_formats_have_no_header_of_chunks(tmp_path: Path) -> None:
    assert promised_frames(write(tmp_path / "a.flac", noise(100), "PCM_16")) is None


@given(
    junk=st.binary(max_size=80), head=st.sampled_from([b"RIFF\0\0\0\0WAVE", b"RF64\0\0\0\0WAVE", b"FORM\0\0\0\0AIFF"])
)
def test_no_header_however_broken_escapes_as_another_error(
    tmp_path_factory: pytest.TempPathFactory, junk: bytes, head: bytes
) -> None:
    path = tmp_path_factory.mktemp("junk") / "a.wav"
    path.write_bytes(head + junk)
    assert promised_frames(path) is not None
    with pytest.raises(SourceRefusedError):
        inspect_recording(path)
