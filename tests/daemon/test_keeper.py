"""Whatever was seen on the bus is in the store."""

from __future__ import annotations

import json
import threading
import time
from collections.abc import Callable, Sequence
from pathlib import Path

import pytest
import zmq
from driftwatch.bus.publisher import Publisher
from driftwatch.daemon.keeper import COMMIT_EVERY_S, GROUP_RECORDS, Keeper
from driftwatch.records import Envelope, Heartbeat, Origin, TimeQuality
from driftwatch.store.errors import CommitError
from driftwatch.store.queries import Reader, Wanted
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]


class _Recorder:
    """Stands for store, bus and printer: writes down in which order they were called."""

    def __init__(self) -> None:
        self.calls: list[tuple[str, list[int]]] = []
        self.broken = False

    def write(self, group: Sequence[Envelope]) -> None:
        if self.broken:
            raise CommitError("the disk is full")
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
    recorder.broken = True
    keeper.take([measurement(1)])
    with pytest.raises(CommitError, match="full"):
        keeper.flush()
    assert (recorder.calls, keeper.waiting, keeper.last_sequence) == ([], 1, 0)
    recorder.broken = False
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
