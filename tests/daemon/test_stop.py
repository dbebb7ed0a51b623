"""A signal handler may ask for the end at any instant, also while it interrupts the wait for it."""

from __future__ import annotations

import os
import signal
import sys
import threading
from collections.abc import Iterator
from types import FrameType
from typing import Any

import pytest
from driftwatch.daemon import stop as module
from driftwatch.daemon.stop import Stop


def test_it_is_set_once_and_for_all() -> None:
    stop = Stop()
    assert not stop.is_set()
    assert not stop.wait(0.0)
    stop.set()
    stop.set()
    assert stop.is_set()
    assert [stop.wait(60.0) for _ in range(3)] == [True, True, True]  # at once, or the test's own limit ends it


def test_a_wait_ends_when_it_is_set_elsewhere() -> None:
    stop = Stop()
    threading.Timer(0.05, stop.set).start()
    assert stop.wait(60.0)


@pytest.fixture
def handled() -> Iterator[Stop]:
    stop = Stop()
    before = signal.signal(signal.SIGTERM, lambda *_: stop.set())
    yield stop
    signal.signal(signal.SIGTERM, before)


@pytest.mark.timeout(20)
@pytest.mark.parametrize(("call", "line"), [("wait", 0), ("wait", 1), ("wait", 2), ("set", 0), ("set", 1)])
def test_a_signal_before_any_line_of_a_wait_or_of_an_earlier_setting_takes_effect(
    handled: Stop, call: str, line: int
) -> None:
    """The handler runs inside the call that it interrupts, which may hold nothing that the handler needs."""
    lines = 0

    def trace(frame: FrameType, event: str, _: Any) -> Any:
        nonlocal lines
        if frame.f_code.co_filename != module.__file__ or frame.f_code.co_name != call:
            return None
        if event == "line":
            lines += 1
            if lines == line + 1:
                os.kill(os.getpid(), signal.SIGTERM)
        return trace

    earlier = sys.gettrace()
    sys.settrace(trace)
    try:
        handled.wait(60.0) if call == "wait" else handled.set()
    finally:
        sys.settrace(earlier)
    assert lines > line
    assert handled.is_set()
