"""A program on another computer: it listens, asks, and writes down every byte on the cable.

Started with two files of keys, the first to operate; prints what it found as one JSON object.
"""

from __future__ import annotations

import json
import socket
import sys
import threading
import time
from pathlib import Path

import zmq
from driftwatch.bus.client import Asker
from driftwatch.bus.errors import KeyRefusedError
from driftwatch.bus.keys import ClientKey
from obeyed import settled

PATIENCE_S = 60.0
EVERY_PROTOCOL = 3
"""ETH_P_ALL."""

SECRETS = (b"drive end", b"drive_end", b"frequency_hz", b"heartbeat", b"measurement", b"belt tensioned", b"bench")
SEEN = b"this stands in plain text on the cable"


class Cable:
    """Everything that went over the cable."""

    def __init__(self) -> None:
        self._socket = socket.socket(socket.AF_PACKET, socket.SOCK_RAW, socket.htons(EVERY_PROTOCOL))
        self.seen = bytearray()
        threading.Thread(target=self._watch, daemon=True).start()

    def _watch(self) -> None:
        while True:
            self.seen += self._socket.recv(65_536)


def listener(context: zmq.Context[zmq.Socket[bytes]], key: ClientKey, *, known: bool = True) -> zmq.Socket[bytes]:
    heard = context.socket(zmq.SUB)
    heard.linger = 0
    heard.curve_publickey, heard.curve_secretkey = key.public.encode(), key.secret.encode()
    if not known:
        heard.curve_publickey, heard.curve_secretkey = zmq.curve_keypair()
    heard.curve_serverkey = key.daemon.encode()
    heard.subscribe(b"")
    heard.connect(str(key.publish))
    return heard


def hear(socket_: zmq.Socket[bytes], kinds: set[str]) -> None:
    """Hear until a message of each kind has come."""
    end = time.monotonic() + PATIENCE_S
    while kinds and time.monotonic() < end:
        if socket_.poll(100):
            kinds.discard(json.loads(socket_.recv_multipart()[1])["kind"])
    assert not kinds, f"not heard: {kinds}"


def goes_silent(gone: zmq.Socket[bytes], stays: zmq.Socket[bytes]) -> bool:
    """Say whether one hears nothing any more while the other hears ten more heartbeats."""
    end = time.monotonic() + PATIENCE_S
    beats = 0
    while time.monotonic() < end and beats < 3:
        while gone.poll(0):
            gone.recv_multipart()
            beats = 0
        if stays.poll(100):
            beats += json.loads(stays.recv_multipart()[1])["kind"] == "heartbeat"
    return beats == 3


def tell(line: str) -> None:
    sys.stdout.write(f"{line}\n")
    sys.stdout.flush()


def main(operate: Path, look: Path) -> None:
    cable = Cable()
    keys = ClientKey.read(operate), ClientKey.read(look)
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    one, two = (listener(context, key) for key in keys)
    unknown = listener(context, keys[0], known=False)
    hear(one, {"heartbeat", "measurement", "track"})
    hear(two, {"heartbeat", "measurement", "track"})
    found = {"strange": unknown.poll(0)}
    with Asker(None, look) as asker:
        found["look"] = asker.ask("status")
        found["refused"] = asker.ask("note", reason="belt tensioned")
    with Asker(None, operate) as asker:
        found["noted"] = settled(asker, "note", reason="belt tensioned")
        hear(one, {"note", "command"})
        tell("ready")
        sys.stdin.readline()  # by now the first key is revoked
        try:
            asker.ask("note", reason="belt tensioned")
        except KeyRefusedError:
            found["revoked"] = True
    found["silent"] = goes_silent(one, two)
    host, _, port = str(keys[0].control).removeprefix("tcp://").rpartition(":")
    with socket.create_connection((host, int(port))) as plain:
        plain.sendall(SEEN)
        time.sleep(0.5)
    found |= {"bytes": len(cable.seen), "plain": [word.decode() for word in (*SECRETS, SEEN) if word in cable.seen]}
    tell(json.dumps(found))
    for each in (one, two, unknown):
        each.close()
    context.term()


if __name__ == "__main__":
    main(*map(Path, sys.argv[1:]))
