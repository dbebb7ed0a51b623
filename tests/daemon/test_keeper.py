"""Whatever was seen on the bus is in the store."""

from __future__ import annotations

import json
import sqlite3
import threading
import time
from collections.abc import Callable, Sequence
from contextlib import closing
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import pytest
import zmq
from driftwatch.bus.publisher import Publisher
from driftwatch.daemon.keeper import (
    CATCH_UP_RECORDS,
    COMMIT_EVERY_S,
    FIRST_RETRY_S,
    GROUP_RECORDS,
    LAST_RETRY_S,
    Keeper,
)
from driftwatch.daemon.spool import Spool
from driftwatch.records import Baseline, CommandDone, CovariateValue, Envelope, Fault, Heartbeat, Origin, TimeQuality
from driftwatch.store.errors import CommitError, Trouble
from driftwatch.store.lock import WriterLock
from driftwatch.store.queries import Reader, Wanted
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]


class _Recorder:
    """Stands for store, bus and printer: writes down in which order they were called."""

    set_aside = ()
    pinned_bytes = 0

    def __init__(self) -> None:
        self.calls: list[tuple[str, list[int]]] = []
        self.attempts = 0
        self.broken: Trouble | None = None

    def write(self, group: Sequence[Envelope]) -> None:
        self.attempts += 1
        if self.broken is not None:
            raise CommitError(f"it is {self.broken}", self.broken)
        self.calls.append(("write", [envelope.sequence for envelope in group]))

    def publish(self, group: Sequence[Envelope]) -> None:
        self.calls.append(("publish", [envelope.sequence for envelope in group]))

    def out(self, group: Sequence[Envelope]) -> None:
        self.calls.append(("out", [envelope.sequence for envelope in group]))


def _keeper(recorder: _Recorder) -> Keeper:
    return Keeper(recorder, recorder, recorder.out)  # type: ignore[arg-type]


def test_a_group_is_committed_then_published_then_printed(measurement: Make) -> None:
    recorder = _Recorder()
    keeper = _keeper(recorder)
    keeper.take([measurement(1), measurement(2)])
    keeper.take([measurement(3)])
    keeper.flush()
    assert recorder.calls == [("write", [1, 2, 3]), ("publish", [1, 2, 3]), ("out", [1, 2, 3])]
    assert (keeper.waiting, keeper.last_sequence) == (0, 3)


def test_no_record_waits_longer_than_200_ms_and_commits_are_few(measurement: Make) -> None:
    recorder = _Recorder()
    keeper = _keeper(recorder)
    waits, commits = [], 0
    for number in range(1, 321):  # a record every 1/32 s, for 10 s
        now = number / 32
        keeper.take([measurement(number)])
        keeper.flush_due(now)
        if keeper.waiting == 0:
            group = recorder.calls[-1][1]
            waits.append(now - group[0] / 32)
            commits += 1
    assert max(waits) <= 0.2
    assert commits <= 10 / COMMIT_EVERY_S + 1


def test_a_large_group_does_not_wait(measurement: Make) -> None:
    recorder = _Recorder()
    keeper = _keeper(recorder)
    keeper.flush_due(10.0)
    keeper.take([measurement(1)] * (GROUP_RECORDS - 1))
    keeper.flush_due(10.01)
    assert recorder.calls == []
    keeper.take([measurement(1)])
    keeper.flush_due(10.02)
    assert len(recorder.calls) == 3


def test_nothing_is_published_when_the_commit_fails_and_nothing_is_lost(measurement: Make) -> None:
    recorder = _Recorder()
    keeper = _keeper(recorder)
    recorder.broken = Trouble.FULL
    keeper.take([measurement(1)])
    with pytest.raises(CommitError, match="full"):
        keeper.flush()
    assert (recorder.calls, keeper.waiting, keeper.last_sequence) == ([], 1, 0)
    recorder.broken = None
    keeper.take([measurement(2)])
    keeper.flush()
    assert recorder.calls[0] == ("write", [1, 2])


def test_every_part_may_be_left_out(measurement: Make) -> None:
    keeper = Keeper()
    keeper.take([measurement(1)])
    keeper.flush()
    assert keeper.waiting == 0


def test_whatever_a_subscriber_sees_is_already_in_the_database(tmp_path: Path, measurement: Make) -> None:
    total, missing, seen = 300, [], []
    database = tmp_path / "driftwatch.db"
    heard = threading.Event()

    def subscribe(endpoint: str) -> None:
        with zmq.Context() as context, context.socket(zmq.SUB) as socket, Reader.open(database) as reader:
            socket.setsockopt_string(zmq.SUBSCRIBE, "")
            socket.setsockopt(zmq.RCVTIMEO, 20_000)
            socket.connect(endpoint)
            while len(seen) < total:
                topic, message = socket.recv_multipart()
                heard.set()
                if topic == b"heartbeat":
                    continue
                time_ns = measurement(json.loads(message)["sequence"]).time_ns
                span = Wanted(since_ns=time_ns, until_ns=time_ns + 1)
                seen.append(time_ns)
                missing.extend([] if list(reader.records("measurement", span)) else [time_ns])

    with Writer.open(database, "line 3") as writer, Publisher("tcp://127.0.0.1:*") as publisher:
        thread = threading.Thread(target=subscribe, args=(publisher.endpoint,))
        thread.start()
        keeper = Keeper(writer, publisher)
        while not heard.wait(0.02):
            publisher.heartbeat(Heartbeat("line 3", "r", Origin.LIVE, 0, TimeQuality.FREE, 0.0, None, 0.0, None, 0))
        for sequence in range(1, total + 1):
            keeper.take([measurement(sequence)])
            keeper.flush_due(sequence / 15)  # three in a group
            time.sleep(0.001)
        keeper.flush()
        thread.join(30)
    assert (len(seen), missing) == (total, [])


# ---------------------------------------------------------------------------------------------- a store in trouble


def _patient(recorder: _Recorder, most: int = 1000) -> Keeper:
    return Keeper(recorder, recorder, is_patient=True, most=most)  # type: ignore[arg-type]


def test_what_a_live_run_cannot_store_waits_and_is_stored_in_order_and_then_published(measurement: Make) -> None:
    recorder = _Recorder()
    keeper = _patient(recorder)
    recorder.broken = Trouble.LOCKED
    for number in range(1, 41):
        keeper.take([measurement(number)])
        keeper.flush_due(number / 10)
    assert (recorder.calls, keeper.trouble, keeper.last_sequence) == ([], Trouble.LOCKED, 0)
    unsaved, seconds = keeper.unsaved(4.0)
    assert (unsaved, round(seconds, 6)) == (40, 3.9)
    (begin,) = keeper.news()
    assert (begin.key, begin.fault) == ("store", Fault.STORE)
    assert "it is locked" in begin.words
    recorder.broken = None
    keeper.flush_due(10.0)
    every = list(range(1, 41))
    assert recorder.calls == [("write", every), ("publish", every)]
    (end,) = keeper.news()
    assert (end.key, end.fault, end.lost) == ("store", None, 0)
    assert "40 records that waited are stored, none was lost" in end.words
    assert (keeper.trouble, keeper.unsaved(10.0)) == (None, (0, 0.0))


def test_attempts_are_made_with_back_off(measurement: Make) -> None:
    """After 0.1 s, then doubled up to 2 s: in a minute 5 attempts on the way up, and one each two seconds after."""
    recorder = _Recorder()
    keeper = _patient(recorder)
    recorder.broken = Trouble.LOCKED
    keeper.take([measurement(1)])
    times, last = [], 0
    for step in range(6000):
        keeper.flush_due(step / 100)
        if recorder.attempts > last:
            last = recorder.attempts
            times.append(step / 100)
    waits = [after - before for before, after in pairwise(times)]
    assert waits[:5] == pytest.approx([FIRST_RETRY_S * 2**number for number in range(5)], abs=0.02)
    assert waits[5:] == pytest.approx([LAST_RETRY_S] * len(waits[5:]), abs=0.02)


def test_after_trouble_much_that_waited_is_stored_a_part_at_a_time(measurement: Make) -> None:
    recorder = _Recorder()
    keeper = _patient(recorder, most=10_000)
    recorder.broken = Trouble.FULL
    keeper.take([measurement(1)])
    keeper.flush_due(0.0)
    keeper.take([measurement(number) for number in range(2, 2 * CATCH_UP_RECORDS + 2)])
    recorder.broken = None
    for now in (10.0, 10.05, 10.1):
        assert keeper.trouble is Trouble.FULL
        keeper.flush_due(now)
    assert [len(group) for what, group in recorder.calls if what == "write"] == [CATCH_UP_RECORDS] * 2 + [1]
    assert keeper.trouble is None
    assert [news.fault for news in keeper.news()] == [Fault.DISK, None]


def test_rows_that_can_never_be_stored_end_a_live_run_too(measurement: Make) -> None:
    recorder = _Recorder()
    keeper = _patient(recorder)
    recorder.broken = Trouble.REFUSED
    keeper.take([measurement(1)])
    with pytest.raises(CommitError):
        keeper.flush_due(0.0)


def test_a_replay_ends_with_the_error(measurement: Make) -> None:
    recorder = _Recorder()
    keeper = _keeper(recorder)
    recorder.broken = Trouble.LOCKED
    keeper.take([measurement(1)])
    with pytest.raises(CommitError):
        keeper.flush_due(0.0)


def test_of_too_many_that_wait_readings_go_first_then_others_and_what_was_decided_last(
    measurement: Make, alert: Make
) -> None:
    spool = Spool(5)
    mixed = [measurement(1), alert(2), measurement(3), alert(4), measurement(5), alert(6), measurement(7)]
    spool.extend(mixed, bounded=True)
    assert [one.sequence for one in spool.first(10)] == [2, 4, 5, 6, 7]
    assert spool.lost == {"measurement": 2}
    spool.extend([alert(number) for number in range(8, 14)], bounded=True)
    assert [one.sequence for one in spool.first(10)] == [9, 10, 11, 12, 13]
    assert spool.lost == {"measurement": 4, "alert": 4}
    spool.take_away(2)
    assert [one.sequence for one in spool.first(1)] == [11]


def test_what_was_lost_is_counted_and_told(tmp_path: Path, measurement: Make, alert: Make) -> None:
    """A real store that another connection holds; the alert outlives the readings."""
    path = tmp_path / "a.db"
    with Writer.open_live(path, WriterLock(path, "s")) as writer:
        keeper = Keeper(writer, is_patient=True, most=10)
        with closing(sqlite3.connect(path, isolation_level=None)) as other:
            other.execute("BEGIN IMMEDIATE")
            keeper.take([alert(1)])
            keeper.flush_due(0.0)
            assert keeper.trouble is Trouble.LOCKED
            keeper.take([measurement(number) for number in range(2, 26)])
            other.execute("ROLLBACK")
        keeper.flush_due(1.0)
        _, end = keeper.news()
    assert (end.lost, "lost for want of room are 15 measurement" in end.words) == (15, True)
    with Reader.open(path) as reader:
        assert [one.sequence for one in reader.records("measurement")] == list(range(17, 26))
        assert [one.sequence for one in reader.records("alert")] == [1]


def test_a_command_and_what_it_does_are_stored_and_published_together(measurement: Make, alert: Make) -> None:
    recorder = _Recorder()
    keeper = _patient(recorder, most=10_000)
    recorder.broken = Trouble.FULL
    keeper.take([measurement(number) for number in range(1, CATCH_UP_RECORDS)])
    keeper.flush_due(0.0)
    time_ns = measurement(CATCH_UP_RECORDS).time_ns
    done = CommandDone("r1", "ann", "acknowledge", "drive end/rocking/low", None, None, None, "done")
    keeper.take([replace(measurement(CATCH_UP_RECORDS), body=done), alert(CATCH_UP_RECORDS + 1, time_ns=time_ns)])
    keeper.take([measurement(CATCH_UP_RECORDS + 2, time_ns=time_ns)])
    recorder.broken = None
    keeper.flush_due(10.0)
    keeper.flush_due(10.05)
    groups = [group for what, group in recorder.calls if what == "write"]
    assert groups == [list(range(1, CATCH_UP_RECORDS + 2)), [CATCH_UP_RECORDS + 2]]
    assert f"{CATCH_UP_RECORDS + 2} records that waited are stored" in keeper.news()[-1].words


def test_a_value_that_a_person_gave_outlives_what_is_computed(measurement: Make) -> None:
    spool = Spool(2)
    given = replace(measurement(1), body=CovariateValue("speed", 1480.0, "1/min"))
    baseline = Baseline("drive end", "rocking", None, 1, 900.0, 0.1, 40.0, 1.0, 2000, 0, 1)
    spool.extend([given, *(replace(measurement(number), body=baseline) for number in (2, 3))], bounded=True)
    assert [one.sequence for one in spool.first(10)] == [1, 3]
