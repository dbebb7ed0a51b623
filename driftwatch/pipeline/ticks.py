"""Ticks for the time in which no samples come."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from driftwatch.records import NS, Block, Tick, sample_time_ns


def with_ticks(blocks: Iterable[Block], rate_hz: int) -> Iterator[Block | Tick]:
    """Yield the blocks, and in each gap between two of them a tick a second.

    A gap of hours is ticked every minute after its first hour and every hour after its first day: whatever waits
    for a delay has long ended, and a gap of years must not take minutes.
    """
    end: int | None = None
    for block in blocks:
        if end is not None and block.first_sample > end:
            start_ns = block.time_ns - sample_time_ns(0, block.first_sample, rate_hz)
            for time_ns in Ticker().before(block.time_ns, sample_time_ns(start_ns, end, rate_hz)):
                yield Tick(time_ns, block.cause)
        end = block.first_sample + len(block.samples)
        yield block
        del block  # it may be large: the next one is read only now


class Ticker:
    """The times of the ticks of a silence, each told once, also when it is asked as the silence goes on."""

    def __init__(self) -> None:
        self._times: Iterator[int] | None = None
        self._next = 0

    def before(self, until_ns: int, since_ns: int) -> Iterator[int]:
        """Yield the stream times of the ticks that are due before `until_ns` and were not told yet.

        The silence began at `since_ns`; what is said of that after its first tick is not looked at.
        """
        if self._times is None:
            self._times = _tick_times(since_ns)
            self._next = next(self._times)
        while self._next < until_ns:
            told, self._next = self._next, next(self._times)
            yield told

    def silence_ends(self) -> None:
        """Let the next tick belong to another silence."""
        self._times = None


def _tick_times(from_ns: int) -> Iterator[int]:
    """Yield the stream times of the ticks of a silence that began at `from_ns`, without end."""
    now_ns = from_ns + NS
    while True:
        yield now_ns
        silent_s = (now_ns - from_ns) // NS
        now_ns += NS if silent_s < 3600 else 60 * NS if silent_s < 86_400 else 3600 * NS
