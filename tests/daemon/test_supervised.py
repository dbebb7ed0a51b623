"""A process that dies or hangs is started again, with what it needs to go on, and told of if that does not help."""

from __future__ import annotations

import os
import signal
import time
from collections.abc import Callable, Iterator
from typing import Any

import pytest
from driftwatch.daemon.supervised import STARTING_S, Supervised
from driftwatch.stream.ring import Ring, Shape
from ordered import LONG_S, Do, is_running, until

HANGS = Do(time.sleep, (600.0,))
DIES = Do(os._exit, (7,))

Make = Callable[..., Supervised]


@pytest.fixture
def make() -> Iterator[Make]:
    """Return a maker of a supervised process by its order, and see all of them to their end."""
    made: list[Supervised] = []
    with Ring.create(Shape(1000, 1, 100, 16, 8)) as ring:

        def of(order: Callable[[], Any | None], patience_s: float | None = 5.0) -> Supervised:
            made.append(Supervised("capture", ring.descriptor, order, patience_s))
            return made[-1]

        yield of
        for one in made:
            one.end(0.0)


def pid_of(one: Supervised) -> int:
    assert one.child is not None
    return one.child.pid


def dead(one: Supervised, now: float) -> str:
    """Hear a process until it is known to be dead; return why."""
    return str(until(lambda: one.heard(now)[1], "the process is dead"))


def test_it_is_started_when_it_is_due_and_not_before_nor_twice(make: Make) -> None:
    one = make(lambda: HANGS)
    assert one.child is None
    one.start_if_due(100.0)
    first = pid_of(one)
    one.start_if_due(100.0)
    assert pid_of(one) == first
    os.kill(first, signal.SIGKILL)
    assert dead(one, 101.0) == "it was ended by SIGKILL"
    assert one.child is None
    one.start_if_due(101.09)
    assert one.child is None  # the first wait is 0.1 s
    one.start_if_due(101.11)
    assert pid_of(one) != first


def test_each_start_asks_anew_what_is_to_be_done(make: Make) -> None:
    codes = iter([3, 4, 5])
    one, now = make(lambda: Do(os._exit, (next(codes),))), 0.0
    for code in (3, 4, 5):
        one.start_if_due(now)
        assert dead(one, now) == f"it ended with status {code}"
        now += 1.0


def test_an_order_that_is_not_known_yet_is_given_once_it_is(make: Make) -> None:
    orders: list[Do] = []
    one = make(lambda: orders[0] if orders else None)
    one.start_if_due(0.0)
    pid = pid_of(one)
    one.start_if_due(0.1)
    assert one.heard(0.1) == ([], None)
    orders.append(DIES)
    one.start_if_due(0.2)
    assert pid_of(one) == pid  # it was there before, and waited
    assert dead(one, 0.3) == "it ended with status 7"


def test_what_it_said_last_is_heard_with_its_death(make: Make) -> None:
    program = (
        "import os, sys\nfrom multiprocessing.connection import Connection\n"
        "pipe = Connection(int(sys.argv[3])); pipe.send('done'); os._exit(0)"
    )
    one, heard = make(lambda: Do(exec, (program,))), []
    one.start_if_due(0.0)

    def why() -> str | None:
        said, found = one.heard(0.0)
        heard.extend(said)
        return found

    assert until(why, "the process is dead") == "it ended with status 0"
    assert heard == ["done"]


def test_one_that_dies_at_once_is_started_again_later_each_time_and_is_a_loop_after_five(make: Make) -> None:
    one, now, waits = make(lambda: DIES), 0.0, []
    one.start_if_due(now)
    for death in range(1, 7):
        died = now
        assert dead(one, died) == "it ended with status 7"
        assert one.is_looping(died) is (death >= 5)
        while one.child is None:  # in simulated time
            now += 0.01
            one.start_if_due(now)
        waits.append(now - died)
    assert waits == pytest.approx([0.1, 0.2, 0.4, 0.8, 1.6, 2.0], abs=0.011)


# ---------------------------------------------------------------------------------------------- one that hangs


def test_one_without_progress_although_there_is_work_is_killed_and_started_again(make: Make) -> None:
    one = make(lambda: HANGS)
    one.start_if_due(0.0)
    pid = pid_of(one)
    assert one.hangs(0.0, 0, is_idle=False) is None
    assert one.hangs(1.0, 1, is_idle=False) is None  # it moves
    assert one.hangs(6.0, 1, is_idle=False) is None
    assert is_running(pid)
    assert one.hangs(6.5, 1, is_idle=False) == "it did nothing for 6 s and was killed"
    assert not is_running(pid)
    one.start_if_due(6.7)
    assert pid_of(one) != pid


def test_a_stopped_process_is_killed_too(make: Make) -> None:
    one = make(lambda: HANGS)
    one.start_if_due(0.0)
    pid = pid_of(one)
    for now, progress in ((0.0, 0), (1.0, 1)):
        one.hangs(now, progress, is_idle=False)
    os.kill(pid, signal.SIGSTOP)
    assert one.hangs(7.0, 1, is_idle=False) == "it did nothing for 6 s and was killed"
    assert not is_running(pid)


def test_one_that_has_no_work_does_not_hang(make: Make) -> None:
    one = make(lambda: HANGS)
    one.start_if_due(0.0)
    for now in range(0, 100, 3):
        assert one.hangs(float(now), 5, is_idle=True) is None
    assert one.hangs(104.9 - 0.9, 5, is_idle=False) is None  # nor at once when some comes
    assert is_running(pid_of(one))


def test_until_its_first_progress_it_has_the_time_that_a_start_takes(make: Make) -> None:
    one = make(lambda: HANGS)
    one.start_if_due(0.0)
    one.hangs(0.0, 0, is_idle=False)
    assert one.hangs(STARTING_S - 0.1, 0, is_idle=False) is None
    assert one.hangs(STARTING_S + 0.1, 0, is_idle=False) == "it did nothing for 15 s and was killed"


def test_one_without_a_patience_may_take_for_ever(make: Make) -> None:
    one = make(lambda: HANGS, patience_s=None)
    one.start_if_due(0.0)
    assert one.hangs(0.0, 0, is_idle=False) is None
    assert one.hangs(1e6, 0, is_idle=False) is None


def test_hangs_count_as_deaths_in_a_loop(make: Make) -> None:
    one, now = make(lambda: HANGS), 0.0
    for _ in range(3):
        one.start_if_due(now)
        one.hangs(now, 0, is_idle=False)
        now += STARTING_S + 1.0
        assert one.hangs(now, 0, is_idle=False) is not None
        now += 1.0
    assert one.restarts.deaths == 3


# ---------------------------------------------------------------------------------------------- the end


def test_one_that_is_dismissed_is_not_started_again(make: Make) -> None:
    one = make(lambda: DIES)
    one.start_if_due(0.0)
    one.dismiss()
    assert dead(one, 0.0) == "it ended with status 7"
    one.start_if_due(100.0)
    assert one.child is None
    one.tell("nobody hears it")
    assert one.heard(100.0) == ([], None)


def test_the_end_waits_for_a_process_that_ends_and_kills_one_that_does_not(make: Make) -> None:
    ends, stays = make(lambda: Do(os._exit, (0,))), make(lambda: HANGS)
    for one in (ends, stays):
        one.start_if_due(0.0)
    pid = pid_of(stays)
    assert ends.end(LONG_S)
    assert not stays.end(0.1)
    assert not is_running(pid)
    assert stays.end(0.1)  # there is none any more
