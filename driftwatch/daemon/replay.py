"""The replay: recordings through the same pipeline as the live run, as fast as it can."""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence

from driftwatch.daemon.keeper import Keeper
from driftwatch.pipeline.commands import with_commands
from driftwatch.pipeline.station import Station
from driftwatch.pipeline.ticks import with_ticks
from driftwatch.records import Block, Command
from driftwatch.stream.source import Source, StreamError

BLOCK_S = 120.0
"""Samples handed to the pipeline at a time, seconds: longer saves little, and memory grows with it."""

BLOCK_VALUES = 6_000_000
"""Most values in a block, over all inputs."""


def block_frames(rate_hz: int, inputs: int) -> int:
    """Return how many samples a replay reads at a time."""
    return max(1, min(round(BLOCK_S * rate_hz), BLOCK_VALUES // inputs))


def replay(
    source: Source,
    station: Station,
    keeper: Keeper,
    progress: Callable[[int], None] = lambda _: None,
    stopped: Callable[[], bool] = lambda: False,
    commands: Sequence[Command] = (),
) -> bool:
    """Send a source through a station to the end, and commit everything; return whether it was read to its end.

    Parameters
    ----------
    source, station, keeper
        Where samples come from, what is made of them, and where it goes.
    progress
        Called with the stream index reached.
    stopped
        Asked between blocks; True ends the replay in good order.
    commands
        What was asked for at the time, in order; it is done again where it was done then.

    Raises
    ------
    StreamError
        When reading fails in the midst; what was read is stored first.
    CommitError
        When the store fails.
    """
    keeper.take(station.begin())
    try:
        ended = _feed(source, station, keeper, progress, stopped, commands)
    except StreamError as error:
        keeper.take(station.finish(f"failed: {error}"))
        keeper.flush()
        raise
    keeper.take(station.finish("the recordings ended" if ended else "interrupted"))
    keeper.flush()
    return ended


def _feed(
    source: Source,
    station: Station,
    keeper: Keeper,
    progress: Callable[[int], None],
    stopped: Callable[[], bool],
    commands: Sequence[Command],
) -> bool:
    items = with_ticks(source.blocks(block_frames(source.rate_hz, source.inputs)), source.rate_hz)
    for item in with_commands(items, commands, source.rate_hz):
        if stopped():
            return False
        keeper.take(station.feed(item))
        keeper.flush_due(time.monotonic())
        if isinstance(item, Block):
            progress(item.first_sample + len(item.samples))
        del item  # a block may be large: the next one is read only now
    return True
