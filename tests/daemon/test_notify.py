"""The service manager hears what the protocol says, on a real socket, and the watchdog is fed by samples alone."""

from __future__ import annotations

import os
import re
import socket
import subprocess
import sys
import time
import uuid
from collections.abc import Iterator
from pathlib import Path

import pytest
from driftwatch.daemon.notify import WAITING_FACTOR, ServiceManager

INTERVAL_S = 20.0


class Listener:
    """The other end: a datagram socket as a service manager has it."""

    def __init__(self, address: str) -> None:
        self.name = address
        self._socket = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
        self._socket.bind("\0" + address[1:] if address.startswith("@") else address)
        self._socket.setblocking(False)

    def heard(self) -> list[str]:
        """Return the datagrams that came since the last call."""
        found = []
        while True:
            try:
                found.append(self._socket.recv(65_536).decode())
            except BlockingIOError:
                return found

    def close(self) -> None:
        self._socket.close()


@pytest.fixture(params=["path", "abstract"])
def listener(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Listener]:
    listener = Listener(str(tmp_path / "notify") if request.param == "path" else f"@driftwatch-{uuid.uuid4()}")
    yield listener
    listener.close()


@pytest.fixture
def manager(listener: Listener) -> Iterator[ServiceManager]:
    environment = {"NOTIFY_SOCKET": listener.name, "WATCHDOG_USEC": str(int(INTERVAL_S * 1e6))}
    with ServiceManager(environment | {"WATCHDOG_PID": str(os.getpid())}) as manager:
        yield manager


def test_each_word_is_one_datagram_of_the_protocol(manager: ServiceManager, listener: Listener) -> None:
    assert manager.ready("measuring 2 modes")
    assert manager.status("device gone")
    assert manager.stopping()
    assert manager.stopping("storing what came")
    assert listener.heard() == [
        "READY=1\nSTATUS=measuring 2 modes",
        "STATUS=device gone",
        "STOPPING=1",
        "STOPPING=1\nSTATUS=storing what came",
    ]


def test_a_reload_says_when_it_began(manager: ServiceManager, listener: Listener) -> None:
    before = time.clock_gettime_ns(time.CLOCK_MONOTONIC) // 1000
    assert manager.reloading()
    after = time.clock_gettime_ns(time.CLOCK_MONOTONIC) // 1000
    (text,) = listener.heard()
    said = re.fullmatch(r"RELOADING=1\nMONOTONIC_USEC=(\d+)", text)
    assert said
    assert before <= int(said[1]) <= after


@pytest.mark.parametrize("text", ["a\nWATCHDOG=1", "a\r\nREADY=1\x00", "ä" * 3000, "\ud800 alone", "🎛" * 2000])
def test_no_text_of_a_status_is_more_than_one_line_that_fits(
    manager: ServiceManager, listener: Listener, text: str
) -> None:
    """Names of devices come from outside; a line break in one would be a message of its own."""
    assert manager.status(text)
    (heard,) = listener.heard()  # decoded as UTF-8
    assert heard.startswith("STATUS=")
    assert heard.isprintable()
    assert len(heard.encode()) < 4096


def test_without_the_variable_nothing_happens() -> None:
    with ServiceManager({"WATCHDOG_USEC": "1000000"}) as manager:
        assert manager.warnings == ()
        assert manager.interval_s is None
        done = [manager.ready("a"), manager.status("b"), manager.reloading(), manager.stopping()]
        assert [*done, manager.alive(1.0, 5), manager.waiting(2.0, 5)] == [False] * 6


@pytest.mark.parametrize("name", ["relative/path", "@", "/", "vsock:2:1234"])
def test_a_socket_that_cannot_be_used_is_told_and_ends_nothing(name: str) -> None:
    with ServiceManager({"NOTIFY_SOCKET": name}) as manager:
        assert not manager.ready("a")
        (line,) = manager.warnings
        assert name in line
        assert "expected a path" in line


def test_a_service_manager_that_is_gone_ends_nothing(tmp_path: Path) -> None:
    listener = Listener(str(tmp_path / "notify"))
    with ServiceManager({"NOTIFY_SOCKET": listener.name, "WATCHDOG_USEC": "1000000"}) as manager:
        assert manager.ready("a")
        listener.close()
        assert not manager.status("b")  # nobody at the socket
        (tmp_path / "notify").unlink()
        assert not manager.alive(0.0, 1)  # no socket
        again = Listener(str(tmp_path / "notify"))
        assert manager.alive(0.0, 1), "a service manager that started anew is found again"
        assert again.heard() == ["WATCHDOG=1"]
        again.close()


def test_a_full_queue_is_not_waited_for_and_what_it_missed_is_said_again(tmp_path: Path) -> None:
    listener = Listener(str(tmp_path / "notify"))
    with ServiceManager({"NOTIFY_SOCKET": listener.name, "WATCHDOG_USEC": "4000000"}) as manager:
        while manager.status("x" * 400):
            pass
        assert not manager.alive(0.0, 100)
        listener.heard()
        assert manager.alive(0.1, 100), "what was not sent does not count as said"
        assert listener.heard() == ["WATCHDOG=1"]
    listener.close()


# ---------------------------------------------------------------------------------------------- the watchdog


def test_the_watchdog_is_fed_while_samples_advance_a_quarter_of_the_interval_apart(
    manager: ServiceManager, listener: Listener
) -> None:
    fed = []
    for second in range(60):
        manager.alive(float(second), 48_000 * (second + 1))
        fed += [(second, text) for text in listener.heard()]
    assert fed == [(second, "WATCHDOG=1") for second in range(0, 60, int(INTERVAL_S / 4))]


def test_the_watchdog_starves_while_samples_stand_still(manager: ServiceManager, listener: Listener) -> None:
    assert not manager.alive(0.0, 0), "nothing came yet"
    assert manager.alive(1.0, 48_000)
    assert not any(manager.alive(1.0 + second, 48_000) for second in range(1, 600))
    assert listener.heard() == ["WATCHDOG=1"]
    assert manager.alive(601.0, 48_001)


def test_samples_that_came_too_early_to_say_so_are_said_later(manager: ServiceManager) -> None:
    """Standing still begins with the last sample, not with the last message."""
    assert manager.alive(0.0, 100)
    assert not manager.alive(1.0, 200)
    assert manager.alive(INTERVAL_S / 4, 200)


def test_a_device_that_is_waited_for_gets_more_time_as_long_as_it_is_tried(
    manager: ServiceManager, listener: Listener
) -> None:
    """Played against the service manager's rule: it restarts what is silent for the interval that holds."""
    assert manager.alive(0.0, 100)
    due, interval_s, restarts = INTERVAL_S, INTERVAL_S, 0
    listener.heard()
    for second in range(1, 3600):
        attempts = second // 30  # with back-off: more than an interval apart
        manager.alive(float(second), 100)
        manager.waiting(float(second), attempts + 1)
        for text in listener.heard():
            assert "WATCHDOG=1" not in text.splitlines(), "no sample came"
            interval_s = int(text.removeprefix("WATCHDOG_USEC=")) / 1e6
            due = second + interval_s
        restarts += second > due
    assert restarts == 0
    assert interval_s == WAITING_FACTOR * INTERVAL_S


def test_whoever_makes_no_more_attempts_hangs_and_gets_no_more_time(
    manager: ServiceManager, listener: Listener
) -> None:
    assert manager.waiting(0.0, 1)
    assert not any(manager.waiting(float(second), 1) for second in range(1, 600))
    assert len(listener.heard()) == 1


def test_the_first_samples_after_the_wait_put_the_interval_back_at_once(
    manager: ServiceManager, listener: Listener
) -> None:
    assert manager.alive(0.0, 100)
    assert manager.waiting(10.0, 1)
    assert manager.alive(10.1, 101)
    assert listener.heard()[-1] == f"WATCHDOG=1\nWATCHDOG_USEC={int(INTERVAL_S * 1e6)}"
    assert manager.alive(10.1 + INTERVAL_S / 4, 102)
    assert listener.heard() == ["WATCHDOG=1"]


def test_a_watchdog_meant_for_another_process_is_not_fed(listener: Listener) -> None:
    environment = {"NOTIFY_SOCKET": listener.name, "WATCHDOG_USEC": "1000000", "WATCHDOG_PID": str(os.getppid())}
    with ServiceManager(environment) as manager:
        assert not manager.alive(0.0, 1)
        assert not manager.waiting(0.0, 1)
    assert listener.heard() == []


@pytest.mark.parametrize("text", ["0", "-1", "1.5", "soon", "٣"])
def test_an_interval_that_is_none_is_told_and_not_fed(listener: Listener, text: str) -> None:
    with ServiceManager({"NOTIFY_SOCKET": listener.name, "WATCHDOG_USEC": text}) as manager:
        (line,) = manager.warnings
        assert line.startswith("WATCHDOG_USEC: got ")
        assert not manager.alive(0.0, 1)


def test_the_process_s_own_environment_is_read_and_the_socket_is_not_handed_on(listener: Listener) -> None:
    """A child that outlives the daemon must not hold its socket; what was set for the daemon is found without help."""
    program = (
        "import os, subprocess, sys\n"
        "from driftwatch.daemon.notify import ServiceManager\n"
        "manager = ServiceManager()\n"
        "assert manager.ready('from a process of its own')\n"
        "print(subprocess.run(['ls', '-l', '/proc/self/fd'], capture_output=True, text=True, close_fds=False).stdout)\n"
    )
    environment = {**os.environ, "NOTIFY_SOCKET": listener.name}
    done = subprocess.run(
        [sys.executable, "-c", program], env=environment, capture_output=True, text=True, check=True, timeout=60
    )
    assert listener.heard() == ["READY=1\nSTATUS=from a process of its own"]
    assert "socket:" not in done.stdout
