"""The order of records does not depend on which worker answers first."""

from __future__ import annotations

import pytest
from driftwatch.daemon.merge import Merge
from driftwatch.daemon.messages import MeasuredBlock
from driftwatch.pipeline.reading import Reading
from driftwatch.records import Fault
from hypothesis import given
from hypothesis import strategies as st

COUNT = 100
"""Samples in a block."""


def block(number: int, worker: int, readings: int = 1, count: int = COUNT) -> MeasuredBlock:
    """Return a block whose readings name, as their times, worker and place."""
    told = [
        Reading((number + 1) * COUNT, 1_000_000 * number + 1_000 * worker + place, None) for place in range(readings)
    ]
    return MeasuredBlock(number, number * COUNT, count, Fault.GAP, number, told)


@given(st.data(), st.integers(1, 5), st.integers(1, 12))
def test_blocks_come_in_order_and_in_them_readings_in_the_order_of_workers(
    data: st.DataObject, workers: int, blocks: int
) -> None:
    """Whatever the workers' batches, and whoever is ahead: the order of one process that has all the channels."""
    counts = data.draw(
        st.lists(st.lists(st.integers(0, 3), min_size=workers, max_size=workers), min_size=blocks, max_size=blocks)
    )
    expected = [
        (
            number,
            [1_000_000 * number + 1_000 * worker + place for worker in range(workers) for place in range(row[worker])],
        )
        for number, row in enumerate(counts)
    ]
    merge, found, given_so_far = Merge(workers), [], [0] * workers
    while len(found) < blocks:
        worker = data.draw(st.sampled_from([one for one in range(workers) if given_so_far[one] < blocks]))
        first = given_so_far[worker]
        last = data.draw(st.integers(first + 1, blocks))
        merge.add(worker, [block(number, worker, counts[number][worker]) for number in range(first, last)])
        given_so_far[worker] = last
        found += [(merged.number, [one.time_ns for one in readings]) for merged, readings in merge.ready()]
        assert len(found) == merge.merged == min(given_so_far)  # nothing waits that is complete
    assert found == expected


def test_a_worker_that_begins_again_is_told_where_and_goes_on_there() -> None:
    merge = Merge(2)
    merge.add(0, [block(0, 0), block(1, 0), block(2, 0, count=7)])
    merge.add(1, [block(0, 1)])
    assert [merged.number for merged, _ in merge.ready()] == [0]
    assert (merge.next_of(0), merge.position_of(0)) == (3, 207)
    assert (merge.next_of(1), merge.position_of(1)) == (1, 100)  # here worker 1 dies, and the next one begins
    merge.add(1, [block(1, 1), block(2, 1, count=7), block(3, 1)])
    assert [merged.number for merged, _ in merge.ready()] == [1, 2]
    merge.add(0, [block(3, 0)])
    assert [merged.number for merged, _ in merge.ready()] == [3]


def test_a_block_that_has_no_place_in_the_stream_moves_no_position() -> None:
    merge = Merge(1)
    merge.add(0, [block(0, 0), block(1, 0, count=0)])
    assert (merge.next_of(0), merge.position_of(0)) == (2, 100)


@pytest.mark.parametrize("number", [0, 2, 7])
def test_a_block_that_is_not_the_next_one_is_an_error(number: int) -> None:
    merge = Merge(1)
    merge.add(0, [block(0, 0)])
    with pytest.raises(ValueError, match=f"worker 0 gave block {number}; expected 1"):
        merge.add(0, [block(number, 0)])
