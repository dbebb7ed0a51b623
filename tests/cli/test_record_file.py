"""A file of records goes on exactly where its last whole line ends, and never into something else."""

from __future__ import annotations

import json
from pathlib import Path

import click
import pytest
from driftwatch.bus.follow import Place
from driftwatch.cli.record_file import RecordFile

RECORDS = [{"kind": "track", "run": "run 1", "sequence": number, "text": "Würze" * number} for number in range(1, 4)]


def _lines(records: list[dict[str, object]]) -> bytes:
    return b"".join(json.dumps(one, ensure_ascii=False, separators=(",", ":")).encode() + b"\n" for one in records)


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "records.jsonl"


def test_it_is_made_and_gone_on_with(path: Path) -> None:
    with RecordFile(path) as file:
        assert file.place is None
        file.append(RECORDS[:2])
    with RecordFile(path) as file:
        assert file.place == Place("run 1", 2)
        file.append(RECORDS[2:])
    assert path.read_bytes() == _lines(RECORDS)


def test_wherever_a_kill_cut_the_last_line_it_is_cut_off_whole(path: Path) -> None:
    whole = _lines(RECORDS)
    ends = [0, *(place + 1 for place, byte in enumerate(whole) if byte == ord("\n"))]
    for length in range(len(whole) + 1):
        path.write_bytes(whole[:length])
        with RecordFile(path) as file:
            had = sum(end <= length for end in ends) - 1
            assert file.place == (Place("run 1", had) if had else None)
        assert path.read_bytes() == whole[: ends[had]]


def test_zeros_that_a_power_cut_left_at_the_end_are_cut_off(path: Path) -> None:
    path.write_bytes(_lines(RECORDS) + b"\0" * 5000)
    with RecordFile(path) as file:
        assert file.place == Place("run 1", 3)
    assert path.read_bytes() == _lines(RECORDS)


@pytest.mark.parametrize(
    "held", [b"my notes", b"my notes\n", b"[1]\n", b'{"a":1}\n', _lines([RECORDS[0] | {"kind": "heartbeat"}]), b"1\n"]
)
def test_a_file_that_holds_something_else_is_refused_and_left_alone(path: Path, held: bytes) -> None:
    path.write_bytes(held)
    with pytest.raises(click.UsageError, match="which is no record; expected an empty file or one that"):
        RecordFile(path)
    assert path.read_bytes() == held


def test_two_listeners_do_not_write_to_one_file(path: Path) -> None:
    with RecordFile(path), pytest.raises(click.UsageError, match="another listener writes to it"):
        RecordFile(path)
    RecordFile(path).close()


def test_a_file_that_cannot_be_written_is_refused(tmp_path: Path) -> None:
    with pytest.raises(click.UsageError, match="expected a file that can be written to"):
        RecordFile(tmp_path / "nowhere" / "records.jsonl")


def test_a_full_disk_ends_the_work_with_what_to_do() -> None:
    full = Path("/dev/full")
    if not full.exists():
        pytest.skip("no /dev/full here")
    with RecordFile(full) as file, pytest.raises(click.ClickException, match=r"No space left.*make room"):
        file.append(RECORDS)
