"""Whoever subscribes hears in order; whoever does not read costs nobody anything."""

from __future__ import annotations

import itertools
import json
import os
import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from pathlib import Path
from typing import Any

import pytest
import zmq
from driftwatch.bus import publisher as module
from driftwatch.bus.errors import BusError
from driftwatch.bus.last_values import REPEAT_EVERY_S
from driftwatch.bus.publisher import Publisher
from driftwatch.bus.wire import encode, encode_json
from driftwatch.records import Envelope, Heartbeat, Origin, TimeQuality, topic_of
from zmq.auth.thread import ThreadAuthenticator

from benchmarks.processes import resident_mb

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


def test_a_subscriber_that_does_not_read_costs_the_others_no_message_and_the_publisher_a_bounded_memory(
    context: zmq.Context[zmq.Socket[bytes]], measurement: Make
) -> None:
    """48,000 messages, of which 10,000 wait here and 16 MB are in the hands of the system; all would be 30 MB more."""
    if not Path("/proc/self/statm").exists():
        pytest.skip("resident memory is read from /proc")
    group = [measurement(sequence) for sequence in range(1, 501)]
    with (
        Publisher(ANY_PORT, context) as publisher,
        _subscriber(context, publisher, "measurement/"),
        _subscriber(context, publisher, "measurement/") as reading,
    ):
        before_mb = resident_mb(os.getpid())
        for _ in range(96):
            publisher.publish(group)
            heard = [reading.recv_multipart()[1] for _ in group]
            assert heard == [encode_json(envelope) for envelope in group]
        assert resident_mb(os.getpid()) - before_mb < 20.0


def test_closing_ends_in_time_with_a_subscriber_that_does_not_read(
    context: zmq.Context[zmq.Socket[bytes]], measurement: Make
) -> None:
    publisher = Publisher(ANY_PORT)
    with _subscriber(context, publisher, "measurement/"):
        publisher.publish([measurement(sequence) for sequence in range(1, 20_000)])
        begin = time.monotonic()
        publisher.close()
        assert time.monotonic() - begin < 5.0  # linger is 0.5 s; the rest is for a busy computer


# ---------------------------------------------------------------------------------------------- last values


def _late(
    context: zmq.Context[zmq.Socket[bytes]], publisher: Publisher, prefix: str, keys: Keys | None = None
) -> zmq.Socket[bytes]:
    socket = context.socket(zmq.SUB)
    socket.setsockopt(zmq.LINGER, 0)
    socket.setsockopt(zmq.RCVTIMEO, 20_000)
    if keys is not None:
        socket.curve_serverkey, (socket.curve_publickey, socket.curve_secretkey) = keys
    socket.setsockopt_string(zmq.SUBSCRIBE, prefix)
    socket.connect(publisher.endpoint)
    return socket


def _serve_until_it_hears(publisher: Publisher, socket: zmq.Socket[bytes], deadline_s: float = 20.0) -> None:
    deadline = time.monotonic() + deadline_s
    while not socket.poll(20):
        publisher.serve()
        assert time.monotonic() < deadline


def _received(socket: zmq.Socket[bytes], count: int) -> list[tuple[bytes, dict[str, Any]]]:
    return [(frames[0], json.loads(frames[1])) for frames in (socket.recv_multipart() for _ in range(count))]


def test_whoever_comes_late_gets_the_last_value_of_all_it_asks_for_each_in_its_turn(
    context: zmq.Context[zmq.Socket[bytes]], measurement: Make, alert: Make
) -> None:
    sent = [measurement(1), alert(2), measurement(3, mode="sliding"), measurement(4), alert(5, alert="a/b/c")]
    with Publisher(ANY_PORT, context) as publisher:
        publisher.publish(sent)
        for prefix, expected in (("measurement/", [3, 4]), ("", [2, 3, 4, 5]), ("alert/a", [5]), ("alert/a", [5])):
            with _late(context, publisher, prefix) as socket:  # the last one asks for the same as the one before it
                _serve_until_it_hears(publisher, socket)
                found = _received(socket, len(expected))
                assert [message["sequence"] for _, message in found] == expected
                for topic, message in found:
                    envelope = sent[message["sequence"] - 1]
                    assert topic == topic_of(envelope.body).encode()
                    assert message == encode(envelope) | {"repeated": True}


def test_a_hundred_subscribers_at_once_cost_the_first_few_repeats(
    context: zmq.Context[zmq.Socket[bytes]], measurement: Make
) -> None:
    """At most one round a second: those who come together share it."""
    with Publisher(ANY_PORT, context) as publisher, ExitStack() as stack:
        publisher.publish([measurement(1)])
        first = stack.enter_context(_late(context, publisher, "measurement/"))
        _serve_until_it_hears(publisher, first)
        began = time.monotonic()
        for number in range(100):
            other = stack.enter_context(_late(context, publisher, "measurement/"[: number % 12]))
        _serve_until_it_hears(publisher, other)
        rounds = 1 + (time.monotonic() - began) / REPEAT_EVERY_S
        heard = 0
        while first.poll(300):
            first.recv_multipart()
            heard += 1
        assert 2 <= heard <= rounds + 1


def test_what_is_no_subscription_is_passed_over(context: zmq.Context[zmq.Socket[bytes]], measurement: Make) -> None:
    with Publisher(ANY_PORT, context) as publisher, context.socket(zmq.XSUB) as hostile:
        hostile.setsockopt(zmq.LINGER, 0)
        hostile.connect(publisher.endpoint)
        publisher.publish([measurement(1)])
        for junk in (b"", b"hello", b"\x02", b"\x01" + b"x" * 3000, b"\x00never", b"\xff" * 4000):
            hostile.send(junk)
        hostile.send(b"\x01measurement/")
        _serve_until_it_hears(publisher, hostile)
        assert _received(hostile, 1)[0][1]["repeated"] is True


def test_one_who_asks_for_thousands_of_prefixes_is_not_told_apart_topic_by_topic(
    context: zmq.Context[zmq.Socket[bytes]], measurement: Make
) -> None:
    """None of the prefixes begins a topic: that there is a repeat shows that they were taken for everything."""
    with (
        Publisher(ANY_PORT, context) as publisher,
        context.socket(zmq.XSUB) as hostile,
        _subscriber(context, publisher, "measurement/") as other,
    ):
        hostile.setsockopt(zmq.LINGER, 0)
        hostile.connect(publisher.endpoint)
        publisher.publish([measurement(1)])
        assert json.loads(other.recv_multipart()[1])["sequence"] == 1
        deadline, numbers = time.monotonic() + 20.0, itertools.count()
        while not other.poll(20):
            for number in itertools.islice(numbers, 1000):
                hostile.send(b"\x01no topic %d" % number)
            publisher.serve()
            assert time.monotonic() < deadline
        assert json.loads(other.recv_multipart()[1])["repeated"] is True


# ---------------------------------------------------------------------------------------------- keys, anew

Keys = tuple[bytes, tuple[bytes, bytes]]


def test_with_a_server_key_only_whoever_the_guard_lets_in_hears(
    context: zmq.Context[zmq.Socket[bytes]], measurement: Make
) -> None:
    server, friend, stranger = zmq.curve_keypair(), zmq.curve_keypair(), zmq.curve_keypair()
    guard = ThreadAuthenticator(context)
    guard.start()
    try:
        guard.configure_curve_callback("publish", credentials_provider=Only(friend[0]))
        with Publisher(ANY_PORT, context, server) as publisher:
            publisher.publish([measurement(1)])
            with (
                _late(context, publisher, "", (server[0], friend)) as known,
                _late(context, publisher, "", (server[0], stranger)) as unknown,
                _late(context, publisher, "") as keyless,
            ):
                _serve_until_it_hears(publisher, known)
                assert not unknown.poll(500)
                assert not keyless.poll(100)
    finally:
        guard.stop()


def test_without_a_guard_a_server_key_lets_nobody_in(
    context: zmq.Context[zmq.Socket[bytes]], measurement: Make
) -> None:
    server, anyone = zmq.curve_keypair(), zmq.curve_keypair()
    with Publisher(ANY_PORT, context, server) as publisher:
        publisher.publish([measurement(1)])
        with _late(context, publisher, "", (server[0], anyone)) as socket:
            for _ in range(20):
                publisher.serve()
                assert not socket.poll(50)


class Only:
    def __init__(self, public: bytes) -> None:
        self._public = public

    def callback(self, _domain: str, key: bytes) -> bool:
        return key == self._public


def test_bound_anew_everybody_comes_in_again_and_gets_last_values(
    context: zmq.Context[zmq.Socket[bytes]], measurement: Make
) -> None:
    with Publisher(ANY_PORT, context) as publisher, _late(context, publisher, "") as socket:
        publisher.publish([measurement(1)])
        _serve_until_it_hears(publisher, socket)
        socket.recv_multipart()
        endpoint = publisher.endpoint
        publisher.rebind()
        assert publisher.endpoint == endpoint
        _serve_until_it_hears(publisher, socket)
        assert _received(socket, 1)[0][1] == encode(measurement(1)) | {"repeated": True}


def test_while_its_port_is_taken_it_waits_for_nothing_and_is_heard_when_the_port_is_free(
    context: zmq.Context[zmq.Socket[bytes]], measurement: Make, monkeypatch: pytest.MonkeyPatch
) -> None:
    waits: list[float] = []
    monkeypatch.setattr(time, "sleep", waits.append)
    with Publisher(ANY_PORT, context) as publisher:
        with Publisher(ANY_PORT) as other:
            publisher.endpoint = other.endpoint  # as if that one had come in between
            publisher.rebind()
            publisher.publish([measurement(1)])
            assert "is taken by another process" in str(publisher.trouble)
        with _late(context, publisher, "") as socket:
            _serve_until_it_hears(publisher, socket)
            assert publisher.trouble is None
            assert _received(socket, 1)[0][1] == encode(measurement(1)) | {"repeated": True}
    assert waits == []


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
