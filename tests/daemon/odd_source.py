"""A source that the simulated one cannot be: with gaps, or a failure at its end. The daemon's processes import it."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from driftwatch.records import Block, Fault, TimeQuality, sample_time_ns
from driftwatch.stream.source import SourceFailedError
from two_channels import RATE, START_NS


@dataclass(frozen=True)
class OddSource:
    """Noise of so many seconds on each of two inputs, after which it ends or fails."""

    seconds: float = 3.0
    gap_at_s: float | None = None  # from where on `gap_s` are missing
    gap_s: float = 5.0
    cause: Fault = Fault.OVERFLOW
    fails: bool = False
    name: str = "card"
    rate_hz: int = RATE
    inputs: int = 2
    start_ns: int = START_NS
    time_quality: TimeQuality = TimeQuality.FREE
    sources: tuple[str, ...] = ("card",)
    assumed: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()
    length: int | None = None
    first_sample: int = 0

    def blocks(self, frames: int) -> Iterator[Block]:
        """Yield the same samples however they are cut."""
        count = round(self.seconds * RATE)
        samples = np.random.default_rng(0).standard_normal((count, 2)).astype(np.float32)
        gap_at = count if self.gap_at_s is None else round(self.gap_at_s * RATE)
        for begin, end, missing in ((0, gap_at, 0), (gap_at, count, round(self.gap_s * RATE))):
            for first in range(begin, end, frames):
                index = first + missing
                cause = self.cause if first == begin else Fault.GAP
                time_ns = sample_time_ns(START_NS, index, RATE)
                yield Block(self.name, index, time_ns, samples[first : min(first + frames, end)], cause)
        if self.fails:
            raise SourceFailedError("the card was pulled out")
