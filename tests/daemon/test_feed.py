"""How a source is read: in which blocks, with how much that may wait, and by which order."""

from __future__ import annotations

import resource
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace

import pytest
from driftwatch.config import SimulatedSourceConfig, SoundcardSourceConfig
from driftwatch.daemon.feed import CardFeed, PacedFeed
from driftwatch.daemon.messages import LiveSource, ReadCard, ReadSource
from driftwatch.records import NS, Fault, TimeQuality
from driftwatch.stream.simulated import SimulatedSource
from driftwatch.stream.source import SourceRefusedError

START_NS = 1_767_225_600 * NS
MODEL = SimulatedSource(SimulatedSourceConfig(name="model", rate_hz=4000, inputs=3), START_NS)
CARD = SoundcardSourceConfig(name="card", device="measurement", rate_hz=48_000)


@pytest.mark.parametrize(("pace", "frames"), [(1.0, 400), (0.5, 400), (2.5, 1000), (50.0, 4000), (0.0, 4000)])
def test_blocks_are_a_tenth_of_a_second_in_real_time_and_a_second_at_most(pace: float, frames: int) -> None:
    with PacedFeed(MODEL, pace, 20.0).make_ring() as ring:
        assert (ring.shape.frames, ring.shape.inputs, ring.shape.rate_hz) == (frames, 3, 4000)


@pytest.mark.parametrize("pace", [1.0, 0.0])
@pytest.mark.parametrize("queue_s", [2.0, 20.0, 30.05])
def test_as_many_seconds_may_wait_as_asked_for_and_half_as_many_stay_after_they_were_read(
    pace: float, queue_s: float
) -> None:
    with PacedFeed(MODEL, pace, queue_s).make_ring() as ring:
        shape = ring.shape
        waiting_s = shape.most_waiting * shape.frames / 4000
        assert queue_s <= waiting_s <= max(queue_s + shape.frames / 4000, 8 * shape.frames / 4000)
        assert (shape.slots - shape.most_waiting) * shape.frames / 4000 >= waiting_s / 2 - shape.frames / 4000
        assert shape.most_waiting >= 8


def test_what_is_known_of_a_paced_source_is_known_before_it_is_read() -> None:
    known = PacedFeed(MODEL, 1.0, 20.0).known
    assert known is not None
    assert (known.name, known.rate_hz, known.inputs, known.first_sample) == ("model", 4000, 3, 0)
    assert (known.start_ns, known.time_quality, known.sources) == (START_NS, TimeQuality.ASSUMED, MODEL.sources)


def test_a_paced_source_is_read_in_the_same_way_however_often_its_process_died() -> None:
    feed = PacedFeed(MODEL, 2.0, 20.0)
    assert feed.order(None, Fault.PROCESS) == feed.order(feed.known, Fault.DEVICE) == ReadSource(MODEL, 2.0)


@pytest.mark.parametrize(("needed", "asked", "opened", "least"), [(1, None, 2, 1), (5, None, 5, 5), (1, 8, 8, 8)])
def test_of_a_sound_card_two_inputs_are_opened_where_it_has_them_unless_more_are_needed_or_named(
    needed: int, asked: int | None, opened: int, least: int
) -> None:
    feed = CardFeed(CARD.model_copy(update={"inputs": asked}), needed, 20.0)
    assert feed.known is None  # only the device knows
    with feed.make_ring() as ring:
        assert (ring.shape.inputs, ring.shape.frames) == (opened, 480)
    order = feed.order(None, Fault.PROCESS)
    assert isinstance(order, ReadCard)
    assert (order.least_inputs, order.start_ns) == (least, None)


def test_the_next_process_of_a_sound_card_goes_on_in_the_stream_of_the_one_before() -> None:
    begun = LiveSource("card", 48_000, 2, START_NS, TimeQuality.FREE, ("card",), ())
    order = CardFeed(CARD, 1, 20.0).order(begun, Fault.PROCESS)
    assert order == replace(
        CardFeed(CARD, 1, 20.0).order(None, Fault.PROCESS), start_ns=START_NS, resumes=Fault.PROCESS
    )


@contextmanager
def _files_of_at_most(size: int) -> Iterator[None]:
    """Let the system refuse any file, in memory too, over a size."""
    before = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, before[1]))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, before)


def test_where_there_is_not_enough_memory_the_source_is_refused_with_what_to_do() -> None:
    """480 blocks wait and 240 stay: 600 s of 3 inputs at 4000 Hz and half of it, 43 MB."""
    feed = PacedFeed(MODEL, 1.0, 600.0)
    with _files_of_at_most(1_000_000), pytest.raises(SourceRefusedError) as refused:
        feed.make_ring()
    (problem,) = refused.value.problems
    assert problem.startswith("no memory for 600 s of samples (44 MB: File too large)")
    assert problem.endswith("lower [daemon] queue_s")
