"""What a configuration may expect: its real windows, its latency, and what the windows can resolve at best.

The bounds are Au's law for random response over a known weak floor and the Cramer-Rao bound of a decay, for a resonance
as the configuration suggests it: in the middle of its frequency band, with the Qs that its bands name, or else with a
few that its windows can tell.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from driftwatch.measure.ambient import NARROWEST, WIDEST
from driftwatch.measure.limits import ambient_law
from driftwatch.measure.limits_decay import full_decay, record_factor
from driftwatch.pipeline.channel import zoom_of
from driftwatch.pipeline.mode_line import ModeLine
from driftwatch.records import Method

if TYPE_CHECKING:
    from driftwatch.config import BandConfig, ChannelConfig, Configuration, ModeConfig, SourceConfig

DECAY_OVER_NOISE = 100.0
"""Amplitude at which a decay is taken to begin, over the noise's rms in the search band: 40 dB."""

_SERIES = tuple(step * 10.0**decade for decade in range(6) for step in (1.0, 2.0, 5.0))


@dataclass(frozen=True, slots=True)
class Resolution:
    """What one window or one decay can tell of a resonance at best: smallest standard uncertainties."""

    method: Method
    frequency_hz: float  # the resonance supposed
    q: float
    frequency_std_hz: float
    q_std: float


@dataclass(frozen=True, slots=True)
class ModeOutlook:
    """What to expect of one mode."""

    channel: str
    mode: str
    rate_hz: int | None  # of the channel; None: only a recording knows it, and the next three
    window_samples: int | None  # as the zoom's grid allows it
    step_samples: int | None
    latency_s: (
        float | None
    )  # longest wait for samples from a window's end to its figures, a sound card's block included
    q_range: tuple[float, float] | None  # Qs that an ambient window can tell; None: not followed by ambient
    resolutions: tuple[Resolution, ...]


def outlooks(config: Configuration) -> Iterator[ModeOutlook]:
    """Yield what to expect of each mode, in the file's order."""
    for mode in config.mode:
        channel = next(channel for channel in config.channel if channel.name == mode.channel)
        siblings = [other for other in config.mode if other.channel == mode.channel]
        yield _outlook(config, channel, mode, siblings)


def _outlook(
    config: Configuration, channel: ChannelConfig, mode: ModeConfig, siblings: Sequence[ModeConfig]
) -> ModeOutlook:
    from driftwatch.config import rate_of

    rate_hz = rate_of(config, channel)
    window = step = latency_s = None
    if rate_hz is not None:
        zoom = zoom_of(channel, siblings, rate_hz)
        number = siblings.index(mode)
        band = zoom.bands[number]
        window, step = band.window * band.decimation, band.step * band.decimation
        latency_s = ModeLine(channel, mode, zoom, number, 0).late / rate_hz + _block_s(config, channel)
    return ModeOutlook(
        channel=channel.name,
        mode=mode.name,
        rate_hz=rate_hz,
        window_samples=window,
        step_samples=step,
        latency_s=latency_s,
        q_range=q_range(mode) if Method.AMBIENT in mode.methods else None,
        resolutions=tuple(_resolutions(mode)),
    )


def _block_s(config: Configuration, channel: ChannelConfig) -> float:
    """Return how long a sample may wait in a sound card's block, seconds; 0 where there is none."""
    source = config.source_of(channel)
    return source.block_s if source is not None and source.kind == "soundcard" else 0.0


def expected_frequency(mode: ModeConfig) -> float:
    """Return where the resonance is supposed: the middle of its first closed frequency band, or of the search band."""
    for band in _absolute(mode, "frequency"):
        if band.low is not None and band.high is not None:
            return 0.5 * (band.low + band.high)
    return 0.5 * (mode.search_hz.low + mode.search_hz.high)


def q_range(mode: ModeConfig) -> tuple[float, float]:
    """Return the Qs between which a resonance is neither too wide for its search band nor too narrow for a window."""
    frequency_hz = expected_frequency(mode)
    return frequency_hz / (WIDEST * mode.search_hz.width), frequency_hz * mode.window_s / NARROWEST


def expected_qs(mode: ModeConfig) -> list[float]:
    """Return the Qs to suppose: the limits that bands put on Q, or a few that a window can resolve."""
    named = {limit for band in _absolute(mode, "q") for limit in (band.low, band.high) if limit is not None}
    if named:
        return sorted(named)
    lowest, highest = q_range(mode)
    good = [q for q in _SERIES if 2.0 * lowest <= q <= highest / 4.0]
    if not good:
        return [math.sqrt(max(lowest, 1.0) * highest)]
    return sorted({good[0], good[len(good) // 2], good[-1]})


def _absolute(mode: ModeConfig, quantity: str) -> Iterator[BandConfig]:
    return (band for band in mode.band if band.quantity == quantity and band.limits == "absolute")


# ---------------------------------------------------------------------------------------------- raw recording


@dataclass(frozen=True, slots=True)
class RecordingOutlook:
    """What the raw recorder needs."""

    inputs: int
    gb_per_hour: float  # 1e9 bytes
    hours: float  # what it keeps: keep_hours, or what most_gb holds if that is less


def opened_inputs(config: Configuration, source: SourceConfig) -> int | None:
    """Return how many inputs of a source are opened, if the device has them; None: only the recording knows."""
    if source.kind == "recording":
        return None
    if source.kind == "soundcard":
        used = (channel.input for channel in config.channel if channel.source == source.name)
        return source.opened_inputs(max(used, default=1))
    return source.inputs


def recording_outlook(config: Configuration) -> RecordingOutlook | None:
    """Return what the raw recorder needs; None where nothing is recorded, or rate or inputs are not known."""
    if config.record.keep_hours <= 0 or len(config.source) != 1:
        return None
    (source,) = config.source
    inputs = opened_inputs(config, source)
    if inputs is None or source.kind == "recording" or source.rate_hz is None:
        return None
    width = 2 if source.kind == "soundcard" and source.sample_format == "int16" else 4
    gb_per_hour = inputs * source.rate_hz * width * 3600 / 1e9
    return RecordingOutlook(inputs, gb_per_hour, min(config.record.keep_hours, config.record.most_gb / gb_per_hour))


def _record_remarks(config: Configuration) -> Iterator[str]:
    from driftwatch.config import record_cautions

    yield from record_cautions(config)
    outlook, record = recording_outlook(config), config.record
    if outlook is not None and outlook.hours < record.keep_hours:
        yield (
            f"[record] most_gb = {record.most_gb:g} holds {outlook.hours:.3g} h of {outlook.inputs} inputs, less than "
            f"keep_hours = {record.keep_hours:g}; for all of it, set most_gb to "
            f"{math.ceil(record.keep_hours * outlook.gb_per_hour)}"
        )


# ---------------------------------------------------------------------------------------------- bounds


def _resolutions(mode: ModeConfig) -> Iterator[Resolution]:
    frequency_hz = expected_frequency(mode)
    for method, law in ((Method.AMBIENT, _ambient), (Method.RINGDOWN, _decay)):
        if method in mode.methods:
            for q in expected_qs(mode):
                ln_f, ln_q = law(frequency_hz, q, mode.window_s, mode.search_hz.width)
                yield Resolution(method, frequency_hz, q, ln_f * frequency_hz, ln_q * q)


def _ambient(frequency_hz: float, q: float, window_s: float, width_hz: float) -> tuple[float, float]:
    """Return the smallest standard deviations of ln fn and ln Q, the mode in the middle of its search band."""
    law = ambient_law(frequency_hz, q, window_s, kappa=width_hz * q / frequency_hz)
    return law.ln_frequency_std, law.ln_q_std


def _decay(frequency_hz: float, q: float, window_s: float, width_hz: float) -> tuple[float, float]:
    """Return the smallest standard deviations of ln fn and ln Q of a decay 40 dB over the noise in the search band."""
    density = 1.0 / width_hz  # noise of rms 1 in the search band
    bound = full_decay(frequency_hz, q, DECAY_OVER_NOISE, density)
    factor = record_factor(min(window_s * math.pi * frequency_hz / q, 50.0))
    return bound.ln_f * factor, bound.ln_q * factor


# ---------------------------------------------------------------------------------------------- remarks


def assumed(config: Configuration) -> Iterator[str]:
    """Yield what the file leaves open and is taken for granted."""
    if not config.source:
        yield "no source: rate and inputs come from the recordings that are replayed"
    for channel in config.channel:
        given = channel.model_fields_set
        if channel.unit == "FS":
            yield f'channel "{channel.name}": neither scale nor unit, so levels are in fractions of full scale (FS)'
        elif "scale" not in given:
            yield f'channel "{channel.name}": no scale, so digital full scale is taken as 1 {channel.unit}'
        if "quantity" not in given:
            yield f'channel "{channel.name}": no quantity, so it is taken as acceleration'
        if channel.quantity in ("force", "pressure", "voltage"):
            yield f'channel "{channel.name}": {channel.quantity} is taken as proportional to a velocity'
    for mode in config.mode:
        if "window_s" not in mode.model_fields_set:
            yield f'mode "{mode.name}": no window_s, so it is {mode.window_s:g} s'


def remarks(config: Configuration) -> Iterator[str]:
    """Yield what is allowed and worth a second look."""
    from driftwatch.config import unserved
    from driftwatch.config.sensors import sensor_remarks

    replayed = [str(problem) for problem in unserved(config, live=False)]
    yield from (f"run and replay refuse this: {problem}" for problem in replayed)
    if config.source:
        yield from (f"run refuses this: {problem}" for problem in map(str, unserved(config)) if problem not in replayed)
    for channel in config.channel:
        if channel.quantity == "pressure":
            yield f'channel "{channel.name}": a microphone may record speech: get consent and follow local law'
        if all(mode.channel != channel.name for mode in config.mode):
            yield f'channel "{channel.name}": no mode is followed on it'
        yield from _overlaps(config, channel)
    yield from sensor_remarks(config)
    yield from _record_remarks(config)
    for mode, outlook in zip(config.mode, outlooks(config), strict=True):
        yield from _late_remark(mode, outlook)
        yield from _band_remarks(mode)


def _overlaps(config: Configuration, channel: ChannelConfig) -> Iterator[str]:
    modes = sorted((mode for mode in config.mode if mode.channel == channel.name), key=lambda mode: mode.search_hz)
    for lower, upper in itertools.pairwise(modes):
        if upper.search_hz.low < lower.search_hz.high:
            yield (
                f'modes "{lower.name}" and "{upper.name}" of "{channel.name}": their search bands overlap, '
                "so both may follow the same resonance"
            )


def _late_remark(mode: ModeConfig, outlook: ModeOutlook) -> Iterator[str]:
    """A band far narrower than the rate, or with no room beside it, needs long blocks: they cost time and memory."""
    if outlook.latency_s is None or outlook.rate_hz is None or outlook.latency_s <= mode.window_s:
        return
    search, half_hz = mode.search_hz, outlook.rate_hz / 2
    below, above = search.low / 2, half_hz - search.high  # room for the band's edges
    if min(below, above) > search.width / 3:
        cause = f"a search band of {search.width:g} Hz is so narrow for {outlook.rate_hz} samples a second"
        remedy = "widen it or sample slower"
    elif below < above:
        cause, remedy = "search_hz begins so near 0 Hz", "raise its lower end"
    else:
        cause = f"search_hz ends so near half the rate, {half_hz:g} Hz,"
        remedy = "lower its upper end or sample faster"
    where = f'mode "{mode.name}" of "{mode.channel}"'
    yield f"{where}: {cause} that figures come {outlook.latency_s:.0f} s late; {remedy}"


def _band_remarks(mode: ModeConfig) -> Iterator[str]:
    where = f'mode "{mode.name}" of "{mode.channel}"'
    if not mode.band:
        yield f"{where}: no band, so it is followed and raises no alert"
    for band in _absolute(mode, "frequency"):
        outside = [f"{limit:g}" for limit in (band.low, band.high) if limit and not _inside(limit, mode)]
        if outside:
            yield (
                f'{where}, band "{band.name}": no frequency beyond {" or ".join(outside)} Hz can be found inside '
                f"search_hz, {mode.search_hz.low:g} to {mode.search_hz.high:g} Hz"
            )
    lowest, highest = q_range(mode)
    for band in _absolute(mode, "q"):
        for limit in (band.low, band.high):
            if limit is not None and not lowest <= limit <= highest and Method.AMBIENT in mode.methods:
                yield (
                    f'{where}, band "{band.name}": a window of {mode.window_s:g} s in this search band tells Q from '
                    f"{lowest:.3g} to {highest:.3g}; the limit {limit:g} lies outside"
                )


def _inside(frequency_hz: float, mode: ModeConfig) -> bool:
    return mode.search_hz.low < frequency_hz < mode.search_hz.high
