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
            for now_ns in tick_times(sample_time_ns(start_ns, end, rate_hz)):
                if now_ns >= block.time_ns:
                    break
                yield Tick(now_ns, block.cause)
        end = block.first_sample + len(block.samples)
        yield block
        del block  # it may be large: the next one is read only now


def tick_times(from_ns: int) -> Iterator[int]:
    """Yield the stream times of the ticks of a silence that began at `from_ns`, without end."""
    now_ns = from_ns + NS
    while True:
        yield now_ns
        silent_s = (now_ns - from_ns) // NS
        now_ns += NS if silent_s < 3600 else 60 * NS if silent_s < 86_400 else 3600 * NS
