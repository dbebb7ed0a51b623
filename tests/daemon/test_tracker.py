"""The process that measures tells each block once, whoever told the ones before, and goes back no further than it must.

Here its work runs in a thread, on a real ring and a real pipe; `test_live` kills it as a process.
"""

from __future__ import annotations

import itertools
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from multiprocessing import Pipe
from typing import Any

import numpy as np
import pytest
from driftwatch.daemon.messages import Finished, Measure, MeasuredBlock, MeasuredBlocks
from driftwatch.daemon.tracker import work
from driftwatch.pipeline.group import ChannelGroup
from driftwatch.pipeline.reading import Reading
from driftwatch.records import Block, Fault, sample_time_ns
from driftwatch.stream.ring import OverrunError, Ring, Shape
from two_channels import RATE, SOURCE, START_NS, ambient, configuration

FRAMES = 100
CONFIG = configuration()
CHANNELS = ("a", "b")
COUNT = 200
"""Blocks in all: 20 s and, between blocks 120 and 121, a gap of 3 s."""


def first_of(number: int) -> int:
    return number * FRAMES + (3 * RATE if number > 120 else 0)


SAMPLES = np.random.default_rng(0).standard_normal((COUNT, FRAMES, 2)).astype(np.float32)


@contextmanager
def filled(slots: int = COUNT + 20, waiting: int = COUNT, unplaced: tuple[int, ...] = ()) -> Iterator[Ring]:
    """Give a ring to which the whole stream was written, and which has ended."""
    with Ring.create(Shape(RATE, 2, FRAMES, slots, waiting)) as ring:
        for number in range(COUNT):
            ring.take(SAMPLES[number], 77 + number, False)
            ring.place(number, None if number in unplaced else first_of(number), Fault.OVERFLOW)
            ring.publish(number + 1)
        ring.end()
        yield ring


def told(ring: Ring, number: int = 0, position: int = 0, channels: tuple[str, ...] = CHANNELS) -> list[Any]:
    """Return all that the work says that begins with block `number`, `position` being told before."""
    ours, theirs = Pipe()
    order = Measure(CONFIG, SOURCE, channels, 0, number, position)
    failed: list[BaseException] = []

    def run() -> None:
        with theirs:
            try:
                work(order, ring, theirs)
            except OverrunError as error:
                failed.append(error)

    thread = threading.Thread(target=run)
    thread.start()
    found = []
    with ours:
        try:
            while True:
                found.append(ours.recv())
        except EOFError:
            thread.join()
    if failed:
        raise failed[0]
    return found


def blocks_in(messages: list[Any]) -> list[MeasuredBlock]:
    *first, last = messages
    assert isinstance(last, Finished)
    assert all(isinstance(one, MeasuredBlocks) for one in first)
    return [block for one in first for block in one.blocks]


def expected(
    channels: tuple[str, ...] = CHANNELS, unplaced: tuple[int, ...] = ()
) -> tuple[list[list[Reading]], list[Reading]]:
    """Return the readings of each block, and of the end, of a group that no ring feeds."""
    group = ChannelGroup(CONFIG, SOURCE, channels)
    readings = []
    for number in range(COUNT):
        first = first_of(number)
        block = Block("model", first, sample_time_ns(START_NS, first, RATE), SAMPLES[number])
        readings.append([] if number in unplaced else group.push(block))
    return readings, group.finish()


WHOLE, LAST = expected()


@pytest.mark.parametrize("channels", [CHANNELS, ("a",), ("b",)])
def test_each_block_is_told_once_with_what_it_makes_known(channels: tuple[str, ...]) -> None:
    with filled() as ring:
        messages = told(ring, channels=channels)
        assert ring.place_of(0) == COUNT
    blocks = blocks_in(messages)
    assert [block.number for block in blocks] == list(range(COUNT))
    assert [block.first_sample for block in blocks] == [first_of(number) for number in range(COUNT)]
    assert {(block.count, block.cause) for block in blocks} == {(FRAMES, Fault.OVERFLOW)}
    assert [block.arrived_ns for block in blocks] == list(range(77, 77 + COUNT))
    readings, last = expected(channels)
    assert [block.readings for block in blocks] == readings
    assert messages[-1].readings == last
    assert sum(map(len, readings)) > 30


@pytest.mark.parametrize("number", [1, 63, 120, 121, 122, 150, 200])
def test_one_that_begins_again_tells_the_blocks_that_are_wanted_as_if_none_had_died(number: int) -> None:
    """Anywhere: just before a gap, just behind it, at the end of all."""
    with filled() as ring:
        ring.keep_for(0, number)
        messages = told(ring, number, first_of(number - 1) + FRAMES)
        assert ring.place_of(0) == COUNT
    assert [(block.number, block.readings) for block in blocks_in(messages)] == list(enumerate(WHOLE))[number:]
    assert messages[-1].readings == LAST


@pytest.mark.parametrize("number", [10, 152])
def test_what_is_told_does_not_depend_on_blocks_without_a_place(number: int) -> None:
    """Which a capture that died left: they are told of, so that all workers count alike, and hold nothing."""
    unplaced = (8, 9, 89, 150, 151)
    readings, last = expected(unplaced=unplaced)
    with filled(unplaced=unplaced) as ring:
        whole = told(ring)
        before = [one for one in blocks_in(whole)[:number] if one.count][-1]
        again = told(ring, number, before.first_sample + FRAMES)
    assert [block.readings for block in blocks_in(whole)] == readings
    assert [block.number for block in blocks_in(whole) if block.count == 0] == list(unplaced)
    assert blocks_in(again) == blocks_in(whole)[number:]
    assert again[-1].readings == last


@pytest.mark.parametrize("slots", [55, 50, 45])
def test_where_the_ring_holds_too_little_history_only_windows_of_before_are_lost(slots: int) -> None:
    """The blocks from 160 on wait, and at most 12 of before are still there; the windows wanted reach back further.

    Of windows that begin before what is there nothing is told. Those that begin with it differ from those of the whole
    stream by what the zoom's edges see of the samples before: 1e-6 of the level here, and nothing from 1.2 s on.
    """
    with filled(slots, 41) as ring:
        oldest = ring.oldest()
        assert 148 <= oldest < 160
        messages = told(ring, 160, first_of(159) + FRAMES)
    blocks = blocks_in(messages)
    assert [block.number for block in blocks] == list(range(160, COUNT))
    again = ambient(one.body for one in itertools.chain(*(block.readings for block in blocks), messages[-1].readings))
    whole = ambient(one.body for one in itertools.chain(*WHOLE[160:], LAST))
    first = first_of(oldest)
    assert list(again) == [about for about in whole if about[1] >= first]
    for about, body in again.items():
        assert body.level == pytest.approx(whole[about].level, rel=1e-4)
        assert (body.usable, body.reasons) == (whole[about].usable, whole[about].reasons)
        if about[1] >= first + 1.2 * RATE:
            assert body == whole[about]


def test_blocks_that_were_written_over_are_told_as_an_error() -> None:
    with filled(50, 41) as ring, pytest.raises(OverrunError, match="block 100 was written over before"):
        told(ring, 100, first_of(99) + FRAMES)


def test_it_measures_what_comes_while_it_waits_and_ends_when_its_parent_is_gone() -> None:
    ours, theirs = Pipe()
    with Ring.create(Shape(RATE, 2, FRAMES, 40, 20)) as ring:
        order = Measure(CONFIG, SOURCE, CHANNELS, 0, 0, 0)
        ended: list[bool] = []

        def run() -> None:
            with theirs, pytest.raises(EOFError):
                work(order, ring, theirs)
            ended.append(True)

        thread = threading.Thread(target=run)
        thread.start()
        for number in range(3):
            ring.take(SAMPLES[number], number, False)
            ring.place(number, first_of(number))
            ring.publish(number + 1)
            (block,) = ours.recv().blocks
            assert block.number == number
        ours.close()
        thread.join(60.0)
        assert ended == [True]
