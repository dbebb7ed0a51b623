"""A fault of the daemon is one incident from its begin to its end, however often it is told."""

from __future__ import annotations

import time
import uuid
from dataclasses import replace

from driftwatch.daemon.incidents import Incidents, clock_step
from driftwatch.records import NS, Fault, Phase

NOW_NS = 1_767_225_600 * NS


def test_a_fault_told_many_times_begins_once_and_ends_once() -> None:
    incidents = Incidents()
    begin = incidents.begin("disk", Fault.DISK, NOW_NS, "full")
    assert begin is not None
    assert (begin.phase, begin.fault, begin.channel, begin.since_ns) == (Phase.BEGIN, Fault.DISK, None, NOW_NS)
    assert (begin.seconds, begin.lost_samples, begin.detail) == (0.0, 0, "full")
    assert uuid.UUID(begin.incident)
    assert [incidents.begin("disk", Fault.DISK, NOW_NS + second, "full") for second in range(5)] == [None] * 5
    end = incidents.end("disk")
    assert end is not None
    assert replace(end, phase=Phase.BEGIN, seconds=0.0) == begin
    assert incidents.end("disk") is None


def test_new_words_are_its_going_on_and_not_another_begin() -> None:
    incidents = Incidents()
    begin = incidents.begin("worker 0", Fault.PROCESS, NOW_NS, "died")
    more = incidents.begin("worker 0", Fault.PROCESS, NOW_NS + NS, "died, again and again")
    same = incidents.begin("worker 0", Fault.PROCESS, NOW_NS + 2 * NS, "died, again and again")
    end = incidents.end("worker 0")
    assert begin is not None
    assert more is not None
    assert end is not None
    assert same is None
    assert (more.phase, more.incident, more.since_ns) == (Phase.CONTINUE, begin.incident, NOW_NS)
    assert (end.phase, end.incident, end.since_ns) == (Phase.END, begin.incident, NOW_NS)
    assert begin.detail != more.detail == end.detail


def test_its_length_is_counted_on_the_computers_clock_also_while_the_stream_stands_still() -> None:
    incidents = Incidents()
    before = time.monotonic()
    incidents.begin("disk", Fault.DISK, NOW_NS, "full")
    began = time.monotonic()
    time.sleep(0.05)
    more = incidents.begin("disk", Fault.DISK, NOW_NS, "still full")
    asked = time.monotonic()
    end = incidents.end("disk")
    assert more is not None
    assert end is not None
    assert 0.05 <= more.seconds <= asked - before
    assert asked - began <= end.seconds <= time.monotonic() - before


def test_faults_of_two_parts_are_two_and_the_next_one_of_a_part_is_another() -> None:
    incidents = Incidents()
    bodies = [
        incidents.begin("worker 0", Fault.PROCESS, NOW_NS, "died"),
        incidents.begin("worker 1", Fault.PROCESS, NOW_NS, "died"),
    ]
    assert incidents.end("worker 0") is not None
    bodies.append(incidents.begin("worker 0", Fault.PROCESS, NOW_NS, "died"))
    assert len({body.incident for body in bodies if body is not None}) == 3
    ends = incidents.end_all()
    assert [(body.phase, body.incident) for body in ends] == [
        (Phase.END, bodies[1].incident if bodies[1] else ""),
        (Phase.END, bodies[2].incident if bodies[2] else ""),
    ]
    assert incidents.end_all() == []


def test_a_step_of_the_clock_begins_and_ends_at_once_and_says_by_how_much() -> None:
    begin, end = clock_step(NOW_NS, -3600.0, 0.01)
    assert (begin.phase, end.phase) == (Phase.BEGIN, Phase.END)
    assert replace(end, phase=Phase.BEGIN) == begin
    assert (begin.fault, begin.value, begin.limit, begin.unit) == (Fault.CLOCK_STEP, -3600.0, 0.01, "s")
    assert (begin.seconds, begin.lost_samples, begin.since_ns) == (0.0, 0, NOW_NS)
    assert clock_step(NOW_NS, -3600.0, 0.01)[0].incident != begin.incident
