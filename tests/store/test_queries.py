"""Questions to the store get exactly the records asked for, in the order of stream time, and change nothing."""

from __future__ import annotations

import uuid
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
import sqlalchemy as sa
from driftwatch.records import NS, AlertState, Envelope, Method, Origin, Phase, TimeQuality
from driftwatch.store.queries import NoSuchRunError, Reader, Wanted
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]

RUNS = ("11111111-1111-4111-8111-111111111111", "11112222-2222-4222-8222-222222222222")


@pytest.fixture
def written(tmp_path: Path, measurement: Make) -> Iterator[tuple[Reader, list[Envelope]]]:
    """Return a database of two runs of two modes on two channels by two methods, and what is in it."""
    envelopes = [
        measurement(
            10 * number + 1,
            run=run,
            channel=("drive end", "free end")[number % 2],
            mode=("rocking", "bending")[number // 2 % 2],
            method=(Method.AMBIENT, Method.RINGDOWN)[number // 4 % 2],
        )
        for run in RUNS
        for number in range(16)
    ]
    with Writer.open(tmp_path / "a.db", "line 3") as writer:
        writer.write(envelopes)
    with Reader.open(tmp_path / "a.db") as reader:
        yield reader, envelopes


def _matches(envelope: Envelope, wanted: dict[str, Any]) -> bool:
    body: Any = envelope.body
    return (
        wanted.get("run", envelope.run) == envelope.run
        and all(wanted.get(name, getattr(body, name)) == getattr(body, name) for name in ("channel", "mode", "method"))
        and wanted.get("since_ns", 0) <= envelope.time_ns < wanted.get("until_ns", 2**62)
    )


@pytest.mark.parametrize(
    "wanted",
    [
        {},
        {"run": RUNS[1]},
        {"channel": "free end"},
        {"mode": "bending"},
        {"method": Method.RINGDOWN},
        {"run": RUNS[0], "channel": "drive end", "mode": "rocking", "method": Method.AMBIENT},
        {"since_ns": 1_767_225_600 * NS + 51 * NS, "until_ns": 1_767_225_600 * NS + 111 * NS},
        {"run": "nobody"},
    ],
    ids=str,
)
def test_each_condition_narrows_to_exactly_what_it_says(
    written: tuple[Reader, list[Envelope]], wanted: dict[str, Any]
) -> None:
    reader, envelopes = written
    expected = sorted(
        (envelope for envelope in envelopes if _matches(envelope, wanted)),
        key=lambda envelope: (envelope.time_ns, RUNS.index(envelope.run)),
    )
    assert list(reader.records("measurement", Wanted(**wanted))) == expected


@pytest.mark.parametrize("earliest", [False, True])
def test_a_limit_takes_one_end_and_keeps_the_order_of_time(
    written: tuple[Reader, list[Envelope]], earliest: bool
) -> None:
    reader, _ = written
    every = list(reader.records("measurement"))
    expected = every[:5] if earliest else every[-5:]
    assert list(reader.records("measurement", Wanted(limit=5, earliest=earliest))) == expected


def test_two_answers_may_be_read_in_turns(written: tuple[Reader, list[Envelope]]) -> None:
    reader, _ = written
    pairs = zip(reader.records("measurement"), reader.records("measurement"), strict=True)
    assert all(one == other for one, other in pairs)


def test_a_run_is_found_by_the_begin_of_its_name(written: tuple[Reader, list[Envelope]]) -> None:
    reader, _ = written
    assert reader.find_run("11112") == RUNS[1]
    assert reader.find_run("last") == RUNS[1]
    with pytest.raises(NoSuchRunError, match=f"2 runs begin with '1111'; .* {RUNS[0]}, {RUNS[1]}"):
        reader.find_run("1111")
    with pytest.raises(NoSuchRunError, match=f"no run begins with '2'; .* {RUNS[0]}, {RUNS[1]}"):
        reader.find_run("2")


def test_a_reader_cannot_write(written: tuple[Reader, list[Envelope]]) -> None:
    reader, _ = written
    with pytest.raises(sa.exc.OperationalError, match="readonly"), reader._engine.begin() as connection:
        connection.exec_driver_sql("DELETE FROM measurement")


def test_a_reader_sees_what_is_committed_while_the_writer_goes_on(tmp_path: Path, measurement: Make) -> None:
    with Writer.open(tmp_path / "a.db", "line 3") as writer, Reader.open(tmp_path / "a.db") as reader:
        for sequence in range(1, 5):
            writer.write([measurement(sequence)])
            assert len(list(reader.records("measurement"))) == sequence


def test_a_run_is_summed_up_with_its_end_and_the_alerts_that_stand(
    tmp_path: Path, measurement: Make, alert: Make, run_record: Make
) -> None:
    other = str(uuid.uuid4())
    back = {"state": AlertState.NORMAL, "previous_state": AlertState.UNACKNOWLEDGED}
    envelopes = [
        run_record(1),
        measurement(2),
        alert(3, alert="a/b/high"),
        alert(4, alert="a/b/low"),
        replace(measurement(5), time_quality=TimeQuality.SYNCHRONISED),
        alert(6, alert="a/b/high", **back),
        run_record(7, phase=Phase.END, reason="end of the recordings"),
        run_record(1, run=other, origin=Origin.LIVE),
    ]
    with Writer.open(tmp_path / "a.db", "line 3", clock=iter(range(10)).__next__) as writer:
        writer.write(envelopes)
    with Reader.open(tmp_path / "a.db") as reader:
        first, second = reader.runs()
    assert (first.origin, first.time_quality) == (Origin.REPLAY, TimeQuality.SYNCHRONISED)
    assert (first.first_ns, first.last_ns) == (envelopes[0].time_ns, envelopes[6].time_ns)
    assert first.counts == {"run": 2, "measurement": 2, "alert": 3}
    assert [standing.alert for standing in first.standing] == ["a/b/low"]
    assert first.end is not None
    assert first.end.reason == "end of the recordings"
    assert (second.run, second.origin, second.end, second.standing) == (other, Origin.LIVE, None, ())
