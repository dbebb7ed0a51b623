"""From numbered blocks with arrival times to stream indices; finds the losses that no flag tells.

The *lag* of a block is its arrival less the instant at which its last sample was due by count. Jitter, bursts and a
busy computer only ever raise it for a while: its lower edge, the *floor*, stays while nothing is lost, and rises for
good by the length of what is lost. A block close to the floor is kept at once. One that is late is *held*:

* the lag comes back: nothing was lost, all that is held is kept;
* the smallest lag settles at a higher level (`SETTLE_NS`): so much was lost. Held blocks up to where the new level was
  first reached are thrown away, since the hole lies somewhere among them; later ones get their index by the clock;
* the device flagged a loss: held likewise until the lag tells how much is missing; where it tells nothing, the flagged
  block alone is thrown away.

What this can and cannot see, with blocks of `block` seconds:

* A loss longer than ``max(THRESHOLD_BLOCKS block, THRESHOLD_NS)`` above the floor is found: two blocks of 20 ms, three
  of 10 ms. What is shorter goes into the floor within `FLOOR_NS`: it stays untold, and later samples are late by it.
* Its length is right within a block. Where the lag is steady it is right within a few ms; where blocks are cut from
  periods of another length, the lag is a sawtooth as high as a block and seconds long (measured on a sound server:
  20 ms in 2 to 4 s), and half a second shows only a part of it. What a gap was too long by is seen afterwards
  (`_learn_ahead`) and left out of the next one, so that errors do not add up.
* Where delays do not come in step with the blocks, a false gap needs all of `SETTLE_NS`, 25 blocks of 20 ms, late by
  more than the threshold: for exponential delays of mean 10 ms a probability of exp(-75). Delays of single callbacks,
  however long, end in a burst that comes back to the floor. What would do it is a delay that the device adds for good.
* A clock that is slow by 300 ppm lifts the floor by 3 ms in `FLOOR_NS`, a tenth of the threshold, before its rate is
  known (half a minute) and the lag is reckoned with it.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from driftwatch.records import NS, Fault
from driftwatch.stream.clock import RateEstimate
from driftwatch.stream.quarantine import FLOOR_NS, TOLERANCE_NS, Arrival, Floor, Held

if TYPE_CHECKING:
    from collections.abc import Iterable

THRESHOLD_BLOCKS = 1.5
"""Where blocks are cut from the device's own periods of another length, the lag is a sawtooth as high as a block."""

THRESHOLD_NS = 25_000_000
"""Lag above the floor at which a block is held, where blocks are shorter than 17 ms: more than usual jitter."""

MOST_DRIFT_NS = FLOOR_NS * 300 // 1_000_000
"""How far a clock off by 300 ppm moves the lag in that time."""

START_NS = NS
"""In the first second of the first stream the device may still be filling its buffers ..."""

START_SLACK_NS = 300_000_000
"""... and a rise of the lag by up to this is no loss."""

HELD_S = 30.0
"""So many seconds of blocks are held at most, if not told otherwise; then the oldest are thrown away."""

_TRUSTED_PPM = 100.0  # a rate known to this is better than the nominal one of a card sold with 300 ppm


@dataclass(frozen=True, slots=True)
class Placed:
    """A block that was decided."""

    number: int  # as it came
    first_sample: int | None  # stream index; None: thrown away, its place in time is doubtful
    cause: Fault | None  # on the first block kept behind a gap, and only there: why samples are missing


class ArrivalJudge:
    """Gives each block of a source its place in the stream, or throws it away.

    Call `opened`, then `came` and `dropped` as blocks arrive, then `ended`, and so on. Every block comes back exactly
    once, in order. An undelayed block is taken to arrive when its last sample is taken: how long device and driver
    need is not known here.

    Parameters
    ----------
    rate_hz : int
        Nominal rate, Hz.
    block_frames : int
        Samples in a usual block.
    most_held : int, optional
        Most blocks held; `HELD_S` seconds of them if left out. Give less where fewer can be stored, but two seconds.
    """

    def __init__(self, rate_hz: int, block_frames: int, most_held: int | None = None) -> None:
        block_ns = block_frames * NS // rate_hz
        self.rate = RateEstimate(rate_hz)
        self._rate_hz = rate_hz
        self._most_held = int(HELD_S * rate_hz / block_frames) + 1 if most_held is None else most_held
        self._measurable_ns = max(TOLERANCE_NS, block_ns)
        self._threshold_ns = max(THRESHOLD_NS, int(THRESHOLD_BLOCKS * block_ns))
        self._held = Held(block_ns)
        self._floor = Floor()
        self._deviation = 0.0  # relative, as the lag is reckoned with
        self._ahead_ns = 0  # by so much indices are ahead of the clock since the last gap: a level measured too high
        self._reference_ns: int | None = None  # where the lag would be if not, until this is known
        self._reference_until_ns: int | None = None
        self._index = 0  # behind the last sample decided
        self._due_ns = 0  # when it was due to arrive, without the floor
        self._head_ns = 0  # the same for the last sample that came
        self._told = 0  # behind the last sample kept
        self._cause: Fault | None = None  # of the gap that the next block kept may end
        self._open = self._placing = False
        self._number = -1  # of the last block
        self._last_ns: int | None = None  # last arrival in this stream
        self._fresh_until_ns: int | None = None

    # ------------------------------------------------------------------------------------------ the stream's life

    def begin_at(self, index: int, monotonic_ns: int, deviation: float = 0.0) -> None:
        """Tie an instant to a stream index before the first stream: its samples come behind a gap since then.

        `deviation` is the true rate's from the nominal one, relative, as far as somebody knew it before.
        """
        if self._floor.level_ns is not None:
            raise ValueError("the stream has begun already; expected begin_at() before the first block")
        self._index = self._told = index
        self._deviation = deviation
        self._due_ns = self._head_ns = monotonic_ns
        self._floor.level_ns = self._reference_ns = 0

    def opened(self, reason: Fault) -> list[Placed]:
        """Take in that a device's stream begins, the first or another; `reason` is why there is a gap before it.

        Returns
        -------
        list of Placed
            What was held of a stream that nobody ended, thrown away.
        """
        thrown = self.ended(reason)
        self._open, self._cause = True, reason
        self._placing = self._floor.level_ns is not None
        self._last_ns = self._fresh_until_ns = None
        return thrown

    def ended(self, reason: Fault) -> list[Placed]:
        """Take in that the stream ended and why; what is held is thrown away."""
        self._blame(reason)
        thrown = self._throw(self._held.arrivals)
        self._held.clear()
        self._head_ns = self._due_ns
        self.rate.gap()
        self._open = False
        return thrown

    # ------------------------------------------------------------------------------------------ blocks

    def came(self, number: int, frames: int, arrived_ns: int, flagged: bool) -> list[Placed]:
        """Take in a block, and return all that are decided by now, in order.

        Parameters
        ----------
        number : int
            Rises from block to block, over all streams.
        frames : int
            Samples in it.
        arrived_ns : int
            Monotonic time of the callback.
        flagged : bool
            The device said that samples were lost before or in this block.

        Raises
        ------
        ValueError
            For a number that does not rise, and for a block of no open stream.
        """
        if number <= self._number:
            raise ValueError(f"block {number} came after block {self._number}; expected numbers that rise")
        self._number = number
        return self._arrived(number, frames, arrived_ns, flagged)

    def dropped(self, frames: int, arrived_ns: int, flagged: bool = False) -> list[Placed]:
        """Take in that so many samples came and could not be kept: they count, and the gap is exact."""
        return self._arrived(None, frames, arrived_ns, flagged)

    def _arrived(self, number: int | None, frames: int, arrived_ns: int, flagged: bool) -> list[Placed]:
        if not self._open:
            raise ValueError(f"block {number} came while no stream is open; expected opened() before it")
        self._head_ns += self._length_ns(frames)
        arrival = Arrival(number, frames, arrived_ns, arrived_ns - self._head_ns, flagged)
        silence_ns = 0 if self._last_ns is None else arrived_ns - self._last_ns
        self._last_ns = arrived_ns
        if self._floor.level_ns is None:  # the very first
            self._fresh_until_ns = arrived_ns + START_NS
            self._floor.level_ns = arrival.lag_ns
        placed = self._judge(arrival, silence_ns)
        if not self._held.arrivals:
            self._head_ns = self._due_ns
        return placed

    def _judge(self, arrival: Arrival, silence_ns: int) -> list[Placed]:
        late = arrival.lag_ns > self._floor_ns() + self._threshold_ns
        if not (self._held.arrivals or late or arrival.flagged or self._placing):
            return self._keep((arrival,))
        self._held.add(arrival, silence_ns)
        if not (late or self._held.flagged or self._placing):
            return self._release()
        level_ns = self._held.settled_ns()
        return self._overfull() if level_ns is None else self._resolve(level_ns)

    def _release(self) -> list[Placed]:
        """Nothing was lost: keep all that is held."""
        kept = self._keep(self._held.arrivals)
        self._held.clear()
        return kept

    def _resolve(self, level_ns: int) -> list[Placed]:
        """Decide what is held now that its lag stands at `level_ns`."""
        held = self._held
        arrivals = tuple(held.arrivals)
        excess_ns = level_ns - self._floor_ns()
        reached = held.doubtful(level_ns)
        if self._placing:  # the hole ended before the first block
            self._placing = False
        elif held.flagged and excess_ns <= self._measurable_ns:
            return self._keep_unflagged(arrivals)
        elif not held.flagged and excess_ns <= START_SLACK_NS and self._is_fresh(arrivals[0]):
            self._floor.level_ns = level_ns
            self._floor.restart()
            self.rate.gap()
            return self._release()
        else:
            # The hole may end inside the block at which the level was reached. That block may also be one from before
            # the hole, late by chance or the last of a buffer that was emptied: then the hole lies in the next.
            self._blame(held.cause)
            reached = max(reached, held.last_flagged() + 1) if held.flagged else reached + 2
        held.clear()
        placed = self._throw(arrivals[:reached])
        self._skip(level_ns)
        return placed + self._keep(arrivals[reached:])

    def _keep_unflagged(self, arrivals: tuple[Arrival, ...]) -> list[Placed]:
        """The device flagged losses that the lag cannot measure: throw away only what it flagged."""
        self._held.clear()
        placed = []
        for arrival in arrivals:
            if arrival.flagged:
                self._blame(Fault.OVERFLOW)
                self.rate.gap()
            placed += self._throw((arrival,)) if arrival.flagged else self._keep((arrival,))
        return placed

    def _overfull(self) -> list[Placed]:
        """Throw away the oldest of what is held where it is too much."""
        placed = []
        while len(self._held.arrivals) > self._most_held:
            self._blame(self._held.cause)
            placed += self._throw((self._held.arrivals.popleft(),))
        return placed

    def _is_fresh(self, arrival: Arrival) -> bool:
        return self._fresh_until_ns is not None and arrival.arrived_ns <= self._fresh_until_ns

    # ------------------------------------------------------------------------------------------ counting

    def _keep(self, arrivals: Iterable[Arrival]) -> list[Placed]:
        placed = []
        for arrival in arrivals:
            first = self._index
            self._advance(arrival.frames)
            self._floor.add(arrival.arrived_ns, arrival.arrived_ns - self._due_ns)
            self._learn_ahead(arrival.arrived_ns)
            self.rate.count(self._index, arrival.arrived_ns)
            if arrival.number is None:
                self._blame(Fault.SLOW_CONSUMER)
                continue
            placed.append(Placed(arrival.number, first, self._cause if first > self._told else None))
            self._told, self._cause = self._index, None
        std = self.rate.deviation_std_ppm
        if std is not None and std < _TRUSTED_PPM:
            self._deviation = (self.rate.deviation_ppm or 0.0) * 1e-6
        return placed

    def _throw(self, arrivals: Iterable[Arrival]) -> list[Placed]:
        placed = []
        for arrival in arrivals:
            self._advance(arrival.frames)
            if arrival.number is not None:
                placed.append(Placed(arrival.number, None, None))
        return placed

    def _skip(self, level_ns: int) -> None:
        """Advance by what was lost, so that the lag falls from `level_ns` to where it was when the index was right."""
        self._reference_ns = self._level_ns()
        lost = self._frames_in(max(0, level_ns - self._reference_ns))
        self._advance(lost)
        self._floor.level_ns = level_ns - self._length_ns(lost)
        self._floor.restart()
        self._reference_until_ns = None
        self.rate.gap()

    def _learn_ahead(self, arrived_ns: int) -> None:
        """See by how much the index is ahead since the last gap, once the floor is known again."""
        if self._reference_ns is None:
            return
        if self._reference_until_ns is None:
            self._reference_until_ns = arrived_ns + FLOOR_NS
        if arrived_ns >= self._reference_until_ns:
            ahead_ns = self._reference_ns - self._floor_ns()
            drifted = not self._deviation and abs(ahead_ns) <= MOST_DRIFT_NS  # a rate not known yet explains it
            self._ahead_ns = 0 if drifted else ahead_ns
            self._reference_ns = self._reference_until_ns = None

    def _advance(self, frames: int) -> None:
        self._index += frames
        self._due_ns += self._length_ns(frames)

    def _blame(self, cause: Fault) -> None:
        """Remember why samples are missing; of several causes the first is told."""
        if self._cause is None:
            self._cause = cause

    def _length_ns(self, frames: int) -> int:
        nominal = frames * NS // self._rate_hz
        return nominal - round(nominal * self._deviation / (1.0 + self._deviation))

    def _frames_in(self, length_ns: int) -> int:
        return (length_ns + round(length_ns * self._deviation)) * self._rate_hz // NS

    # ------------------------------------------------------------------------------------------ what stands

    @property
    def next_index(self) -> int:
        """Stream index behind the last sample that was decided."""
        return self._index

    @property
    def deviation(self) -> float:
        """Deviation of the true rate from the nominal one, relative, as gaps are reckoned with."""
        return self._deviation

    @property
    def held(self) -> int:
        """How many blocks wait for their decision."""
        return len(self._held.arrivals)

    def expected_index(self, monotonic_ns: int) -> int:
        """Return the stream index that belongs to an instant, by the best known rate.

        It may lie a little before `next_index`, by the jitter; whoever needs order takes the later one.

        Raises
        ------
        ValueError
            Before the first block, where `begin_at` was not called.
        """
        return self._index + self._frames_in(monotonic_ns - self._due_ns - self._level_ns())

    def instant_ns(self, index: int) -> int:
        """Return the monotonic instant that belongs to a stream index: the inverse of `expected_index`."""
        return self._due_ns + self._level_ns() + self._length_ns(index - self._index)

    def _level_ns(self) -> int:
        """Return the lag of an undelayed block whose index is right."""
        floor_ns = self._floor_ns()
        return floor_ns + self._ahead_ns if self._reference_ns is None else self._reference_ns

    def _floor_ns(self) -> int:
        if self._floor.level_ns is None:
            raise ValueError("no instant is tied to an index yet; expected begin_at() or a first block before")
        return self._floor.level_ns
