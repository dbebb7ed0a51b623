"""How the channels of a source are shared out among workers."""

from __future__ import annotations

from typing import TYPE_CHECKING

from driftwatch.pipeline.group import measured_channels

if TYPE_CHECKING:
    from driftwatch.config import Configuration


def shares_of(config: Configuration, source: str, workers: int) -> list[tuple[str, ...]]:
    """Return the names of the channels that each worker measures: in file order, with about as many modes each."""
    channels = [channel.name for channel in measured_channels(config, source, only=True)]
    weights = [sum(mode.channel == name for mode in config.mode) for name in channels]
    count = min(workers, len(channels))
    shares: list[list[str]] = [[] for _ in range(count)]
    total, done = sum(weights), 0
    for place, (name, weight) in enumerate(zip(channels, weights, strict=True)):
        by_weight = int((done + weight / 2) * count / total)
        least = max(0, count - (len(channels) - place))  # the last ones need a channel each, too
        filled = next((index for index, share in enumerate(shares) if not share), count)
        shares[max(least, min(by_weight, filled))].append(name)
        done += weight
    return [tuple(share) for share in shares]
