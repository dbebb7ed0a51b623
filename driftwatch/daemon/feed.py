"""What a live run reads, and how: each kind of source as one shape of thing."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any, Protocol

from driftwatch.daemon.messages import LiveSource, ReadCard, ReadSource
from driftwatch.stream.ring import Ring, Shape
from driftwatch.stream.source import SourceRefusedError

if TYPE_CHECKING:
    from driftwatch.config import SoundcardSourceConfig
    from driftwatch.records import Fault
    from driftwatch.stream.source import Source

BLOCK_S = 0.1
"""Samples that a source with a pace hands over at a time, seconds: that adds little to the latency."""

LONGEST_BLOCK_S = 1.0
"""The same for one that is read faster than in real time: there it saves time."""

LEAST_WAITING = 8
"""Blocks that may wait at least, however long they are."""


class Feed(Protocol):
    """What a live run reads."""

    @property
    def name(self) -> str:
        """What the configuration calls the source."""
        ...

    @property
    def known(self) -> LiveSource | None:
        """What is known of the source before it is read; None: only the device knows."""
        ...

    def make_ring(self) -> Ring:
        """Make the memory that its blocks go through.

        Raises
        ------
        SourceRefusedError
            When there is not enough.
        """
        ...

    def order(self, begun: LiveSource | None, cause: Fault) -> Any:
        """Return what the capturing process is to do.

        Parameters
        ----------
        begun
            What an earlier process told; None: there was none, or it told nothing.
        cause
            Why the earlier process ended.
        """
        ...


class CardFeed:
    """A sound card."""

    def __init__(self, source: SoundcardSourceConfig, needed_inputs: int, queue_s: float) -> None:
        self.name = source.name
        self.known = None
        self._source = source
        self._least = source.inputs or needed_inputs
        self._inputs = source.opened_inputs(needed_inputs)
        self._queue_s = queue_s

    def make_ring(self) -> Ring:
        """Make the memory that its blocks go through."""
        return _ring(self._source.rate_hz, self._inputs, self._source.block_s, self._queue_s)

    def order(self, begun: LiveSource | None, cause: Fault) -> ReadCard:
        """Return what the capturing process is to do."""
        if begun is None:
            return ReadCard(self._source, self._least)
        return ReadCard(self._source, self._least, begun.start_ns, cause)


class PacedFeed:
    """A recording or a simulation, at a pace."""

    def __init__(self, source: Source, pace: float, queue_s: float) -> None:
        self.name = source.name
        self.known = LiveSource(
            name=source.name,
            rate_hz=source.rate_hz,
            inputs=source.inputs,
            start_ns=source.start_ns,
            time_quality=source.time_quality,
            sources=source.sources,
            assumed=source.assumed,
            first_sample=source.first_sample,
        )
        self._source = source
        self._pace = pace
        self._queue_s = queue_s

    def make_ring(self) -> Ring:
        """Make the memory that its blocks go through."""
        block_s = min(LONGEST_BLOCK_S, BLOCK_S * max(1.0, self._pace)) if self._pace else LONGEST_BLOCK_S
        return _ring(self._source.rate_hz, self._source.inputs, block_s, self._queue_s)

    def order(self, begun: LiveSource | None, cause: Fault) -> ReadSource:  # noqa: ARG002 - a `Feed`
        """Return what the capturing process is to do."""
        return ReadSource(self._source, self._pace)


def _ring(rate_hz: int, inputs: int, block_s: float, queue_s: float) -> Ring:
    """Return a ring in which so many seconds may wait; half as many are kept after they were read."""
    frames = max(1, round(block_s * rate_hz))
    waiting = max(LEAST_WAITING, math.ceil(queue_s * rate_hz / frames))
    shape = Shape(rate_hz, inputs, frames, waiting + max(LEAST_WAITING, waiting // 2), waiting)
    try:
        return Ring.create(shape)
    except OSError as error:
        raise SourceRefusedError(
            [
                f"no memory for {queue_s:g} s of samples ({shape.size / 1e6:.0f} MB: {error.strerror or error}); "
                "expected that much; lower [daemon] queue_s"
            ]
        ) from error
