"""Blocks of samples in memory that processes share: written once by the source, read in place by all who measure.

The memory is a file without a name, handed from process to process as a descriptor, so that nothing is left behind
however they end. Every word of the headers is one aligned integer of 64 bits with one writer; a block is visible to
readers only once `Ring.publish` has counted it, after all of it was written.

One process writes (`take` from the sound library's callback, or `put`), any number read. A reader that is too late
never stops the callback: when as many blocks wait as `most_waiting`, what comes is dropped and counted. Blocks that
were read stay for a while, so that a reader that died can begin again a little way back.
"""

from __future__ import annotations

import mmap
import os
import tempfile
from collections.abc import Iterator
from dataclasses import dataclass
from enum import IntEnum
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from driftwatch.records import Fault

if TYPE_CHECKING:
    from typing import Self

MOST_READERS = 65
"""Readers that a ring has room for."""

_WORD = np.dtype(np.int64)
_HEADER_WORDS = 128
_SLOT_WORDS = 8
_PAGE = mmap.PAGESIZE

_FAULTS = tuple(Fault)
_ABSENT = -1  # of a reader's place: nobody is there to wait for


class _Head(IntEnum):
    """Words of the ring's header."""

    SLOTS = 0
    FRAMES = 1
    INPUTS = 2
    RATE = 3
    MOST_WAITING = 4
    FILLED = 8  # blocks taken so far; the number of the next one
    PUBLISHED = 9  # blocks that readers may see
    DROPPED = 10  # samples that were dropped because the ring was full
    ENDED = 11  # 1: no block comes any more
    BEAT_NS = 12  # monotonic time at which the writing process last showed that it lives
    SILENT = 13  # why no samples come: 1 + index of the fault; 0: they come
    TIE_INDEX = 14  # a stream index ...
    TIE_NS = 15  # ... and the monotonic time at which its sample would arrive
    TIE_PPB = 16  # deviation of the true rate from the nominal, 1e-9
    CALLED_NS = 18  # monotonic time of the last block, whether it was taken or dropped
    RECORDED = 19  # number of the next block that the recorder will take
    ATTEMPTS = 17  # how often it was tried to open the device
    READERS = 32  # from here on the number of the next block of each reader


class _Slot(IntEnum):
    """Words of a slot's header."""

    NUMBER = 0  # of the block in it; written last
    COUNT = 1  # samples in it, per input; 0: none, its place in time is not known
    FIRST_SAMPLE = 2
    CAUSE = 3  # index of the fault: why samples are missing before it
    ARRIVED_NS = 4  # monotonic time
    FLAGGED = 5  # 1: the device says that it lost samples before it
    DROPPED_BEFORE = 6  # samples dropped between the block before and this one, the ring being full


@dataclass(frozen=True, slots=True)
class Shape:
    """How large a ring is."""

    rate_hz: int
    inputs: int
    frames: int  # samples in a block, per input
    slots: int  # blocks in all
    most_waiting: int  # blocks that may wait for the last reader

    @property
    def size(self) -> int:
        """Bytes of the whole."""
        return _samples_at(self.slots) + self.slots * self.frames * self.inputs * 4


def _memory() -> int:
    """Return the descriptor of a file without a name."""
    if hasattr(os, "memfd_create"):
        return os.memfd_create("driftwatch-ring")
    with tempfile.TemporaryFile() as file:  # where the system knows no such memory
        return os.dup(file.fileno())


def _samples_at(slots: int) -> int:
    """Return the offset of the samples: on a page of their own."""
    headers = (_HEADER_WORDS + slots * _SLOT_WORDS) * _WORD.itemsize
    return -(-headers // _PAGE) * _PAGE


@dataclass(frozen=True, slots=True)
class Arrived:
    """What the callback noted of a block."""

    number: int
    count: int
    arrived_ns: int
    flagged: bool
    dropped_before: int


@dataclass(frozen=True, slots=True)
class Seen:
    """A block as a reader sees it, in place."""

    number: int
    first_sample: int
    arrived_ns: int  # monotonic
    cause: Fault
    samples: NDArray[np.float32]  # shape (count, inputs), valid until `Reader.done`; count 0: to be passed over


@dataclass(frozen=True, slots=True)
class Tie:
    """Which stream index belongs to which instant of the monotonic clock."""

    index: int
    monotonic_ns: int
    deviation: float  # of the true rate from the nominal, relative

    def at(self, monotonic_ns: int, rate_hz: int) -> int:
        """Return the stream index that belongs to an instant."""
        elapsed = monotonic_ns - self.monotonic_ns
        return self.index + elapsed * rate_hz // 1_000_000_000 + round(elapsed * 1e-9 * rate_hz * self.deviation)


class Ring:
    """A ring of blocks over shared memory.

    Parameters
    ----------
    descriptor
        Of the memory, from `Ring.create` here or in another process; stays the caller's.
    """

    def __init__(self, descriptor: int) -> None:
        self.descriptor = descriptor
        self._map = mmap.mmap(descriptor, os.fstat(descriptor).st_size)
        self._head = np.frombuffer(self._map, _WORD, _HEADER_WORDS)
        slots, frames, inputs, rate_hz, most_waiting = (int(word) for word in self._head[: _Head.MOST_WAITING + 1])
        self.shape = Shape(rate_hz, inputs, frames, slots, most_waiting)
        offset = _HEADER_WORDS * _WORD.itemsize
        self._slots = np.frombuffer(self._map, _WORD, slots * _SLOT_WORDS, offset).reshape(slots, _SLOT_WORDS)
        flat = np.frombuffer(self._map, np.float32, slots * frames * inputs, _samples_at(slots))
        self._samples = flat.reshape(slots, frames, inputs)
        self._dropped_before = 0

    @classmethod
    def create(cls, shape: Shape) -> Ring:
        """Make the memory of a ring.

        Raises
        ------
        OSError
            When there is not that much memory.
        """
        descriptor = _memory()
        try:
            os.posix_fallocate(descriptor, 0, shape.size)
        except OSError:
            os.close(descriptor)
            raise
        head = np.zeros(_HEADER_WORDS, _WORD)
        head[: _Head.MOST_WAITING + 1] = (shape.slots, shape.frames, shape.inputs, shape.rate_hz, shape.most_waiting)
        head[_Head.READERS :] = _ABSENT
        os.pwrite(descriptor, head.tobytes(), 0)
        slot = np.full((shape.slots, _SLOT_WORDS), -1, _WORD)
        os.pwrite(descriptor, slot.tobytes(), _HEADER_WORDS * _WORD.itemsize)
        return cls(descriptor)

    # ------------------------------------------------------------------------------------------ the writing process

    def take(
        self, samples: NDArray[np.float32] | NDArray[np.int16] | NDArray[np.int32], arrived_ns: int, flagged: bool
    ) -> None:
        """Copy a block in, or drop it if too many wait: all that the sound library's callback does.

        Parameters
        ----------
        samples
            Shape (count, inputs), at most `Shape.frames` of them. Integers are scaled to full scale 1.
        arrived_ns
            Monotonic time.
        flagged
            Whether the device says that it lost samples before these.
        """
        self._head[_Head.CALLED_NS] = arrived_ns
        number = int(self._head[_Head.FILLED])
        if number - self._slowest(number) >= self.shape.most_waiting:
            self._head[_Head.DROPPED] += len(samples)
            self._dropped_before += len(samples)
            return
        place = number % self.shape.slots
        slot = self._slots[place]
        slot[_Slot.NUMBER] = -1  # whoever still reads the block that was here sees that it is gone
        scale = _SCALE.get(samples.dtype.char)
        target = self._samples[place, : len(samples), : samples.shape[1]]  # what a device does not have stays silent
        if scale is None:
            np.copyto(target, samples)
        else:
            np.multiply(samples, scale, out=target)
        slot[_Slot.COUNT] = len(samples)
        slot[_Slot.ARRIVED_NS] = arrived_ns
        slot[_Slot.FLAGGED] = flagged
        slot[_Slot.DROPPED_BEFORE] = self._dropped_before
        self._dropped_before = 0
        slot[_Slot.NUMBER] = number
        self._head[_Head.FILLED] = number + 1

    def has_room(self) -> bool:
        """Say whether a block could be taken now."""
        number = int(self._head[_Head.FILLED])
        return number - self._slowest(number) < self.shape.most_waiting

    def _slowest(self, number: int) -> int:
        places = self._head[_Head.READERS :]
        present = places[places >= 0]
        return int(present.min()) if len(present) else number

    def arrived(self, since: int) -> Iterator[Arrived]:
        """Yield what the callback noted of each block from number `since` on."""
        for number in range(since, int(self._head[_Head.FILLED])):
            slot = self._slots[number % self.shape.slots]
            yield Arrived(
                number,
                int(slot[_Slot.COUNT]),
                int(slot[_Slot.ARRIVED_NS]),
                bool(slot[_Slot.FLAGGED]),
                int(slot[_Slot.DROPPED_BEFORE]),
            )

    def place(self, number: int, first_sample: int | None, cause: Fault = Fault.GAP) -> None:
        """Give a block its place in the stream; None: it has none and is passed over."""
        slot = self._slots[number % self.shape.slots]
        if first_sample is None:
            slot[_Slot.COUNT] = 0
            return
        slot[_Slot.FIRST_SAMPLE] = first_sample
        slot[_Slot.CAUSE] = _FAULTS.index(cause)

    def publish(self, until: int) -> None:
        """Let readers see the blocks before number `until`."""
        self._head[_Head.PUBLISHED] = until

    def pass_undecided(self) -> None:
        """Pass over the blocks that a writing process which died left without a place."""
        for number in range(self.published, self.filled):
            self.place(number, None)
        self.publish(self.filled)

    def last_block(self) -> Seen | None:
        """Return the last published block that has a place in the stream; None: there is none any more."""
        for number in range(self.published - 1, self.oldest() - 1, -1):
            block = self.seen(number)
            if block is not None and len(block.samples):
                return block
        return None

    def end(self) -> None:
        """Tell the readers that no block comes any more."""
        self._head[_Head.ENDED] = 1

    def beat(self, monotonic_ns: int) -> None:
        """Show that the writing process lives."""
        self._head[_Head.BEAT_NS] = monotonic_ns

    def tie(self, tie: Tie) -> None:
        """Note which stream index belongs to which instant, for whoever goes on after this process."""
        self._head[_Head.TIE_NS] = 0  # torn while it is 0
        self._head[_Head.TIE_INDEX] = tie.index
        self._head[_Head.TIE_PPB] = round(tie.deviation * 1e9)
        self._head[_Head.TIE_NS] = tie.monotonic_ns

    @property
    def recorded(self) -> int:
        """Number of the next block that the recorder, for which nobody waits, will take."""
        return int(self._head[_Head.RECORDED])

    @recorded.setter
    def recorded(self, number: int) -> None:
        self._head[_Head.RECORDED] = number

    def attempt(self) -> None:
        """Count one more attempt to open the device."""
        self._head[_Head.ATTEMPTS] += 1

    @property
    def attempts(self) -> int:
        """How often it was tried to open the device."""
        return int(self._head[_Head.ATTEMPTS])

    @property
    def silent(self) -> Fault | None:
        """Why no samples come; None: they come."""
        word = int(self._head[_Head.SILENT])
        return _FAULTS[word - 1] if word else None

    @silent.setter
    def silent(self, cause: Fault | None) -> None:
        self._head[_Head.SILENT] = 0 if cause is None else 1 + _FAULTS.index(cause)

    # ------------------------------------------------------------------------------------------ whoever looks

    @property
    def filled(self) -> int:
        """Blocks taken so far."""
        return int(self._head[_Head.FILLED])

    @property
    def published(self) -> int:
        """Blocks that readers may see."""
        return int(self._head[_Head.PUBLISHED])

    @property
    def ended(self) -> bool:
        """Whether no block comes any more."""
        return bool(self._head[_Head.ENDED])

    @property
    def dropped(self) -> int:
        """Samples, per input, that were dropped because the ring was full."""
        return int(self._head[_Head.DROPPED])

    @property
    def called_ns(self) -> int:
        """Monotonic time at which the last block came, whether it was taken or dropped."""
        return int(self._head[_Head.CALLED_NS])

    @property
    def beat_ns(self) -> int:
        """Monotonic time at which the writing process last showed that it lives."""
        return int(self._head[_Head.BEAT_NS])

    @property
    def tied(self) -> Tie | None:
        """Which stream index belongs to which instant; None: not known, or being changed at this instant."""
        monotonic_ns = int(self._head[_Head.TIE_NS])
        index, ppb = int(self._head[_Head.TIE_INDEX]), int(self._head[_Head.TIE_PPB])
        unchanged = int(self._head[_Head.TIE_NS]) == monotonic_ns
        return Tie(index, monotonic_ns, ppb * 1e-9) if monotonic_ns and unchanged else None

    @property
    def fill(self) -> float:
        """How full the queue is: blocks that wait for the last reader over the most that may, 0 to 1."""
        number = self.filled
        return min(1.0, max(0.0, (number - self._slowest(number)) / self.shape.most_waiting))

    def reader(self, place: int, number: int) -> Reader:
        """Return the reader at `place` (0 to `MOST_READERS` - 1) whose next block is `number`."""
        return Reader(self, place, number)

    def dismiss(self, place: int) -> None:
        """Do not wait for the reader at `place` any more."""
        self._head[_Head.READERS + place] = _ABSENT

    def keep_for(self, place: int, number: int) -> None:
        """Keep the blocks from `number` on for the reader at `place`, which is not there yet or not any more."""
        self._head[_Head.READERS + place] = number

    def place_of(self, place: int) -> int:
        """Return the number of the next block of the reader at `place`."""
        return int(self._head[_Head.READERS + place])

    def oldest(self) -> int:
        """Return the number of the oldest block that is surely there for a while: some are about to be written over."""
        spare = max(1, (self.shape.slots - self.shape.most_waiting) // 4)
        return max(0, self.filled - self.shape.slots + spare)

    def seen(self, number: int) -> Seen | None:
        """Return a published block, in place; None: it was written over."""
        place = number % self.shape.slots
        slot = self._slots[place]
        if int(slot[_Slot.NUMBER]) != number:
            return None
        return Seen(
            number,
            int(slot[_Slot.FIRST_SAMPLE]),
            int(slot[_Slot.ARRIVED_NS]),
            _FAULTS[max(0, int(slot[_Slot.CAUSE]))],
            self._samples[place, : int(slot[_Slot.COUNT])],
        )

    def close(self) -> None:
        """Let go of the memory; nothing that a reader gave may be looked at afterwards."""
        os.close(self.descriptor)

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


_SCALE: dict[str, np.float32] = {
    np.dtype(np.int16).char: np.float32(2.0**-15),
    np.dtype(np.int32).char: np.float32(2.0**-31),
}
"""What full scale is divided by, by the kind of integer."""


class OverrunError(Exception):
    """A block was written over while, or before, it was read."""


class Reader:
    """Reads the blocks of a ring in order."""

    def __init__(self, ring: Ring, place: int, number: int) -> None:
        self._ring = ring
        self._place = place
        self.next = number

    def fresh(self, most: int) -> Iterator[Seen]:
        """Yield the blocks that can be read now, at most so many; each is let go of when the next one is asked for.

        Raises
        ------
        OverrunError
            When a block was written over while it was read, or before.
        """
        for number in range(self.next, min(self._ring.published, self.next + most)):
            block = self._ring.seen(number)
            if block is None:
                raise OverrunError(f"block {number} was written over before it was read")
            yield block
            if self._ring.seen(number) is None:
                raise OverrunError(f"block {number} was written over while it was read")
            self.next = number + 1

    def done(self) -> None:
        """Let the writer have the blocks that were read."""
        self._ring.keep_for(self._place, max(self.next, self._ring.place_of(self._place)))
