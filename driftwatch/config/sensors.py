"""What a sensor, as it is mounted, is usable for against what is searched for on its channel."""

from __future__ import annotations

from driftwatch.config.models import ChannelConfig, Configuration
from driftwatch.config.modes import ModeConfig
from driftwatch.config.values import Span


def sensor_remarks(config: Configuration) -> list[str]:
    """Return one line for each mode whose search band leaves what its sensor is usable for, in the file's order.

    A remark and no problem: a resonance outside can often be followed, but its level is not right, and near the
    mounting's own resonance that is what is followed.
    """
    channels = {channel.name: channel for channel in config.channel}
    found = (_remark(mode, channels[mode.channel]) for mode in config.mode)
    return [line for line in found if line is not None]


def _remark(mode: ModeConfig, channel: ChannelConfig) -> str | None:
    usable, search = channel.sensor.usable_hz, mode.search_hz
    where = _outside(search, usable) if usable is not None else ""
    if usable is None or not where:
        return None
    mounting = f" (mounting: {channel.sensor.mounting})" if channel.sensor.mounting else ""
    return (
        f'mode "{mode.name}": search_hz leaves what the sensor on "{channel.name}"{mounting} is usable for, '
        f"{usable.low:g} to {usable.high:g} Hz, {where}; figures from there are doubtful: "
        "take another sensor or mounting, or correct one of the two ranges"
    )


def _outside(search: Span, usable: Span) -> str:
    """Return where a search band leaves a usable range; empty: nowhere."""
    if search.high <= usable.low or search.low >= usable.high:
        return f"altogether, from {search.low:g} to {search.high:g} Hz"
    if search.low < usable.low and search.high > usable.high:
        return f"at both ends, {search.low:g} and {search.high:g} Hz"
    if search.low < usable.low:
        return f"at its lower end, {search.low:g} Hz"
    return f"at its upper end, {search.high:g} Hz" if search.high > usable.high else ""
