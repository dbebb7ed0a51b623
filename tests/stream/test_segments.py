"""Segments of the recorder are one stream, laid out by their side files, or refused with the reason."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from collections.abc import Iterable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile
from driftwatch.config import RecordConfig
from driftwatch.records import NS, Block, Fault, TimeQuality, parse_time, sample_time_ns
from driftwatch.stream.recorder import Recorder
from driftwatch.stream.recording import open_recordings
from driftwatch.stream.sidefile import Identity, NoSideFileError, parse_side_file, side_of
from driftwatch.stream.source import SourceRefusedError
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

RATE = 2400
START = "2026-03-01T06:00:00Z"
WHO = Identity(
    "tiny", "5f0e8f0e-1111-4222-8333-123456789abc", "card", RATE, 1, parse_time(START), TimeQuality.FREE, "float32"
)
SECOND_RUN = replace(WHO, run="11111111-1111-4222-8333-123456789abc", start_ns=WHO.start_ns + 3600 * NS)


def noise(seconds: float, inputs: int = 1) -> NDArray[np.float32]:
    samples = 0.1 * np.random.default_rng(0).standard_normal((round(seconds * RATE), inputs))
    return samples.astype(np.float32)


def record(folder: Path, *parts: tuple[int, NDArray[np.float32], Fault], who: Identity = WHO) -> list[Path]:
    """Record blocks in segments of 1 s; return the segments, all of the folder's."""
    with Recorder(folder, RecordConfig(keep_hours=100.0, segment_s=1.0), who) as recorder:
        for first, samples, cause in parts:
            time_ns = sample_time_ns(who.start_ns, first, who.rate_hz)
            recorder.write(Block("card", first, time_ns, samples, cause))
    return sorted(folder.glob("*.wav"))


def after_gaps(blocks: Iterable[Block]) -> list[tuple[int, Fault]]:
    """Return index and cause of each block that does not follow the one before it."""
    found, end = [], None
    for one in blocks:
        if one.first_sample != end:
            found.append((one.first_sample, one.cause))
        end = one.first_sample + len(one.samples)
    return found


def refused(*paths: Path, start_ns: int | None = None, **more: Any) -> tuple[str, ...]:
    with pytest.raises(SourceRefusedError) as caught:
        open_recordings(paths, start_ns, "card", **more)
    return caught.value.problems


# ---------------------------------------------------------------------------------------------- one stream


def test_a_stream_that_begins_late_keeps_its_indices_and_times(tmp_path: Path) -> None:
    first = 2**32 - 100
    record(tmp_path, (first, noise(3.0), Fault.GAP))
    source = open_recordings([tmp_path], None, "input")
    assert (source.first_sample, source.length) == (first, first + 3 * RATE)
    assert (source.name, source.start_ns, source.time_quality) == ("input", WHO.start_ns, TimeQuality.FREE)
    assert (source.assumed, source.warnings, source.sources) == ((), (), (str(tmp_path),))
    block = next(source.blocks(1000))
    assert (block.source, block.first_sample) == ("input", first)
    assert block.time_ns == WHO.start_ns + first * NS // RATE


def test_segments_are_laid_out_by_their_index_in_whatever_order_and_place_they_are_given(tmp_path: Path) -> None:
    samples = noise(4.0)
    paths = record(tmp_path / "a", (0, samples, Fault.GAP))
    (tmp_path / "b").mkdir()
    for path in (paths[1], side_of(paths[1])):
        path.rename(tmp_path / "b" / f"renamed{path.suffix}")
    source = open_recordings([paths[3], tmp_path / "b" / "renamed.wav", paths[2], paths[0]], None, "card")
    assert np.array_equal(np.concatenate([block.samples for block in source.blocks(500)]), samples)
    both = open_recordings([tmp_path / "a", tmp_path / "b" / "renamed.wav"], None, "card")
    assert [piece.first_sample for piece in both.pieces] == [0, RATE, 2 * RATE, 3 * RATE]


def test_a_missing_segment_is_a_plain_gap_even_where_it_held_the_begin_of_a_gap_with_a_cause(tmp_path: Path) -> None:
    parts = (0, noise(2.5), Fault.GAP), (3 * RATE, noise(1.0), Fault.OVERFLOW), (5 * RATE, noise(1.0), Fault.DEVICE)
    paths = record(tmp_path, *parts)
    assert [path.stem[-5:] for path in paths] == ["00000", "02400", "04800", "07200", "12000"]
    whole, gap = [(0, Fault.GAP)], Fault.GAP
    for missing, expected in (
        (None, [*whole, (3 * RATE, Fault.OVERFLOW), (5 * RATE, Fault.DEVICE)]),
        (1, [*whole, (2 * RATE, gap), (3 * RATE, Fault.OVERFLOW), (5 * RATE, Fault.DEVICE)]),
        (2, [*whole, (3 * RATE, gap), (5 * RATE, Fault.DEVICE)]),
        (3, [*whole, (5 * RATE, gap)]),
    ):
        source = open_recordings([path for k, path in enumerate(paths) if k != missing], None, "card")
        assert after_gaps(source.blocks(1000)) == expected


def test_what_else_lies_in_the_folder_is_left_alone_and_damage_is_told(tmp_path: Path) -> None:
    paths = record(tmp_path, (0, noise(3.0), Fault.GAP))
    soundfile.write(tmp_path / "other.wav", noise(1.0), RATE)
    (tmp_path / "other.json").write_text("{}")
    side_of(paths[1]).write_text("{")
    side_of(paths[2]).unlink()
    source = open_recordings([tmp_path], None, "card")
    assert [piece.first_sample for piece in source.pieces] == [0]
    damaged, gone = source.warnings
    assert str(paths[1]) in damaged
    assert "left out" in damaged
    assert str(paths[2]) in gone
    assert "No such file" in gone


def test_a_recording_beside_other_peoples_json_is_a_recording(tmp_path: Path) -> None:
    soundfile.write(tmp_path / "other.wav", noise(1.0), RATE)
    (tmp_path / "other.json").write_text('{"schema": 1, "take": 3}')
    source = open_recordings([tmp_path / "other.wav"], 0, "card")
    assert (source.length, source.time_quality) == (RATE, TimeQuality.ASSUMED)


def test_an_unfinished_and_a_cut_segment_are_read_as_far_as_they_go_and_told(tmp_path: Path) -> None:
    paths = record(tmp_path, (0, noise(2.0), Fault.GAP))
    with paths[0].open("r+b") as file:
        file.truncate(58 + 4 * 600 + 3)
    side = side_of(paths[1])
    side.write_text(json.dumps(json.loads(side.read_text()) | {"frames": None, "finished": False}))
    source = open_recordings([tmp_path], None, "card")
    assert [(p.first_sample, p.frames) for p in source.pieces] == [(0, 600), (RATE, RATE)]
    assert "is cut short: 0.750 s are missing" in source.warnings[0]
    assert "was not finished, or is being written" in source.warnings[1]


# ---------------------------------------------------------------------------------------------- refused


def test_several_runs_are_refused_with_a_pattern_for_each_that_serves(tmp_path: Path) -> None:
    record(tmp_path, (0, noise(2.0), Fault.GAP))
    record(tmp_path, (RATE, noise(3.0), Fault.GAP), who=SECOND_RUN)
    head, first, second = refused(tmp_path)
    assert head == "segments: got those of 2 runs; expected one run; name the files of one:"
    assert f'run {WHO.run} of source "card", 2026-03-01T06:00:00.000000000Z to ' in first
    assert first.endswith("06:00:02.000000000Z, 2 segments")
    assert "2026-03-01T07:00:01.000000000Z to 2026-03-01T07:00:04.000000000Z, 3 segments" in second
    for line, who, count in ((first, WHO, 2), (second, SECOND_RUN, 3)):
        pattern = line.split(": ")[0].strip()
        source = open_recordings(sorted(tmp_path.glob(Path(pattern).name)), None, "card")
        assert (source.start_ns, len(source.pieces)) == (who.start_ns, count)


def test_segments_beside_other_recordings_are_refused(tmp_path: Path) -> None:
    paths = record(tmp_path, (0, noise(1.0), Fault.GAP))
    soundfile.write(tmp_path / "other.wav", noise(1.0), RATE)
    (problem,) = refused(paths[0], tmp_path / "other.wav")
    assert problem.startswith(f"{tmp_path / 'other.wav'}: no segment of the recorder; expected segments alone")


def test_a_told_start_is_refused_with_the_reason(tmp_path: Path) -> None:
    paths = record(tmp_path, (0, noise(1.0), Fault.GAP))
    (problem,) = refused(*paths, start_ns=WHO.start_ns)
    assert problem.startswith("--start: got 2026-03-01T06:00:00.000000000Z; expected none, for the side files")


def test_a_segment_given_twice_or_copied_is_refused(tmp_path: Path) -> None:
    paths = record(tmp_path, (0, noise(2.0), Fault.GAP))
    assert "given twice" in refused(tmp_path, paths[1])[0]
    copy = tmp_path / "copy.wav"
    shutil.copy(paths[0], copy)
    shutil.copy(side_of(paths[0]), side_of(copy))
    assert "begins at sample 0; expected 2400 or later" in refused(*paths, copy)[0]


def test_a_segment_without_its_side_file_is_no_recording_of_its_date(tmp_path: Path) -> None:
    paths = record(tmp_path, (0, noise(2.0), Fault.GAP))
    side_of(paths[0]).unlink()
    side_of(paths[1]).write_text("no JSON")
    gone, damaged = refused(*paths)
    assert "cannot be read (No such file or directory); expected what the recorder wrote; copy both files" in gone
    assert "damaged" in damaged


def test_a_layout_of_another_version_is_refused_by_its_number(tmp_path: Path) -> None:
    (path,) = record(tmp_path, (0, noise(1.0), Fault.GAP))
    side = side_of(path)
    side.write_text(json.dumps(json.loads(side.read_text()) | {"schema": 2}))
    assert "layout 2, and this version reads layout 1" in refused(path)[0]


def test_another_rate_or_fewer_inputs_than_configured_is_refused(tmp_path: Path) -> None:
    record(tmp_path, (0, noise(0.5), Fault.GAP))
    rate, inputs = refused(tmp_path, rate_hz=48_000, least_inputs=2)
    assert "2400 Hz; expected 48000 Hz as configured" in rate
    assert "1 input; expected at least 2 as configured" in inputs


def test_samples_that_are_not_what_the_side_file_says_are_refused(tmp_path: Path) -> None:
    (path,) = record(tmp_path, (0, noise(1.0), Fault.GAP))
    soundfile.write(path, noise(1.0, 2), RATE)
    assert "2 inputs at 2400 Hz; expected 1 at 2400 Hz by its side file" in refused(path)[0]


def test_a_folder_without_a_segment_is_refused(tmp_path: Path) -> None:
    assert "a directory; expected a recording" in refused(tmp_path)[0]


@given(junk=st.binary(max_size=60) | st.text(max_size=20).map(lambda text: json.dumps(text).encode()))
def test_no_side_file_however_broken_escapes_as_another_error(junk: bytes) -> None:
    assert parse_side_file(junk, is_ours=False) is None
    with pytest.raises(NoSideFileError):
        parse_side_file(junk, is_ours=True)


@settings(deadline=None)  # a disk may be slow
@given(data=st.data())
def test_no_value_in_a_side_file_escapes_as_another_error(
    tmp_path_factory: pytest.TempPathFactory, data: st.DataObject
) -> None:
    """Any one value replaced by any other kind either still reads or is refused as damaged."""
    (path,) = record(tmp_path_factory.mktemp("one"), (0, noise(0.01), Fault.GAP))
    content = json.loads(side_of(path).read_text())
    values = (
        st.none() | st.booleans() | st.integers(-2, 2) | st.floats() | st.text(max_size=3) | st.just([]) | st.just({})
    )
    holder: Any = data.draw(st.sampled_from([content, content["parts"][0]]))
    key = data.draw(st.sampled_from(sorted(holder)))
    if data.draw(st.booleans()):
        holder[key] = data.draw(values)
    else:
        del holder[key]
    try:
        assert parse_side_file(json.dumps(content).encode(), is_ours=True) is not None
    except NoSideFileError as error:
        assert str(error)


# ---------------------------------------------------------------------------------------------- the command

TINY = """
schema = 1
[station]
name = "tiny"
[[channel]]
name = "drive end"
[[mode]]
name = "rocking"
channel = "drive end"
search_hz = [340.0, 460.0]
window_s = 1.0
step_s = 0.1
"""


def replay(folder: Path, *arguments: str) -> tuple[int, list[dict[str, Any]], str]:
    (folder / "tiny.toml").write_text(TINY)
    done = subprocess.run(
        [sys.executable, "-m", "driftwatch", "replay", "tiny.toml", *arguments, "--json"],
        cwd=folder,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    return done.returncode, [json.loads(line) for line in done.stdout.splitlines()], done.stderr


def told(records: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """Leave out what differs between two replays: the run, its source, and what was assumed of the time."""
    return [
        {
            key: value
            for key, value in one.items()
            if key not in ("run", "time_quality", "sources", "assumed", "incident")
        }
        for one in records
    ]


def test_replay_of_a_folder_and_of_named_segments_equals_that_of_the_recording(tmp_path: Path) -> None:
    samples = noise(4.3)
    soundfile.write(tmp_path / "whole.wav", samples, RATE, subtype="FLOAT")
    paths = record(tmp_path / "recordings", (0, samples, Fault.GAP))
    _, expected, _ = replay(tmp_path, "whole.wav", "--start", START)
    assert sum(one["kind"] == "measurement" for one in expected) > 30
    for names in (["recordings"], [str(path) for path in paths]):
        status, records, said = replay(tmp_path, *names)
        assert (status, said) == (0, "")
        assert told(records) == told(expected)
        assert {one["time_quality"] for one in records} == {"free"}
        assert records[0]["sources"] == names


def test_replay_carries_the_cause_of_a_gap_into_its_incident(tmp_path: Path) -> None:
    record(tmp_path / "recordings", (0, noise(2.0), Fault.GAP), (3 * RATE, noise(2.0), Fault.OVERFLOW))
    _, records, _ = replay(tmp_path, "recordings")
    ended = [one for one in records if one["kind"] == "health" and one["phase"] == "end"]
    assert [(one["fault"], one["lost_samples"]) for one in ended] == [("overflow", RATE)]


def test_replay_refuses_a_start_beside_segments_before_anything_is_started(tmp_path: Path) -> None:
    record(tmp_path / "recordings", (0, noise(1.0), Fault.GAP))
    status, records, said = replay(tmp_path, "recordings", "--start", START)
    assert (status, records) == (2, [])
    assert "leave it out" in said
    assert not list(tmp_path.glob("*.db"))
