"""The channels of a source that are measured together: blocks in, readings out, with no memory of what was read.

A reading is a function of the samples and the configuration alone, so that channels may be shared out among processes
in any way, and one that died may begin again a little way back.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import TYPE_CHECKING

from driftwatch.pipeline.channel import ChannelLine
from driftwatch.pipeline.reading import Reading

if TYPE_CHECKING:
    from driftwatch.config import ChannelConfig, Configuration
    from driftwatch.records import Block
    from driftwatch.stream.source import SourceFacts


class ChannelGroup:
    """What measures some channels of one source.

    Parameters
    ----------
    config
        The configuration.
    source
        What feeds the channels.
    channels
        Names of those that are measured here; each has modes.
    first_sample
        Stream index of the first sample to come; left out: the source's.

    Raises
    ------
    ValueError
        When a search band does not fit the sample rate.
    """

    def __init__(
        self, config: Configuration, source: SourceFacts, channels: Iterable[str], first_sample: int | None = None
    ) -> None:
        wanted = set(channels)
        first = source.first_sample if first_sample is None else first_sample
        self.lines = [
            ChannelLine(
                channel,
                [mode for mode in config.mode if mode.channel == channel.name],
                source.rate_hz,
                source.start_ns,
                first,
            )
            for channel in config.channel
            if channel.name in wanted
        ]

    @property
    def late(self) -> int:
        """Most samples from the end of a window to its result."""
        return max((line.late for line in self.lines), default=0)

    @property
    def memory(self) -> int:
        """Samples before the next one that may still bear on what is measured."""
        return max((line.memory for line in self.lines), default=0)

    def push(self, block: Block) -> list[Reading]:
        """Take a block in and return what it makes known, channel by channel.

        Raises
        ------
        ValueError
            When the block lies before one that came already.
        """
        return [reading for line in self.lines for reading in line.push(block.first_sample, block.samples)]

    def finish(self) -> list[Reading]:
        """Return what the last samples still make known."""
        return [reading for line in self.lines for reading in line.finish()]


def measured_channels(config: Configuration, source: str, *, only: bool) -> list[ChannelConfig]:
    """Return the channels that a source, by its name, feeds and that have modes, in file order.

    With `only` the source is the only one and also feeds the channels that name none.
    """
    with_modes = {mode.channel for mode in config.mode}
    return [
        channel
        for channel in config.channel
        if channel.name in with_modes and (channel.source == source or (only and channel.source is None))
    ]
