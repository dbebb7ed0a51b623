"""The control port with real sockets: who gets in, what is answered, and that nothing which comes brings it down."""

from __future__ import annotations

import json
import socket
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
import zmq
from driftwatch.bus.clerk import Behind, Order, Progress
from driftwatch.bus.client import Asker
from driftwatch.bus.control import LARGEST_FRAME, ControlPort
from driftwatch.bus.errors import AskError, BusError, KeyRefusedError, NoDaemonError, NoKeyError
from driftwatch.bus.guard import Guard
from driftwatch.bus.keys import ClientKey, KeyFolder, Role
from driftwatch.bus.request import Request
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st


class Place:
    """A control port, with a desk behind it that carries out and stores at once."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.keys = KeyFolder(folder)
        self.keys.ensure("ann")
        self.lines: list[str] = []
        self.orders: list[Order] = []
        self.context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self.guard = Guard(self.context, self.keys, lambda text, _: self.lines.append(text))
        self.port = ControlPort("tcp://127.0.0.1:*", self.context, self.keys.daemon().as_bytes, self.guard)
        self.port.serve(Behind(self._look, self._submit, lambda _: None, self.guard.note))

    def _look(self, _: Request) -> dict[str, Any]:
        return {"text": "\u00e9" * 3}

    def _submit(self, order: Order) -> None:
        self.orders.append(order)
        self.port.post(Progress(order.request.request, "done", stored=False))
        self.port.post(Progress(order.request.request, "done", stored=True))

    def asker(self, key: Path | None = None, timeout_s: float = 20.0) -> Asker:
        return Asker(self.port.endpoint, key or self.keys.operator_path, timeout_s)

    def granted(self, name: str, role: Role) -> Path:
        path = self.folder / f"{name}.key"
        self.keys.grant(name, role, 0, (self.port.endpoint, None), path)
        return path

    def socket(self, kind: int, key: ClientKey | None = None) -> zmq.Socket[bytes]:
        """Return a connected socket of the library, with a key of the daemon's user if no other is given."""
        key = key or self.keys.operator()
        found = self.context.socket(kind)
        found.linger = 0
        found.curve_publickey, found.curve_secretkey = key.public.encode(), key.secret.encode()
        found.curve_serverkey = key.daemon.encode()
        found.connect(self.port.endpoint)
        return found

    def close(self) -> None:
        self.port.close()
        self.guard.close()
        self.context.term()


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Place]:
    found = Place(tmp_path_factory.mktemp("place"))
    yield found
    assert not found.port.is_dead
    found.close()


def test_the_users_own_key_asks_and_commands(place: Place) -> None:
    with place.asker() as asker:
        assert asker.ask("status")["text"] == "\u00e9" * 3
        reply = asker.ask("note", reason="belt tensioned", by="Bea", request="mine")
        assert reply == {"request": "mine", "ok": True, "outcome": "done", "stored": True}
        orders = len(place.orders)
        assert asker.ask("note", reason="belt tensioned", by="Bea", request="mine") == reply
        assert len(place.orders) == orders
        assert place.orders[-1].by == "Bea (ann)"


def test_a_granted_key_finds_the_daemon_by_its_own_file(place: Place) -> None:
    with Asker(None, place.granted("elsewhere", Role.OPERATE), 20.0) as asker:
        assert asker.endpoint == place.port.endpoint
        assert asker.ask("note", reason="x")["ok"]
        assert place.orders[-1].by == "elsewhere"


def test_a_key_to_look_looks_and_its_commands_are_refused_and_logged(place: Place) -> None:
    orders = len(place.orders)
    with place.asker(place.granted("screen", Role.LOOK)) as asker:
        assert asker.ask("status")["ok"]
        reply = asker.ask("stop")
        assert (reply["ok"], reply["fault"]) == (False, "right")
    assert len(place.orders) == orders
    assert "Refused: stop by screen: the key may only look" in place.lines


def test_a_key_that_is_revoked_while_it_is_in_is_refused_there_and_at_the_door(place: Place) -> None:
    path = place.granted("leaver", Role.OPERATE)
    orders = len(place.orders)
    with place.asker(path) as asker:
        assert asker.ask("status")["ok"]
        place.keys.revoke("leaver")
        with pytest.raises(KeyRefusedError, match=r"does not let in the key 'leaver' of .*leaver\.key; it was revoked"):
            asker.ask("stop")
    with place.asker(path) as asker, pytest.raises(KeyRefusedError):
        asker.ask("stop")
    assert len(place.orders) == orders
    assert "Refused: a request with a revoked key" in place.lines
    assert any("not granted wanted to give commands" in line for line in place.lines)


def test_a_key_of_another_daemon_is_refused(place: Place, tmp_path: Path) -> None:
    other = KeyFolder(tmp_path)
    other.ensure("ann")
    with place.asker(other.operator_path, 0.5) as asker, pytest.raises(KeyRefusedError, match="no daemon with the key"):
        asker.ask("status")


def test_an_unknown_key_is_refused_though_it_knows_the_daemon(place: Place, tmp_path: Path) -> None:
    other = KeyFolder(tmp_path)
    other.ensure("ann")
    mine = other.operator()
    ClientKey("ann", Role.OPERATE, mine.public, mine.secret, place.keys.daemon().public, None, None).write(
        tmp_path / "forged.key"
    )
    with place.asker(tmp_path / "forged.key") as asker, pytest.raises(KeyRefusedError):
        asker.ask("stop")


def test_who_comes_without_a_key_gets_no_answer(place: Place) -> None:
    plain = place.context.socket(zmq.DEALER)
    plain.linger = 0
    plain.connect(place.port.endpoint)
    orders = len(place.orders)
    plain.send(b'{"request": "r", "action": "stop"}')
    assert not plain.poll(300)
    plain.close()
    assert len(place.orders) == orders


def test_where_nobody_is_the_asker_says_so(place: Place) -> None:
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        endpoint = f"tcp://127.0.0.1:{free.getsockname()[1]}"
    with Asker(endpoint, place.keys.operator_path, 0.2) as asker, pytest.raises(NoDaemonError, match="nobody answers"):
        asker.ask("status")


def test_where_something_else_listens_the_asker_says_so(place: Place) -> None:
    with socket.create_server(("127.0.0.1", 0)) as other:
        endpoint = f"tcp://127.0.0.1:{other.getsockname()[1]}"
        with Asker(endpoint, place.keys.operator_path, 0.5) as asker, pytest.raises(AskError, match="no daemon with"):
            asker.ask("status")


def test_without_a_key_or_an_endpoint_nothing_is_asked(place: Place, tmp_path: Path) -> None:
    with pytest.raises(NoKeyError, match=r"none\.key: there is no such file; expected a key; have one made"):
        Asker(None, tmp_path / "none.key")
    fresh = KeyFolder(tmp_path)
    fresh.ensure("ann")
    with pytest.raises(AskError, match="does not tell where the daemon takes commands"):
        Asker(None, fresh.operator_path)
    with pytest.raises(AskError, match="expected tcp://HOST:PORT"):
        Asker("nowhere", fresh.operator_path)


def test_a_taken_port_is_told_and_another_start_can_use_it_afterwards(place: Place) -> None:
    with pytest.raises(BusError, match=r"is taken by another process.*\[bus\] control"):
        ControlPort(place.port.endpoint, place.context, place.keys.daemon().as_bytes, place.guard)


def test_a_request_socket_is_served_as_well(place: Place) -> None:
    """The library's plainest client, whose messages begin with an empty frame."""
    plain = place.socket(zmq.REQ)
    plain.send(b'{"request": "r", "action": "status"}')
    assert plain.poll(20_000)
    assert json.loads(plain.recv())["ok"]
    plain.close()


# ---------------------------------------------------------------------------------------------- hostile


def answers(place: Place) -> None:
    """Hold the port to answer its own user."""
    with place.asker() as asker:
        for _ in range(100):  # the key may have used up what it may ask
            reply = asker.ask("status")
            if reply["ok"]:
                return
            assert reply["fault"] == "rate"
            time.sleep(0.1)
    raise AssertionError("the port answers no more")


_FRAMES = st.lists(st.binary(max_size=40), min_size=1, max_size=5)


@given(st.lists(_FRAMES, min_size=1, max_size=10))
@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_malformed_messages_of_a_known_key_are_each_answered_as_such(place: Place, messages: list[list[bytes]]) -> None:
    """Some 200 messages of any frames: every one is answered, none is a command, and the port lives."""
    orders = len(place.orders)
    hostile = place.socket(zmq.DEALER)
    for frames in messages:
        hostile.send_multipart(frames)
    for _ in messages:
        assert hostile.poll(20_000)
        reply = json.loads(hostile.recv_multipart()[-1])
        assert (reply["ok"], reply["fault"]) in {(False, "malformed"), (False, "rate")}
    hostile.close()
    assert len(place.orders) == orders


def test_after_all_that_it_answers(place: Place) -> None:
    answers(place)


def test_a_message_that_is_too_large_ends_its_connection_and_no_other(place: Place) -> None:
    hostile = place.socket(zmq.DEALER)
    hostile.send(b"x" * (LARGEST_FRAME + 1))
    assert not hostile.poll(300)
    answers(place)
    hostile.close()


def test_raw_connections_that_say_anything_or_nothing_disturb_nobody(place: Place) -> None:
    host, _, port = place.port.endpoint.removeprefix("tcp://").rpartition(":")
    silent = [socket.create_connection((host, int(port))) for _ in range(20)]
    for garbage in (b"GET / HTTP/1.1\r\n\r\n", b"\xff" * 64, b"\xff\x00\x00\x00\x00\x00\x00\x00\x01\x7f\x03", b"\0"):
        with socket.create_connection((host, int(port))) as one:
            one.sendall(garbage)
    answers(place)
    for one in silent:
        one.close()
    answers(place)
