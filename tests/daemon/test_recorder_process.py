"""The process that records keeps what goes through the ring, whoever dies, and says when it cannot."""

from __future__ import annotations

import os
import signal
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from driftwatch.config import loads
from driftwatch.daemon import recorder as module
from driftwatch.daemon.child import Child
from driftwatch.daemon.messages import ClockSeen, Enough, Record, Recorded
from driftwatch.records import Clock, Fault
from driftwatch.stream.recording import open_recordings
from driftwatch.stream.ring import Ring, Shape
from numpy.typing import NDArray
from ordered import LONG_S, Do, hurried, is_running, until
from two_channels import RATE, RUN, SOURCE

FRAMES = 100
CONFIG = loads("""
schema = 1
[station]
name = "s"
[[source]]
name = "model"
kind = "simulated"
rate_hz = 1000
inputs = 2
[[channel]]
name = "a"
[[mode]]
name = "m"
channel = "a"
search_hz = [80.0, 160.0]
window_s = 1.0
[record]
keep_hours = 1.0
segment_s = 2.0
""")

pytestmark = pytest.mark.usefixtures("importable")


@pytest.fixture
def ring() -> Iterator[Ring]:
    with Ring.create(Shape(RATE, 2, FRAMES, 100, 60)) as opened:
        yield opened


class Fed:
    """What was written into a ring so far."""

    def __init__(self, ring: Ring) -> None:
        self._ring = ring
        self._rng = np.random.default_rng(0)
        self.position = 0
        self.samples: dict[int, NDArray[np.float32]] = {}  # by stream index

    def blocks(self, count: int, gap: int = 0) -> None:
        """Write so many blocks; before the first so many samples are missing."""
        self.position += gap
        for _ in range(count):
            block = self._rng.standard_normal((FRAMES, 2)).astype(np.float32)
            number = self._ring.filled
            self._ring.take(block, time.monotonic_ns(), False)
            self._ring.place(number, self.position, Fault.OVERFLOW)
            self._ring.publish(number + 1)
            self.samples[self.position] = block
            self.position += FRAMES


def order(folder: Path) -> Record:
    return Record(CONFIG, SOURCE, RUN, str(folder))


def kept(folder: Path) -> dict[int, NDArray[np.float32]]:
    """Return what a folder holds, cut into the blocks of the ring, by stream index."""
    found = {}
    for block in open_recordings([folder], None, "model").blocks(10**6):
        assert block.count % FRAMES == 0
        for begin in range(0, block.count, FRAMES):
            found[block.first_sample + begin] = block.samples[begin : begin + FRAMES]
    return found


def is_the_same(one: dict[int, NDArray[np.float32]], other: dict[int, NDArray[np.float32]]) -> bool:
    return one.keys() == other.keys() and all(np.array_equal(one[first], other[first]) for first in one)


def started(ring: Ring, folder: Path) -> Child:
    child = Child("recorder", ring.descriptor)
    child.tell(Do(hurried, (order(folder),)))
    return child


def test_all_that_goes_through_the_ring_is_kept_with_its_gaps_and_blocks_without_a_place_are_not(
    ring: Ring, tmp_path: Path
) -> None:
    fed, folder = Fed(ring), tmp_path / "recordings"
    child = started(ring, folder)
    try:
        fed.blocks(40)
        until(lambda: ring.recorded == 40, "it has recorded what there was")
        ring.take(np.ones((FRAMES, 2), np.float32), 0, False)
        ring.pass_undecided()
        fed.blocks(30, gap=700)
        ring.end()
        assert child.wait(LONG_S)
        assert child.heard()[0] == []
    finally:
        child.kill()
    assert is_the_same(kept(folder), fed.samples)
    causes = [block.cause for block in open_recordings([folder], None, "model").blocks(10**6) if block.first_sample]
    assert Fault.OVERFLOW in causes
    assert len(list(folder.glob("*.wav"))) >= 4  # of 2 s each


def test_one_that_was_killed_is_followed_by_one_that_keeps_the_rest_and_nothing_twice(
    ring: Ring, tmp_path: Path
) -> None:
    fed, folder = Fed(ring), tmp_path / "recordings"
    for _ in range(2):
        child = started(ring, folder)
        try:
            fed.blocks(25)
            until(lambda: ring.recorded == ring.published, "it has recorded what there was")
            os.kill(child.pid, signal.SIGKILL)
            assert child.wait(LONG_S)
        finally:
            child.kill()
        fed.blocks(10)  # while nobody records
    child = started(ring, folder)
    try:
        ring.end()
        assert child.wait(LONG_S)
    finally:
        child.kill()
    assert is_the_same(kept(folder), fed.samples)


def test_it_ends_when_told_that_it_is_enough_and_keeps_the_clock_that_it_was_told(ring: Ring, tmp_path: Path) -> None:
    fed, folder = Fed(ring), tmp_path / "recordings"
    child = started(ring, folder)
    try:
        fed.blocks(5)
        child.tell(ClockSeen(Clock("model", RATE, 31.5, 0.25, 3600.0, -0.125, 0.001)))
        child.tell(Enough())
        assert child.wait(LONG_S)
    finally:
        child.kill()
    assert is_the_same(kept(folder), fed.samples)
    sides = [path.read_text() for path in folder.iterdir() if path.suffix != ".wav"]
    assert any("31.5" in text for text in sides)


def test_it_ends_when_its_parent_is_gone(ring: Ring, tmp_path: Path) -> None:
    fed = Fed(ring)
    child = started(ring, tmp_path / "recordings")
    try:
        fed.blocks(5)
        until(lambda: ring.recorded == 5, "it records")
        child.connection.close()
        assert child.wait(LONG_S)
        assert not is_running(child.pid)
    finally:
        child.kill()
    assert is_the_same(kept(tmp_path / "recordings"), fed.samples)


def test_a_folder_that_cannot_be_written_to_is_told_once_and_once_more_when_it_can(ring: Ring, tmp_path: Path) -> None:
    """A file stands where the folder should be, and is taken away; what came meanwhile is not there, and no lie is."""
    folder = tmp_path / "recordings"
    folder.write_text("in the way")
    fed = Fed(ring)
    child = started(ring, folder)
    told: list[Recorded] = []
    try:
        fed.blocks(3)

        def heard(count: int) -> bool:
            told.extend(child.heard()[0])
            return len(told) >= count

        until(lambda: heard(1), "it says that it cannot")
        folder.unlink()
        fed.blocks(3)
        until(lambda: heard(2), "it says that it can again")
        ring.end()
        assert child.wait(LONG_S)
        told.extend(child.heard()[0])
    finally:
        child.kill()
    assert len(told) == 2
    assert str(folder) in str(told[0].error)
    assert "expected leave to write there" in str(told[0].error)
    assert told[1] == Recorded(None)
    found = kept(folder)
    assert found
    assert is_the_same(found, {first: fed.samples[first] for first in found})


def test_one_that_was_overtaken_says_so_and_goes_on_with_what_is_there(ring: Ring, tmp_path: Path) -> None:
    """It is stopped while the ring is written over once and a half; nobody waits for it."""
    fed, folder = Fed(ring), tmp_path / "recordings"
    child = started(ring, folder)
    told: list[Recorded] = []
    try:
        fed.blocks(10)
        until(lambda: ring.recorded == 10, "it records")
        os.kill(child.pid, signal.SIGSTOP)
        fed.blocks(150)
        os.kill(child.pid, signal.SIGCONT)
        until(lambda: ring.recorded == 160, "it has caught up")
        ring.end()
        assert child.wait(LONG_S)
        told.extend(child.heard()[0])
    finally:
        child.kill()
    assert [one.error is None for one in told] == [False, True]
    assert "the disk is too slow" in str(told[0].error)
    found = kept(folder)
    assert is_the_same(found, {first: fed.samples[first] for first in found})
    assert set(fed.samples) - set(found) <= {number * FRAMES for number in range(10, 100)}
    assert min(set(fed.samples) - set(found)) == 10 * FRAMES


def test_the_recorder_is_a_reader_that_the_ring_never_waits_for(ring: Ring) -> None:
    assert ring.place_of(module.PLACE) == -1
    fed = Fed(ring)
    list(ring.reader(module.PLACE, 0).fresh(10))
    fed.blocks(200)
    assert ring.dropped == 0
