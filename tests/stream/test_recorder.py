"""The raw recorder keeps the last hours bit for bit, within its budget, whatever is killed or fills up."""

from __future__ import annotations

import itertools
import json
import resource
import subprocess
import sys
import tracemalloc
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import soundfile
from driftwatch.config import RecordConfig
from driftwatch.records import NS, Block, Clock, Fault, TimeQuality, parse_time, sample_time_ns
from driftwatch.stream.recorder import MOST_PARTS, NotRecordedError, Recorder, segment_frames
from driftwatch.stream.recording import open_recordings
from driftwatch.stream.sidefile import Identity, SampleFormat
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

RUN = "5f0e8f0e-1111-4222-8333-123456789abc"
START_NS = 1_772_323_200 * NS + 123_456_789  # 2026-03-01T00:00:00.123456789Z
RATE = 100
CAUSES = [Fault.GAP, Fault.OVERFLOW, Fault.SLOW_CONSUMER, Fault.DEVICE]

Run = tuple[int, bytes, Fault]
"""Samples without a gap: their first index, their bytes, and why some are missing before them."""


def identity(rate_hz: int = RATE, inputs: int = 1, sample_format: SampleFormat = "float32", run: str = RUN) -> Identity:
    return Identity("line 3", run, "card 1.a", rate_hz, inputs, START_NS, TimeQuality.FREE, sample_format)


def config(keep_hours: float = 1e4, most_gb: float = 1.0, segment_s: float = 1.0) -> RecordConfig:
    return RecordConfig(keep_hours=keep_hours, most_gb=most_gb, segment_s=segment_s)


def block(first: int, samples: NDArray[np.float32], cause: Fault = Fault.GAP, rate_hz: int = RATE) -> Block:
    return Block("card 1.a", first, sample_time_ns(START_NS, first, rate_hz), samples, cause)


def noise(frames: int, inputs: int = 1, seed: int = 0) -> NDArray[np.float32]:
    return np.random.default_rng(seed).uniform(-1, 1, (frames, inputs)).astype(np.float32)


def runs_of(blocks: Sequence[Block] | Iterator[Block]) -> list[Run]:
    """Join blocks that follow each other."""
    runs: list[tuple[int, list[NDArray[np.float32]], Fault]] = []
    end = None
    for one in blocks:
        if one.first_sample != end:
            runs.append((one.first_sample, [], one.cause))
        runs[-1][1].append(one.samples)
        end = one.first_sample + len(one.samples)
    return [(first, np.concatenate(samples).tobytes(), cause) for first, samples, cause in runs]


def replayed(folder: Path, frames: int = 1000) -> list[Run]:
    source = open_recordings([folder], None, "card")
    assert (source.start_ns, source.time_quality) == (START_NS, TimeQuality.FREE)
    return runs_of(source.blocks(frames))


def segments(folder: Path) -> list[Path]:
    return sorted(folder.glob("*.wav"))


def total(folder: Path) -> int:
    return sum(path.stat().st_size for path in folder.iterdir())


# ---------------------------------------------------------------------------------------------- as it came


@st.composite
def streams(draw: st.DrawFn) -> tuple[Identity, list[Block]]:
    """Blocks of any lengths with gaps anywhere, of values that the format can hold, from a small or huge index on."""
    inputs = draw(st.integers(1, 3))
    sample_format = draw(st.sampled_from(["float32", "int16", "int32"]))
    at = draw(st.sampled_from([0, 7, 2**31 - 60, 2**32 - 60, 2**37 + 1]))
    random = np.random.default_rng(draw(st.integers(0, 2**32)))
    blocks = []
    for _ in range(draw(st.integers(1, 12))):
        at += draw(st.sampled_from([0, 0, 1, 99, 250]))
        frames = draw(st.integers(1, 230))
        if sample_format == "int16":
            samples = (random.integers(-32768, 32768, (frames, inputs)) / 32768).astype(np.float32)
        else:  # any pattern of bits: also what is no number
            samples = random.integers(0, 2**32, (frames, inputs), dtype=np.uint32).view(np.float32)
        blocks.append(block(at, samples, draw(st.sampled_from(CAUSES))))
        at += frames
    return identity(inputs=inputs, sample_format=sample_format), blocks


@settings(deadline=None, max_examples=60)  # a disk may be slow
@given(stream=streams(), seconds=st.sampled_from([1.0, 1.37, 3.0, 60.0]), frames=st.integers(1, 400))
def test_any_blocks_with_any_gaps_in_any_segments_are_replayed_bit_for_bit(
    tmp_path_factory: pytest.TempPathFactory, stream: tuple[Identity, list[Block]], seconds: float, frames: int
) -> None:
    folder, (who, blocks) = tmp_path_factory.mktemp("segments"), stream
    with Recorder(folder, config(segment_s=seconds), who) as recorder:
        for one in blocks:
            recorder.write(one)
        assert recorder.next_sample == blocks[-1].first_sample + len(blocks[-1].samples)
    got, expected = replayed(folder, frames), runs_of(blocks)
    assert [one[:2] for one in got] == [one[:2] for one in expected]
    assert [one[2] for one in got[1:]] == [one[2] for one in expected[1:]]  # before the first there is no gap
    assert open_recordings([folder], None, "card").first_sample == blocks[0].first_sample


def test_segments_begin_on_the_grid_of_the_stream_index_and_are_named_by_time(tmp_path: Path) -> None:
    with Recorder(tmp_path, config(segment_s=2.0), identity()) as recorder:
        recorder.write(block(150, noise(300)))
    assert [path.name for path in segments(tmp_path)] == [
        "card 1.a-20260301T000001Z-5f0e8f0e-000000000000150.wav",
        "card 1.a-20260301T000002Z-5f0e8f0e-000000000000200.wav",
        "card 1.a-20260301T000004Z-5f0e8f0e-000000000000400.wav",
    ]


def test_a_side_file_tells_times_gaps_and_clock_exactly(tmp_path: Path) -> None:
    clock = Clock("card 1.a", float(RATE), 12.5, 0.25, 60.0, 0.001, None)
    with Recorder(tmp_path, config(segment_s=60.0), identity()) as recorder:
        recorder.write(block(0, noise(50)))
        recorder.write(block(70, noise(30), Fault.OVERFLOW))
        unfinished = json.loads(next(tmp_path.glob("*.json")).read_text())
        recorder.clock(clock)
    side = json.loads(next(tmp_path.glob("*.json")).read_text())
    assert (unfinished["finished"], unfinished["frames"], unfinished["clock"]) == (False, None, None)
    assert (side["schema"], side["finished"], side["frames"], side["start_ns"]) == (1, True, 80, START_NS)
    assert side["clock"]["deviation_ppm"] == 12.5
    assert [(one["frame"], one["first_sample"], one["missing"], one["cause"]) for one in side["parts"]] == [
        (0, 0, None, None),
        (50, 70, 20, "overflow"),
    ]
    assert parse_time(side["start"]) == START_NS
    assert [parse_time(one["time"]) for one in side["parts"]] == [START_NS, START_NS + 70 * NS // RATE]
    assert all(one["time"].endswith("Z") for one in side["parts"])


@pytest.mark.parametrize(("sample_format", "subtype"), [("float32", "FLOAT"), ("int16", "PCM_16"), ("int32", "FLOAT")])
def test_a_segment_is_a_plain_wav_for_any_program_finished_or_not(
    tmp_path: Path, sample_format: SampleFormat, subtype: str
) -> None:
    samples = np.rint(noise(500, 2) * 32767).astype(np.float32) / np.float32(32768)
    recorder = Recorder(tmp_path, config(segment_s=60.0), identity(48_000, 2, sample_format))
    recorder.write(block(0, samples, rate_hz=48_000))
    for _ in ("while it is written", "finished"):
        info = soundfile.info(segments(tmp_path)[0])
        assert (info.samplerate, info.channels, info.frames, info.subtype) == (48_000, 2, 500, subtype)
        assert np.array_equal(soundfile.read(segments(tmp_path)[0], dtype="float32")[0], samples)
        recorder.close()


def test_many_gaps_make_several_segments_so_that_side_files_stay_short(tmp_path: Path) -> None:
    gaps = 2 * MOST_PARTS + 1
    with Recorder(tmp_path, config(segment_s=3600.0), identity()) as recorder:
        for k in range(gaps):
            recorder.write(block(3 * k, noise(2, seed=k), Fault.OVERFLOW))
    assert len(segments(tmp_path)) == 3
    got = replayed(tmp_path)
    assert [one[0] for one in got] == [3 * k for k in range(gaps)]
    assert {one[2] for one in got[1:]} == {Fault.OVERFLOW}


@pytest.mark.parametrize("sample_format", ["float32", "int16"])
def test_a_long_block_is_written_without_a_copy_of_it_in_memory(tmp_path: Path, sample_format: SampleFormat) -> None:
    samples = np.zeros((2_000_000, 2), np.float32)  # 16 MB
    with Recorder(tmp_path, config(segment_s=300.0), identity(48_000, 2, sample_format)) as recorder:
        tracemalloc.start()
        try:
            recorder.write(block(0, samples, rate_hz=48_000))
            _, peak = tracemalloc.get_traced_memory()
        finally:
            tracemalloc.stop()
    assert peak < 1_000_000


def test_columns_of_a_wider_array_are_kept_as_they_are(tmp_path: Path) -> None:
    wide = noise(500, 5)
    with Recorder(tmp_path, config(), identity(inputs=2)) as recorder:
        recorder.write(block(0, wide[:, 1:3]))
    assert replayed(tmp_path)[0][1] == wide[:, 1:3].tobytes()


def test_what_a_16_bit_device_cannot_have_given_is_refused(tmp_path: Path) -> None:
    for value in (1.0, 2**-16, np.nan, np.inf, 3e38):
        with (
            Recorder(tmp_path, config(), identity(sample_format="int16")) as recorder,
            pytest.raises(ValueError, match="multiples of 2"),
        ):
            recorder.write(block(0, np.full((1, 1), value, np.float32)))


def test_other_inputs_than_the_sources_are_refused(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match=r"shape \(3, 2\); expected \(n, 1\)"):
        Recorder(tmp_path, config(), identity()).write(block(0, noise(3, 2)))
    with pytest.raises(ValueError, match="keep_hours is 0"):
        Recorder(tmp_path, config(keep_hours=0.0), identity())


# ---------------------------------------------------------------------------------------------- what goes


def test_the_folder_never_exceeds_its_budget_and_the_newest_stay(tmp_path: Path) -> None:
    most = 60_000
    with Recorder(tmp_path, config(most_gb=most / 1e9), identity(1000)) as recorder:
        for k in range(400):
            recorder.write(block(100 * k, noise(100, seed=k), rate_hz=1000))
            assert total(tmp_path) <= most
    (got,) = replayed(tmp_path)
    assert got[0] > 0
    assert got[0] + len(got[1]) // 4 == 40_000
    assert len(got[1]) > 0.6 * most


def test_a_budget_below_a_segment_makes_shorter_segments() -> None:
    assert segment_frames(config(segment_s=300.0), identity(48_000, 2)) == 300 * 48_000
    assert segment_frames(config(segment_s=300.0, most_gb=0.08), identity(48_000, 2)) == 0.02e9 // 8
    assert segment_frames(config(segment_s=3600.0, most_gb=1e6), identity(10**7, 32)) * 32 * 4 < 2**32


def test_what_ended_longer_ago_than_is_kept_goes_and_nothing_younger(tmp_path: Path) -> None:
    recorder = Recorder(tmp_path, config(keep_hours=10 / 3600), identity())
    for k in range(300):  # 30 s in segments of 1 s
        recorder.write(block(10 * k, noise(10)))
    recorder.close()
    first = int(segments(tmp_path)[0].stem.rpartition("-")[2])
    assert 2900 - 1000 - 100 <= first <= 2900 - 1000


def test_only_segments_are_ever_deleted(tmp_path: Path) -> None:
    foreign = ["a.wav", "b.json", "card 1.a-20250101T000000Z-00000000-000000000000000.wav"]
    damaged = "card 1.a-20250101T000000Z-11111111-000000000000000"
    for name in (*foreign, f"{damaged}.wav", f"{damaged}.json"):
        (tmp_path / name).write_bytes(bytes(20_000))
    renamed = tmp_path / "kept for the report.wav"
    with Recorder(tmp_path, config(most_gb=20e-6, keep_hours=5 / 3600), identity(1000)) as recorder:
        recorder.write(block(0, noise(1000), rate_hz=1000))
        recorder.write(block(1000, noise(1000), rate_hz=1000))
        old = segments(tmp_path)[-2]
        content = old.read_bytes()
        old.rename(renamed)
        for k in range(2, 20):
            recorder.write(block(1000 * k, noise(1000), rate_hz=1000))
    for name in (*foreign, f"{damaged}.wav", f"{damaged}.json"):
        assert (tmp_path / name).read_bytes() == bytes(20_000)
    assert renamed.read_bytes() == content
    assert not old.with_suffix(".json").exists()


def test_earlier_runs_count_and_go_first_even_if_they_are_dated_later(tmp_path: Path) -> None:
    later = replace(identity(1000, run="00000000-2222-4222-8333-123456789abc"), start_ns=START_NS + 10**17)
    with Recorder(tmp_path, config(), later) as recorder:
        for k in range(5):
            recorder.write(block(1000 * k, noise(1000), rate_hz=1000))
    budget = config(most_gb=total(tmp_path) / 1e9 + 2000e-9)
    with Recorder(tmp_path, budget, identity(1000)) as recorder:
        for k in range(2):
            recorder.write(block(1000 * k, noise(1000), rate_hz=1000))
    names = [path.name for path in segments(tmp_path)]
    assert sum("5f0e8f0e" in name for name in names) == 2
    assert 0 < sum("00000000-0" in name for name in names) < 5


# ---------------------------------------------------------------------------------------------- trouble


@contextmanager
def files_no_longer_than(size: int) -> Iterator[None]:
    """Make the system refuse to let any file of this process grow further, as a full disk does."""
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, hard))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))


def write_what_fits(recorder: Recorder, one: Block) -> tuple[Block | None, bool]:
    """Write a block; return the part of it that the recorder says it kept, and whether it failed."""
    try:
        recorder.write(one)
    except NotRecordedError as error:
        assert f"stopped at sample {one.first_sample}" in str(error)
        assert "most_gb" in str(error)
        kept = recorder.next_sample - one.first_sample
        return (replace(one, samples=one.samples[:kept]) if kept > 0 else None), True
    return one, False


@pytest.mark.parametrize("size", [20, 58, 700, 1500, 2700, 3001, 3100])
def test_a_disk_that_is_full_for_a_while_costs_what_came_meanwhile_and_nothing_else(tmp_path: Path, size: int) -> None:
    blocks = [block(300 * k, noise(300, seed=k), Fault.DEVICE) for k in range(6)]
    kept, failed = [], []
    with Recorder(tmp_path, config(segment_s=9.0), identity()) as recorder:
        for k, one in enumerate(blocks):
            with files_no_longer_than(size if k in (2, 3) else 10**6):
                part, has_failed = write_what_fits(recorder, one)
            failed += [k] if has_failed else []
            kept += [part] if part else []
    assert failed
    assert set(failed) <= {2, 3}
    assert replayed(tmp_path) == [(first, content, Fault.GAP) for first, content, _ in runs_of(kept)]
    assert all(path.stat().st_size > 58 and path.suffix in (".wav", ".json") for path in tmp_path.iterdir())
    assert len(segments(tmp_path)) == len(list(tmp_path.glob("*.json")))


@pytest.mark.parametrize("size", [20, 700, 1500, 2700, 3001])
def test_a_block_that_is_given_again_after_a_failure_is_kept_once(tmp_path: Path, size: int) -> None:
    blocks = [block(300 * k, noise(300, seed=k)) for k in range(6)]
    with Recorder(tmp_path, config(segment_s=9.0), identity()) as recorder:
        for k, one in enumerate(blocks):
            if k == 2:
                with files_no_longer_than(size), pytest.raises(NotRecordedError):
                    recorder.write(one)
            recorder.write(one)
    assert replayed(tmp_path) == runs_of(blocks)


def test_a_folder_that_cannot_be_made_is_one_error_with_a_remedy_and_is_tried_again(tmp_path: Path) -> None:
    blocked = tmp_path / "a file"
    blocked.touch()
    recorder = Recorder(blocked / "recordings", config(), identity())
    with pytest.raises(NotRecordedError, match=r"Not a directory\); expected leave to write .* goes on by itself"):
        recorder.write(block(0, noise(10)))
    blocked.unlink()
    recorder.write(block(10, noise(10)))
    recorder.close()
    assert [one[0] for one in replayed(blocked / "recordings")] == [10]


def test_a_recorder_started_again_within_a_run_goes_on_where_the_first_ended(tmp_path: Path) -> None:
    samples = noise(400)
    first = Recorder(tmp_path, config(segment_s=9.0), identity())
    first.write(block(0, samples[:250]))
    again = Recorder(tmp_path, config(segment_s=9.0), identity())  # the first one is left as after a kill
    again.write(block(0, samples[:100]))
    assert again.next_sample == 250
    again.write(block(100, samples[100:300]))
    again.write(block(300, samples[300:]))
    again.close()
    assert [one[:2] for one in replayed(tmp_path)] == [(0, samples.tobytes())]


def test_samples_missed_between_two_recorders_of_a_run_are_a_plain_gap(tmp_path: Path) -> None:
    for first in (0, 700):
        with Recorder(tmp_path, config(segment_s=9.0), identity()) as recorder:
            recorder.write(block(first, noise(100), Fault.OVERFLOW))
    assert [(one[0], one[2]) for one in replayed(tmp_path)][1] == (700, Fault.GAP)


@settings(deadline=None)  # a disk may be slow
@given(keep=st.integers(0, 58 + 300 * 8), gap=st.booleans())
def test_a_segment_that_ends_at_any_byte_is_replayed_to_its_last_whole_sample(
    tmp_path_factory: pytest.TempPathFactory, keep: int, gap: bool
) -> None:
    """As after a kill in a write: the WAV file holds a part of what was written, the side file is of before."""
    folder = tmp_path_factory.mktemp("cut")
    samples = noise(300, 2)
    recorder = Recorder(folder, config(segment_s=60.0), identity(inputs=2))
    recorder.write(block(0, samples[:100]))
    recorder.write(block(100 + 50 * gap, samples[100:], Fault.DEVICE))
    with segments(folder)[0].open("r+b") as file:
        file.truncate(keep)
    frames = max(0, keep - 58) // 8
    if frames == 0:
        return  # nothing to read; that an empty one is cleared away, another test says
    got = replayed(folder)
    assert b"".join(one[1] for one in got) == samples[:frames].tobytes()
    assert [one[0] for one in got] == ([0, 150] if gap and frames > 100 else [0])


def test_a_segment_killed_before_its_first_sample_is_cleared_away_at_the_next_start(tmp_path: Path) -> None:
    with Recorder(tmp_path, config(), identity()) as recorder:
        recorder.write(block(0, noise(250)))
    last = segments(tmp_path)[-1]
    last.write_bytes(last.read_bytes()[:58])
    segments(tmp_path)[0].unlink()  # a kill in a deletion leaves the side file alone
    with Recorder(tmp_path, config(), identity()) as recorder:
        recorder.write(block(200, noise(50)))
    assert [path.stem[-3:] for path in sorted(tmp_path.iterdir())] == ["100", "100", "200", "200"]
    assert [one[0] for one in replayed(tmp_path)] == [100]


CHILD = """
import itertools, sys
from pathlib import Path
import numpy as np
from driftwatch.config import RecordConfig
from driftwatch.records import Block, Fault, TimeQuality
from driftwatch.stream.recorder import Recorder
from driftwatch.stream.sidefile import Identity
who = Identity("line 3", "5f0e8f0e-1111-4222-8333-123456789abc", "card", 1000, 2, 0, TimeQuality.FREE, "float32")
recorder = Recorder(Path(sys.argv[1]), RecordConfig(keep_hours=1.0, segment_s=2.0), who)
at = 0
for k in itertools.count():
    at += 5 * (k % 7 == 6)
    samples = np.arange(2 * at, 2 * at + 600, dtype=np.float32).reshape(-1, 2)
    recorder.write(Block("card", at, at * 10**6, samples, Fault.OVERFLOW))
    at += 300
    print(at, flush=True)
"""
"""Writes as fast as it can blocks of 0.3 s whose values are their own index, with gaps, and says how far it is."""


@pytest.mark.parametrize("lines", [1, 2, 7, 30, 111])
def test_a_kill_loses_nothing_of_what_was_written(tmp_path: Path, lines: int) -> None:
    process = subprocess.Popen([sys.executable, "-c", CHILD, str(tmp_path)], stdout=subprocess.PIPE, text=True)
    try:
        assert process.stdout is not None
        for line in itertools.islice(process.stdout, lines):
            written = int(line)
    finally:
        process.kill()
    written = max([written, *(int(line) for line in process.communicate()[0].split())])
    source = open_recordings([tmp_path], None, "card")
    assert source.length is not None
    assert written <= source.length <= written + 305
    end = 0
    for one in source.blocks(1000):
        expected = np.arange(2 * one.first_sample, 2 * (one.first_sample + len(one.samples)), dtype=np.float32)
        assert np.array_equal(one.samples.ravel(), expected)
        assert one.first_sample in (end, end + 5)
        assert one.cause is (Fault.GAP if one.first_sample == end else Fault.OVERFLOW)
        end = one.first_sample + len(one.samples)


def test_the_recorder_imports_no_scipy() -> None:
    code = "import sys, driftwatch.stream.recorder, driftwatch.config; sys.exit('scipy' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
