"""The ends of the bench ``slow``, each a process of its own.

``python -m benchmarks.slow_ends publish``: prints its endpoint, then publishes records, each dated by the instant at
which it is handed to the publisher (`instant_ns`), until its standard input ends.

``python -m benchmarks.slow_ends stall ENDPOINT``: subscribes to all, reads one message, prints it, and reads no more
until its standard input ends; then reads what was sent until then, and prints how many records that were and how many
it missed, by their numbers.
"""

from __future__ import annotations

import json
import math
import select
import sys
import time

import zmq
from driftwatch.bus.publisher import Publisher
from driftwatch.records import (
    Envelope,
    Heartbeat,
    Measurement,
    Method,
    Origin,
    TimeQuality,
    Track,
    TrackStatus,
    parse_time,
)
from driftwatch.stream.instants import instant_ns

RATE = 200.0
"""Records a second: eight channels with three modes each, four windows a second, a measurement and a track each."""

MODES = 24
RUN = "5f0e8f0e-1111-4222-8333-123456789abc"


def publish() -> None:
    """Publish at `RATE`, with a heartbeat every second, as the daemon does."""
    with Publisher("tcp://127.0.0.1:*") as publisher:
        print(publisher.endpoint, flush=True)
        began, sequence, beats = time.monotonic(), 0, 0
        last: dict[int, int] = {}
        while not select.select([sys.stdin], [], [], 0)[0]:
            sequence += 1
            topic = sequence % (2 * MODES)
            publisher.publish([_record(sequence, last.get(topic))])
            last[topic] = sequence
            if sequence >= beats * RATE:
                beats += 1
                publisher.heartbeat(
                    Heartbeat("line 3", RUN, Origin.LIVE, 0, TimeQuality.FREE, 1.0, 0.1, 0.0, None, sequence)
                )
            time.sleep(max(0.0, began + sequence / RATE - time.monotonic()))


def _record(sequence: int, previous: int | None) -> Envelope:
    """Return a record with figures of all their digits."""
    number = sequence % (2 * MODES)
    channel, mode = f"channel {number // 6}", f"mode {number // 2 % 3}"
    frequency_hz, q = 900 + math.sin(sequence), 40 + math.cos(sequence)
    pole = (frequency_hz, 0.1 * math.pi, q, 0.5 * math.pi, q / 1.1, q * 1.1, 0.01 * math.pi)
    body: Measurement | Track
    if number % 2:
        values = (math.e / 10, "m/s2", 10 * math.pi, math.pi / 10)
        body = Measurement(
            channel, mode, Method.AMBIENT, None, 4.0, 12_000 * sequence, 192_000, *pole, *values, True, ()
        )
    else:
        drift = (None, None, None, None, None, math.pi / 100, math.pi / 50, math.pi / 70, math.pi / 30)
        body = Track(channel, mode, TrackStatus.TRACKING, None, *pole, *drift, None, instant_ns(), None)
    return Envelope("line 3", RUN, Origin.LIVE, sequence, previous, instant_ns(), TimeQuality.FREE, body)


def stall(endpoint: str) -> None:
    """Read one message, then none."""
    with zmq.Context() as context, context.socket(zmq.SUB) as socket:
        socket.setsockopt(zmq.LINGER, 0)
        socket.setsockopt(zmq.RCVHWM, 1)  # what waits, waits at the publisher
        socket.subscribe("")
        socket.connect(endpoint)
        print(socket.recv_multipart()[0].decode(), flush=True)
        sys.stdin.read()
        count, missed, last, now_ns = 0, 0, None, instant_ns()
        while True:
            message = json.loads(socket.recv_multipart()[1])
            if message["kind"] == "heartbeat" or message.get("repeated"):
                continue
            missed += 0 if last is None else message["sequence"] - last - 1
            last = message["sequence"]
            if parse_time(message["time"]) > now_ns:
                break
            count += 1
        print(count, missed, flush=True)


if __name__ == "__main__":
    if sys.argv[1] == "publish":
        publish()
    else:
        stall(sys.argv[2])
