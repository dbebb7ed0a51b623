"""A process of the daemon says why it ended, and none outlives the one that started it."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from driftwatch.daemon.child import LAST_WORDS, Child, Role
from driftwatch.stream.ring import Ring, Shape
from ordered import LONG_S, Do, is_running, killed_at_the_end, until

ROLES: tuple[Role, ...] = ("capture", "tracker", "recorder")


@pytest.fixture
def ring() -> Iterator[Ring]:
    with Ring.create(Shape(1000, 1, 100, 16, 8)) as opened:
        yield opened


@pytest.fixture
def child(ring: Ring) -> Iterator[Child]:
    one = Child("capture", ring.descriptor)
    yield one
    one.kill()


def ended(child: Child) -> str:
    assert child.wait(LONG_S)
    return child.why_it_died()


def test_a_process_without_an_order_waits_for_one_and_ends_with_its_pipe(child: Child) -> None:
    assert child.is_running()
    assert not child.wait(0.2)
    assert child.why_it_died() == "it did not answer"
    assert child.heard() == ([], True)
    child.connection.close()
    assert child.wait(LONG_S)
    assert not is_running(child.pid)


@pytest.mark.parametrize("number", [signal.SIGKILL, signal.SIGSEGV, signal.SIGABRT])
def test_one_that_a_signal_ended_is_said_to_be_by_the_signals_name(child: Child, number: signal.Signals) -> None:
    os.kill(child.pid, number)
    assert ended(child) == f"it was ended by {number.name}"
    assert child.heard() == ([], False)


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_signals_that_are_for_the_whole_daemon_are_left_to_the_parent(child: Child, number: signal.Signals) -> None:
    child.tell(Do(time.sleep, (600.0,)))
    until(lambda: _ignores(child.pid, number), "the process ignores the signal")
    os.kill(child.pid, number)
    assert not child.wait(0.2)


def _ignores(pid: int, number: signal.Signals) -> bool:
    lines = Path(f"/proc/{pid}/status").read_text().splitlines()
    (mask,) = (int(line.split()[1], 16) for line in lines if line.startswith("SigIgn:"))
    return bool(mask >> (number - 1) & 1)


def test_one_that_an_error_ended_is_said_to_be_by_its_last_line(child: Child) -> None:
    child.tell(Do(int, ("no number",)))
    assert ended(child) == "it ended with status 1: ValueError: invalid literal for int() with base 10: 'no number'"


@pytest.mark.parametrize("role", ROLES)
def test_an_order_that_means_nothing_to_a_role_ends_it_with_an_error(ring: Ring, role: Role) -> None:
    child = Child(role, ring.descriptor)
    try:
        assert child.tell("measure everything")
        why = ended(child)
    finally:
        child.kill()
    assert why.startswith("it ended with status 1: AttributeError: 'str' object has no attribute")


def test_one_that_ended_without_a_word_is_said_to_be_by_its_status(child: Child) -> None:
    child.tell(Do(os._exit, (7,)))
    assert ended(child) == "it ended with status 7"


def test_of_many_last_words_the_last_line_is_told(child: Child) -> None:
    child.tell(Do(sys.exit, ("é" * LAST_WORDS + "\nthe last line  \n",)))
    assert ended(child) == "it ended with status 1: the last line"


def test_what_it_said_before_it_died_is_heard(child: Child) -> None:
    """The pipe's other end is number 4 or so; the process itself writes to it and dies."""
    program = (
        "import os, sys\nfrom multiprocessing.connection import Connection\n"
        "pipe = Connection(int(sys.argv[3])); pipe.send('one'); pipe.send('two'); os._exit(3)"
    )
    child.tell(Do(exec, (program,)))
    assert child.wait(LONG_S)
    said, can_say_more = child.heard()
    assert (said, can_say_more) == (["one", "two"], False)
    assert not child.tell("too late")


def test_a_killed_one_leaves_no_process_and_no_file_open(ring: Ring) -> None:
    before = len(list(Path("/proc/self/fd").iterdir()))
    child = Child("capture", ring.descriptor)
    child.kill()
    assert not is_running(child.pid)
    assert len(list(Path("/proc/self/fd").iterdir())) == before


_PARENT = """
import sys, time
from driftwatch.daemon.child import Child
from driftwatch.stream.ring import Ring, Shape
ring = Ring.create(Shape(1000, 1, 100, 16, 8))
children = [Child(role, ring.descriptor) for role in ("capture", "tracker", "recorder")]
print(*(child.pid for child in children), flush=True)
time.sleep(600)
"""


def test_when_the_parent_is_killed_its_children_end_by_themselves() -> None:
    """While they wait for an order; with one, `test_card_failures` tries it."""
    parent = subprocess.Popen([sys.executable, "-c", _PARENT], stdout=subprocess.PIPE, text=True)
    assert parent.stdout is not None
    pids = [int(word) for word in parent.stdout.readline().split()]
    with killed_at_the_end([*pids, parent.pid]):
        assert len(pids) == 3
        assert all(is_running(pid) for pid in pids)
        parent.kill()
        parent.communicate()
        until(lambda: not any(is_running(pid) for pid in pids), "the children have ended")
