"""Whoever subscribes hears in order; whoever does not read costs nobody anything."""

from __future__ import annotations

import json
import time
from collections.abc import Callable, Iterator

import pytest
import zmq
from driftwatch.bus import publisher as module
from driftwatch.bus.errors import BusError
from driftwatch.bus.publisher import Publisher
from driftwatch.bus.wire import encode
from driftwatch.records import Envelope, Heartbeat, Origin, TimeQuality

Make = Callable[..., Envelope]
ANY_PORT = "tcp://127.0.0.1:*"


@pytest.fixture
def context() -> Iterator[zmq.Context[zmq.Socket[bytes]]]:
    with zmq.Context() as made:
        yield made


def _subscriber(context: zmq.Context[zmq.Socket[bytes]], publisher: Publisher, prefix: str) -> zmq.Socket[bytes]:
    """Return a subscriber that certainly hears: it has heard a heartbeat."""
    socket = context.socket(zmq.SUB)
    socket.setsockopt(zmq.LINGER, 0)
    socket.setsockopt(zmq.RCVTIMEO, 10_000)
    for topic in (prefix, "heartbeat"):
        socket.setsockopt_string(zmq.SUBSCRIBE, topic)
    socket.connect(publisher.endpoint)
    deadline = time.monotonic() + 10
    while not socket.poll(20):
        publisher.heartbeat(BEAT)
        assert time.monotonic() < deadline
    socket.setsockopt_string(zmq.UNSUBSCRIBE, "heartbeat")
    time.sleep(0.2)
    while socket.poll(50):
        socket.recv_multipart()
    return socket


BEAT = Heartbeat("line 3", "run", Origin.LIVE, 12, TimeQuality.FREE, 1.5, 0.1, 0.25, None, 7)


def test_a_record_is_two_frames_topic_and_object_in_order(
    context: zmq.Context[zmq.Socket[bytes]], measurement: Make
) -> None:
    sent = [measurement(sequence) for sequence in range(1, 200)]
    with Publisher(ANY_PORT, context) as publisher, _subscriber(context, publisher, "measurement/") as socket:
        publisher.publish(sent)
        for envelope in sent:
            topic, message = socket.recv_multipart()
            assert topic == b"measurement/drive_end/rocking"
            assert json.loads(message) == encode(envelope)


def test_a_subscriber_to_a_part_hears_only_that(
    context: zmq.Context[zmq.Socket[bytes]], measurement: Make, alert: Make
) -> None:
    with Publisher(ANY_PORT, context) as publisher, _subscriber(context, publisher, "alert/") as socket:
        publisher.publish([measurement(1), alert(2), measurement(3)])
        topic, message = socket.recv_multipart()
        assert (topic, json.loads(message)["sequence"]) == (b"alert/drive_end/rocking/warning", 2)
        assert not socket.poll(200)


def test_a_subscriber_that_does_not_read_holds_nobody_up(
    context: zmq.Context[zmq.Socket[bytes]], measurement: Make, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(module, "QUEUED_MESSAGES", 100)
    group = [measurement(sequence) for sequence in range(1, 2001)]
    with Publisher(ANY_PORT, context) as publisher:
        with _subscriber(context, publisher, "measurement/") as stalled, _subscriber(context, publisher, "alert/"):
            for _ in range(20):  # about 24 MB: more than every queue on the way holds
                publisher.publish(group)
            received = 0
            while stalled.poll(500):
                stalled.recv_multipart()
                received += 1
        assert 0 < received < 40_000  # some were lost, to this one alone, and nothing waited


def test_closing_ends_in_time_with_a_subscriber_that_does_not_read(
    context: zmq.Context[zmq.Socket[bytes]], measurement: Make
) -> None:
    publisher = Publisher(ANY_PORT)
    with _subscriber(context, publisher, "measurement/"):
        publisher.publish([measurement(sequence) for sequence in range(1, 20_000)])
        begin = time.monotonic()
        publisher.close()
        assert time.monotonic() - begin < 5.0  # linger is 0.5 s; the rest is for a busy computer


def test_a_taken_port_is_an_error_that_says_what_to_do() -> None:
    with Publisher(ANY_PORT) as publisher, pytest.raises(BusError, match=r"is taken by another.*another port"):
        Publisher(publisher.endpoint)


@pytest.mark.parametrize(
    "endpoint", ["tcp://0.0.0.0:5571", "tcp://*:5571", "tcp://192.168.1.5:*", "tcp://example.com:1"]
)
def test_an_endpoint_beyond_loopback_is_refused(endpoint: str) -> None:
    with pytest.raises(BusError, match="expected an endpoint on this computer; without keys"):
        Publisher(endpoint)


@pytest.mark.parametrize("endpoint", ["", "5571", "ipc://a", "tcp://127.0.0.1", "tcp://127.0.0.1:70000"])
def test_what_is_no_endpoint_is_refused(endpoint: str) -> None:
    with pytest.raises(BusError, match=r"expected tcp://host:port.*tcp://127\.0\.0\.1:5571"):
        Publisher(endpoint)
