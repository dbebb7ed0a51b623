"""Who may come in is told from the key files as they are now."""

from __future__ import annotations

import resource
from collections.abc import Iterator
from pathlib import Path

import pytest
import zmq
from driftwatch.bus.guard import Guard, Register
from driftwatch.bus.keys import KeyFolder, Role, new_pair
from driftwatch.bus.publisher import Publisher
from driftwatch.records import Heartbeat, Origin, TimeQuality

WHERE = (None, None)
BEAT = Heartbeat("bench", "run", Origin.LIVE, 0, TimeQuality.FREE, 1.0, None, 0.0, None, 1)
PATIENCE_MS = 20_000
"""For what takes a few milliseconds on a computer that has nothing else to do."""


@pytest.fixture
def keys(tmp_path: Path) -> KeyFolder:
    folder = KeyFolder(tmp_path)
    folder.ensure("ann")
    return folder


@pytest.fixture
def lines() -> list[str]:
    return []


@pytest.fixture
def register(keys: KeyFolder, lines: list[str]) -> Register:
    return Register(keys, lambda text, _: lines.append(text))


def test_the_users_own_key_is_known_from_the_beginning(keys: KeyFolder, register: Register) -> None:
    holder = register.holder(keys.operator().public)
    assert holder is not None
    assert (holder.name, holder.role) == ("ann", Role.OPERATE)
    assert register.holder(new_pair().public) is None
    assert register.holder("") is None


def test_a_grant_and_a_revocation_count_at_once(keys: KeyFolder, register: Register, tmp_path: Path) -> None:
    for round_ in range(20):  # files that follow each other within a clock's tick are told apart
        key = keys.grant("x", Role.LOOK, 0, WHERE, tmp_path / "x.key")
        holder = register.holder(key.public)
        assert holder is not None
        assert holder.role is Role.LOOK
        assert register.revocations == round_
        keys.revoke("x")
        assert register.holder(key.public) is None
        assert register.revocations == round_ + 1
        (tmp_path / "x.key").unlink()


def test_a_list_that_others_may_read_or_change_lets_nobody_of_it_in_until_it_is_put_right(
    keys: KeyFolder, register: Register, lines: list[str], tmp_path: Path
) -> None:
    key = keys.grant("x", Role.LOOK, 0, WHERE, tmp_path / "x.key")
    assert register.holder(key.public) is not None
    keys.granted_path.chmod(0o666)
    assert register.holder(key.public) is None
    assert register.holder(keys.operator().public) is not None
    assert any("open to others" in line for line in lines)
    keys.granted_path.chmod(0o600)
    assert register.holder(key.public) is not None


def test_a_damaged_list_lets_nobody_of_it_in(
    keys: KeyFolder, register: Register, lines: list[str], tmp_path: Path
) -> None:
    key = keys.grant("x", Role.LOOK, 0, WHERE, tmp_path / "x.key")
    keys.granted_path.write_text("{")
    assert register.holder(key.public) is None
    assert any("holds no keys" in line for line in lines)


def test_a_list_that_could_not_be_read_for_a_moment_is_read_again_though_it_is_the_same(
    keys: KeyFolder, register: Register, lines: list[str], tmp_path: Path
) -> None:
    """As where the process had no file descriptor left; the fault is told once, not at every look."""
    key = keys.grant("x", Role.LOOK, 0, WHERE, tmp_path / "x.key")
    soft, hard = resource.getrlimit(resource.RLIMIT_NOFILE)
    resource.setrlimit(resource.RLIMIT_NOFILE, (3, hard))
    try:
        during = [register.holder(key.public) for _ in range(3)]
    finally:
        resource.setrlimit(resource.RLIMIT_NOFILE, (soft, hard))
    assert during == [None] * 3
    assert len([line for line in lines if line.startswith("No granted key is let in")]) == 1
    assert register.holder(key.public) is not None
    assert register.holder(keys.operator().public) is not None


# ---------------------------------------------------------------------------------------------- a publisher with keys


class Listening:
    """A guarded publisher, and listeners to it."""

    def __init__(self, keys: KeyFolder, lines: list[str]) -> None:
        self._keys = keys
        self.context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self.guard = Guard(self.context, keys, lambda text, _: lines.append(text))
        self.publisher = Publisher("tcp://127.0.0.1:*", self.context, keys.daemon().as_bytes)
        self.sockets: list[zmq.Socket[bytes]] = []

    def listener(self, public: str | None, secret: str | None) -> zmq.Socket[bytes]:
        socket = self.context.socket(zmq.SUB)
        socket.linger = 0
        if public is not None and secret is not None:
            socket.curve_publickey, socket.curve_secretkey = public.encode(), secret.encode()
            socket.curve_serverkey = self._keys.daemon().public.encode()
        socket.subscribe(b"")
        socket.connect(self.publisher.endpoint)
        self.sockets.append(socket)
        return socket

    def heard(self, socket: zmq.Socket[bytes], times: int = PATIENCE_MS // 10) -> bool:
        """Say whether a listener hears a heartbeat, of which one is sent every 10 ms."""
        for _ in range(times):
            self.publisher.heartbeat(BEAT)
            if socket.poll(10):
                socket.recv_multipart()
                return True
        return False

    def close(self) -> None:
        for socket in self.sockets:
            socket.close()
        self.publisher.close()
        self.guard.close()
        self.context.term()


@pytest.fixture
def listening(keys: KeyFolder, lines: list[str]) -> Iterator[Listening]:
    found = Listening(keys, lines)
    yield found
    found.close()


def test_only_granted_keys_hear_and_a_revoked_one_hears_no_more_though_it_was_in(
    keys: KeyFolder, listening: Listening, lines: list[str], tmp_path: Path
) -> None:
    first, second = (keys.grant(name, Role.LOOK, 0, WHERE, tmp_path / name) for name in ("first", "second"))
    one = listening.listener(first.public, first.secret)
    two = listening.listener(second.public, second.secret)
    assert listening.heard(one)
    assert listening.heard(two)

    stranger = new_pair()
    unknown = listening.listener(stranger.public, stranger.secret)
    open_ = listening.listener(None, None)
    # Both are refused before any message: the others hear one after another meanwhile.
    assert not listening.heard(unknown, 30)
    assert not listening.heard(open_, 30)
    assert any("a key that is not granted wanted to listen" in line for line in lines)

    keys.revoke("first")
    before = listening.publisher.endpoint
    listening.publisher.rebind()
    assert listening.publisher.endpoint == before
    while one.poll(0):
        one.recv_multipart()  # what was under way
    assert listening.heard(two)  # it came in again by itself
    assert not listening.heard(one, 50)
    assert not any(secret in line for line in lines for secret in (first.secret, second.secret))
