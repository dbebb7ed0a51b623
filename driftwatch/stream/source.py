"""What every source of samples looks like, and how samples fail to come or to be kept.

::

    StreamError
    ├── SourceRefusedError   before anything starts: what was asked for cannot be read
    ├── SourceFailedError    in the midst: what was being read stopped
    └── NotWrittenError      a recording could not be written
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Protocol

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from driftwatch.records import Block, TimeQuality


class StreamError(Exception):
    """Samples cannot be had or kept; the text says what came, what was expected, and what to do."""


class SourceRefusedError(StreamError):
    """Nothing was started: one line for each thing that is wrong.

    Parameters
    ----------
    problems : sequence of str
        What came, what was expected, what to do; at least one.
    """

    def __init__(self, problems: Sequence[str]) -> None:
        super().__init__("\n".join(problems))
        self.problems = tuple(problems)


class SourceFailedError(StreamError):
    """Reading stopped in the midst; what was delivered before stands."""


class NotWrittenError(StreamError):
    """A recording could not be written; nothing is left of it."""


class SourceFacts(Protocol):
    """What is known of a source before its first sample."""

    @property
    def name(self) -> str:
        """What the configuration calls it."""
        ...

    @property
    def rate_hz(self) -> int:
        """Nominal sample rate, Hz."""
        ...

    @property
    def inputs(self) -> int:
        """How many columns a block has."""
        ...

    @property
    def start_ns(self) -> int:
        """Stream time of sample 0, UTC nanoseconds."""
        ...

    @property
    def first_sample(self) -> int:
        """Stream index of the first sample there is: 0, except where a recording holds the end of a longer stream."""
        ...

    @property
    def time_quality(self) -> TimeQuality:
        """How far `start_ns` can be trusted."""
        ...

    @property
    def sources(self) -> tuple[str, ...]:
        """What is read, for the run's record: devices, files."""
        ...

    @property
    def assumed(self) -> tuple[str, ...]:
        """What was not known and is taken for granted, in words."""
        ...

    @property
    def warnings(self) -> tuple[str, ...]:
        """What a person should be told before the start, one line each."""
        ...

    @property
    def length(self) -> int | None:
        """Samples expected in all, gaps included; None: no end is known."""
        ...


class Source(SourceFacts, Protocol):
    """Samples from somewhere, as one ordered stream of blocks.

    Nothing here waits for real time: whoever wants a pace keeps it.
    """

    def blocks(self, frames: int) -> Iterator[Block]:
        """Yield the stream from its begin in blocks of at most `frames` samples.

        Parameters
        ----------
        frames : int
            Most samples a block may hold, at least 1.

        Yields
        ------
        Block
            ``samples`` is float32 of shape (n, inputs), 1 <= n <= `frames`, and belongs to the receiver alone.
            A jump of ``first_sample`` is a gap. Closing the iterator closes what it holds open.

        Raises
        ------
        SourceFailedError
            When reading stops before its time.
        """
        ...
