"""What is put into the ring is what is read from it; what does not fit is counted, and nothing else suffers."""

from __future__ import annotations

import hashlib
import os
import signal
import subprocess
import sys
import time
from collections import deque
from collections.abc import Iterator

import numpy as np
import pytest
from driftwatch.records import Fault
from driftwatch.stream.ring import OverrunError, Reader, Ring, Shape, Tie
from hypothesis import given, settings
from hypothesis import strategies as st

RATE = 1000
FRAMES = 16
KINDS = ("int16", "int32", "float32")
LONG_S = 30.0
"""Longest wait for another process, seconds: it only has to start."""


def shape(slots: int = 8, most_waiting: int = 5, inputs: int = 2, frames: int = FRAMES) -> Shape:
    return Shape(RATE, inputs, frames, slots, most_waiting)


@pytest.fixture
def ring() -> Iterator[Ring]:
    with Ring.create(shape()) as opened:
        yield opened


def drawn(rng: np.random.Generator, kind: str, count: int, inputs: int = 2) -> np.ndarray:
    """Return samples as a device gives them, the ends of their range among them."""
    if kind == "float32":
        return rng.standard_normal((count, inputs)).astype(np.float32)
    limits = np.iinfo(kind)
    samples = rng.integers(limits.min, limits.max, (count, inputs), kind, endpoint=True)
    samples[0, 0], samples[-1, -1] = limits.min, limits.max
    return samples


def as_floats(samples: np.ndarray) -> np.ndarray:
    """Return what full scale 1 makes of samples, by one division and one rounding."""
    if samples.dtype.kind == "f":
        return samples
    return (samples.astype(np.float64) / 2.0 ** (8 * samples.itemsize - 1)).astype(np.float32)


def put(ring: Ring, samples: np.ndarray, first_sample: int, cause: Fault = Fault.GAP) -> None:
    """Take, place and publish a block that there is room for."""
    number = ring.filled
    ring.take(samples, 1_000 + number, False)
    assert ring.filled == number + 1
    ring.place(number, first_sample, cause)
    ring.publish(number + 1)


def numbered(number: int) -> np.ndarray:
    """Return a block in which every sample is its number."""
    return np.full((FRAMES, 2), number, np.float32)


def read(reader: Reader, most: int = 1000) -> list[int]:
    """Read what there is; return the number that stands in each block, which is the block's own."""
    found = []
    for block in reader.fresh(most):
        assert np.all(block.samples == block.number)
        found.append(block.number)
    reader.done()
    return found


# ---------------------------------------------------------------------------------------------- what is read


@given(
    st.lists(
        st.tuples(st.integers(1, FRAMES), st.sampled_from(KINDS), st.integers(0, 50), st.booleans()),
        min_size=20,
        max_size=60,
    ),
    st.integers(0, 2**32 - 1),
    st.sampled_from([0, 2**31 - 100, 2**32 - 100, 2**53]),
)
@settings(max_examples=60, deadline=None)
def test_what_is_read_is_what_was_taken_over_many_laps(
    blocks: list[tuple[int, str, int, bool]], seed: int, first: int
) -> None:
    """Of any size and kind, with gaps of any length, read at any time before the ring is full."""
    rng = np.random.default_rng(seed)
    waiting: deque[tuple[int, int, Fault, np.ndarray]] = deque()
    with Ring.create(shape()) as ring:
        reader = ring.reader(0, 0)
        reader.done()
        for number, (count, kind, gap, is_read) in enumerate(blocks):
            if not ring.has_room() or is_read:
                for seen in reader.fresh(1000):
                    told, begun, cause, samples = waiting.popleft()
                    assert (seen.number, seen.first_sample, seen.cause) == (told, begun, cause)
                    assert seen.arrived_ns == 1_000 + told
                    np.testing.assert_array_equal(seen.samples, samples, strict=True)
                reader.done()
                assert not waiting
            first += gap
            cause = list(Fault)[number % len(Fault)]
            given_samples = drawn(rng, kind, count)
            put(ring, given_samples, first, cause)
            waiting.append((number, first, cause, as_floats(given_samples)))
            first += count
        assert ring.dropped == 0
        assert len(list(reader.fresh(1000))) == len(waiting)


@pytest.mark.parametrize("kind", KINDS)
def test_inputs_that_a_device_does_not_have_stay_silent(kind: str) -> None:
    rng = np.random.default_rng(0)
    with Ring.create(shape(inputs=4)) as ring:
        for number in range(20):
            samples = drawn(rng, kind, FRAMES, inputs=3)
            put(ring, samples, number * FRAMES)
            seen = ring.seen(number)
            assert seen is not None
            np.testing.assert_array_equal(seen.samples[:, :3], as_floats(samples))
            assert not np.any(seen.samples[:, 3])


def test_what_the_callback_notes_is_what_the_decider_finds(ring: Ring) -> None:
    ring.take(numbered(0)[:7], 123, False)
    ring.take(numbered(1), 456, True)
    first, second = ring.arrived(0)
    assert (first.number, first.count, first.arrived_ns, first.flagged, first.dropped_before) == (0, 7, 123, False, 0)
    assert (second.number, second.count, second.arrived_ns, second.flagged) == (1, FRAMES, 456, True)
    assert [one.number for one in ring.arrived(1)] == [1]
    assert ring.called_ns == 456


def test_a_block_is_seen_only_once_it_is_published(ring: Ring) -> None:
    reader = ring.reader(0, 0)
    ring.take(numbered(0), 0, False)
    ring.place(0, 0)
    assert read(reader) == []
    ring.publish(1)
    assert read(reader) == [0]
    assert read(reader) == []


# ---------------------------------------------------------------------------------------------- too late a reader


@given(st.lists(st.tuples(st.booleans(), st.integers(1, FRAMES)), min_size=30, max_size=120))
@settings(max_examples=60, deadline=None)
def test_a_full_ring_drops_what_comes_counts_it_exactly_and_keeps_what_was_there(steps: list[tuple[bool, int]]) -> None:
    """Against a model: a queue of five; True: the reader reads all that waits."""
    waiting: list[tuple[int, int]] = []  # number and count of each block that waits
    number = dropped = since = 0
    with Ring.create(shape()) as ring:
        reader = ring.reader(0, 0)
        reader.done()
        for is_read, count in steps:
            if is_read:
                seen = [(block.number, len(block.samples)) for block in reader.fresh(1000)]
                reader.done()
                assert seen == waiting
                waiting = []
            is_full = len(waiting) == 5
            assert ring.has_room() is not is_full
            assert ring.fill == len(waiting) / 5
            ring.take(np.full((count, 2), number, np.float32), number, False)
            if is_full:
                dropped, since = dropped + count, since + count
            else:
                (noted,) = ring.arrived(number)
                assert (noted.count, noted.dropped_before) == (count, since)
                ring.place(number, number * FRAMES)
                ring.publish(number + 1)
                waiting.append((number, count))
                number, since = number + 1, 0
            assert ring.dropped == dropped
        assert all(np.all(block.samples == block.number) for block in reader.fresh(1000))


def test_several_readers_each_read_all_and_the_last_of_them_is_waited_for(ring: Ring) -> None:
    early, late = ring.reader(0, 0), ring.reader(1, 0)
    for reader in (early, late):
        reader.done()
    for number in range(5):
        put(ring, numbered(number), number * FRAMES)
        assert read(early) == [number]
    assert not ring.has_room()
    assert ring.fill == 1.0
    assert read(late, 2) == [0, 1]
    assert ring.has_room()
    assert ring.fill == pytest.approx(3 / 5)
    ring.dismiss(1)
    assert ring.fill == 0.0
    for number in range(5, 30):
        put(ring, numbered(number), number * FRAMES)
        assert read(early) == [number]
    with pytest.raises(OverrunError):
        read(late)


def test_a_place_kept_for_a_reader_that_is_yet_to_come_is_waited_for(ring: Ring) -> None:
    ring.keep_for(3, 0)
    for number in range(5):
        put(ring, numbered(number), 0)
    assert not ring.has_room()
    assert read(ring.reader(3, 0)) == [0, 1, 2, 3, 4]
    assert ring.has_room()


def test_a_reader_that_begins_again_further_back_is_not_waited_for_a_second_time(ring: Ring) -> None:
    first = ring.reader(0, 0)
    first.done()
    for number in range(5):
        put(ring, numbered(number), number * FRAMES)
    assert read(first) == [0, 1, 2, 3, 4]
    again = ring.reader(0, 2)
    assert read(again, 1) == [2]
    assert ring.place_of(0) == 5
    assert read(again) == [3, 4]


def test_blocks_that_were_read_stay_readable_for_as_long_as_the_ring_promises(ring: Ring) -> None:
    reader = ring.reader(0, 0)
    reader.done()
    for number in range(50):
        put(ring, numbered(number), number * FRAMES)
        read(reader)
        history = range(ring.oldest(), number + 1)
        assert len(history) >= min(number + 1, ring.shape.slots - ring.shape.most_waiting)
        assert read(ring.reader(1, history[0])) == list(history)
        ring.dismiss(1)


def test_a_block_that_was_written_over_before_it_was_read_is_told(ring: Ring) -> None:
    reader = ring.reader(0, 0)  # whose place is not noted: nobody waits for it
    for number in range(9):
        put(ring, numbered(number), number * FRAMES)
    with pytest.raises(OverrunError, match="block 0 was written over before it was read"):
        list(reader.fresh(1000))
    assert ring.seen(0) is None
    assert reader.next == 0


def test_a_block_that_is_written_over_while_it_is_read_is_told(ring: Ring) -> None:
    reader = ring.reader(0, 0)
    put(ring, numbered(0), 0)
    blocks = reader.fresh(1000)
    assert next(blocks).number == 0
    for number in range(1, 9):
        put(ring, numbered(number), number * FRAMES)
    with pytest.raises(OverrunError, match="block 0 was written over while it was read"):
        next(blocks)
    assert reader.next == 0


# ---------------------------------------------------------------------------------------------- other processes

_READ = """
import hashlib, sys, time
from driftwatch.stream.ring import Ring
ring, most = Ring(int(sys.argv[1])), int(sys.argv[2])
reader, digest = ring.reader(0, 0), hashlib.sha256()
while not (ring.ended and reader.next >= ring.published):
    for block in reader.fresh(most):
        digest.update(block.samples.tobytes())
        digest.update(b"%d %d" % (block.number, block.first_sample))
    reader.done()
    time.sleep(0.0005)
print(reader.next, digest.hexdigest())
"""


@pytest.mark.parametrize("most", [1, 64])
def test_another_process_reads_over_the_descriptor_what_is_written_meanwhile(ring: Ring, most: int) -> None:
    rng = np.random.default_rng(most)
    expected = hashlib.sha256()
    ring.keep_for(0, 0)
    process = _started(_READ, ring, str(most))
    try:
        for number in range(400):
            until = time.monotonic() + LONG_S
            while not ring.has_room():
                assert time.monotonic() < until, "the reader does not read"
                time.sleep(0.0005)
            samples = drawn(rng, KINDS[number % 3], int(rng.integers(1, FRAMES + 1)))
            put(ring, samples, number * 20)
            expected.update(as_floats(samples).tobytes())
            expected.update(b"%d %d" % (number, number * 20))
        ring.end()
        out, _ = process.communicate(timeout=LONG_S)
    finally:
        process.kill()
        process.wait()
    assert out.split() == ["400", expected.hexdigest()]
    assert ring.dropped == 0


_DIE = """
import os, signal, sys
import numpy as np
from driftwatch.stream.ring import Ring, _Slot
ring, at = Ring(int(sys.argv[1])), sys.argv[2]
for number in range(3):
    ring.take(np.full((16, 2), number, np.float32), 0, False)
    ring.place(number, number * 16)
    ring.publish(number + 1)
for number in (3, 4):
    ring.take(np.full((16, 2), number, np.float32), 0, False)
if at == "placed":
    ring.place(3, 48)
if at == "writing":
    ring._slots[5][_Slot.NUMBER] = -1
    ring._samples[5, :7] = 1e9
os.kill(os.getpid(), signal.SIGKILL)
"""


@pytest.mark.parametrize("at", ["taken", "placed", "writing"])
def test_what_a_killed_writer_left_unpublished_is_passed_over_and_the_next_goes_on(ring: Ring, at: str) -> None:
    """Killed after it took two blocks, after it gave one a place, or half way through a third."""
    ring.keep_for(0, 0)
    process = _started(_DIE, ring, at)
    assert process.wait(LONG_S) == -signal.SIGKILL
    process.communicate()
    assert (ring.filled, ring.published) == (5, 3)
    with Ring(os.dup(ring.descriptor)) as heir:
        heir.pass_undecided()
        last = heir.last_block()
        assert last is not None
        assert (last.number, last.first_sample) == (2, 32)
        reader = ring.reader(0, 0)
        assert [len(block.samples) for block in reader.fresh(1000)] == [16, 16, 16, 0, 0]
        reader.done()
        for number in range(5, 20):
            put(heir, numbered(number), number * FRAMES)
            assert read(reader) == [number]


def test_without_a_block_there_is_no_last_one(ring: Ring) -> None:
    assert ring.last_block() is None
    ring.take(numbered(0), 0, False)
    assert ring.last_block() is None  # it is not published


def _started(program: str, ring: Ring, *arguments: str) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-c", program, str(ring.descriptor), *arguments],
        pass_fds=[ring.descriptor],
        stdout=subprocess.PIPE,
        text=True,
    )


# ---------------------------------------------------------------------------------------------- what else is told


def test_every_cause_of_a_silence_is_told_to_whoever_looks(ring: Ring) -> None:
    with Ring(os.dup(ring.descriptor)) as other:
        assert other.silent is None
        for cause in Fault:
            ring.silent = cause
            assert other.silent is cause
        ring.silent = None
        assert other.silent is None
        assert not other.ended
        ring.end()
        assert other.ended
        ring.beat(77)
        ring.attempt()
        ring.attempt()
        assert (other.beat_ns, other.attempts) == (77, 2)
        assert other.shape == ring.shape


@pytest.mark.parametrize("index", [0, 2**31 - 5, 2**40])
@pytest.mark.parametrize("deviation", [0.0, 1e-4, -73e-6])
def test_an_instant_belongs_to_the_sample_that_arrives_then(ring: Ring, index: int, deviation: float) -> None:
    """A true rate of 1000 (1 + d) Hz brings 1000 (1 + d) samples in each second; the deviation is kept to 1e-9."""
    assert ring.tied is None
    ring.tie(Tie(index, 5_000_000_000, deviation))
    tied = ring.tied
    assert tied is not None
    for seconds in (0, 1, 3600, 86_400):
        true = index + seconds * RATE * (1 + deviation)
        assert tied.at(5_000_000_000 + seconds * 1_000_000_000, RATE) == pytest.approx(true, abs=1 + seconds * 1e-6)


def test_a_ring_leaves_no_file_behind_and_is_as_large_as_it_says(ring: Ring) -> None:
    assert os.fstat(ring.descriptor).st_size == ring.shape.size
    assert os.fstat(ring.descriptor).st_nlink == 0
