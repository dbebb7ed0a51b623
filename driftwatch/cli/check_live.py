"""What `check` says of a live run: the source, the processes, what waits in memory, what is kept on the disk."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from collections.abc import Iterator

    from driftwatch.config import Configuration, Problem, SoundcardSourceConfig, SourceConfig


# ---------------------------------------------------------------------------------------------- sources


def source_words(config: Configuration, source: SourceConfig) -> Iterator[str]:
    """Yield what a source is, part by part."""
    if source.kind == "recording":
        yield source.path
    elif source.kind == "soundcard":
        yield from _card_words(config, source)
    elif source.rate_hz is not None:
        yield f"{source.rate_hz} samples/s"
    if source.kind == "simulated":
        yield f"{source.inputs} input{'s' if source.inputs > 1 else ''}"
        yield f"{len(source.resonator)} resonators"
        yield "endless" if source.seconds is None else f"{source.seconds:g} s"
    if source.kind in ("simulated", "recording"):
        yield f"{source.pace:g} x real time" if source.pace else "as fast as it can"


def _card_words(config: Configuration, source: SoundcardSourceConfig) -> Iterator[str]:
    from driftwatch.pipeline.outlook import opened_inputs

    yield f'an input with "{source.device}" in its name' if source.device else "the system's default input"
    yield f"{source.rate_hz} samples/s"
    inputs, needed = opened_inputs(config, source), _needed(config, source)
    yield f"input{'s' if inputs != 1 else ''} 1{f' to {inputs}' if inputs != 1 else ''}"
    if source.inputs is None and inputs != needed:
        yield "or 1 if it has no more"
    yield source.sample_format
    yield f"blocks of {source.block_s * 1000:g} ms"


def _needed(config: Configuration, source: SoundcardSourceConfig) -> int:
    return max((channel.input for channel in config.channel if channel.source == source.name), default=1)


def source_object(config: Configuration, source: SourceConfig) -> dict[str, Any]:
    """Return what a source is, for programs."""
    from driftwatch.pipeline.outlook import opened_inputs

    said: dict[str, Any] = {"name": source.name, "kind": source.kind}
    if source.kind == "soundcard":
        keys = ("device", "rate_hz", "sample_format", "block_s", "wait_for_device")
        said |= {key: getattr(source, key) for key in keys} | {"inputs": opened_inputs(config, source)}
    return said


# ---------------------------------------------------------------------------------------------- the bus


def unguarded_problems(config: Configuration) -> list[Problem]:
    """Return which endpoints lie beyond this computer although no key is granted in the state folder."""
    from driftwatch.bus.errors import KeysError
    from driftwatch.bus.keys import KeyFolder
    from driftwatch.config import Problem, unguarded
    from driftwatch.daemon.state import state_folder

    problems = unguarded(config, granted=False)
    if not problems:
        return []
    folder = KeyFolder(state_folder(config))
    try:
        return unguarded(config, granted=bool(folder.granted()))
    except KeysError as error:
        return [Problem("bus", f"keys that cannot be read ({error})", "keys in the state folder", "see to them first")]


# ---------------------------------------------------------------------------------------------- the daemon


def queue_bytes(config: Configuration, source: SoundcardSourceConfig) -> int:
    """Return how much memory the samples of a sound card take that wait, or are kept for a worker that died."""
    from driftwatch.daemon.feed import LEAST_WAITING
    from driftwatch.pipeline.outlook import opened_inputs
    from driftwatch.stream.ring import Shape

    frames = max(1, round(source.block_s * source.rate_hz))
    waiting = max(LEAST_WAITING, math.ceil(config.daemon.queue_s * source.rate_hz / frames))
    kept = max(LEAST_WAITING, waiting // 2)
    return Shape(source.rate_hz, opened_inputs(config, source) or 1, frames, waiting + kept, waiting).size


def live_lines(config: Configuration) -> Iterator[str]:
    """Yield what a live run does beside measuring, for people; nothing of a file without a source."""
    if not config.source:
        return
    for source in config.source:
        if source.kind == "soundcard":
            yield _waiting_words(source)
    yield _queue_words(config)
    yield f"state folder: {config.state}, for one daemon at a time"
    yield from _recording_lines(config)


def _waiting_words(source: SoundcardSourceConfig) -> str:
    if source.wait_for_device:
        return f"{source.name}: a device that is not there, at the start or later, is looked for until it comes"
    return (
        f"{source.name}: without its device nothing is started (wait_for_device); "
        "one that is lost later is looked for until it comes back"
    )


def _queue_words(config: Configuration) -> str:
    daemon = config.daemon
    work = "1 process measures" if daemon.workers == 1 else f"up to {daemon.workers} processes measure"
    cards = [queue_bytes(config, source) for source in config.source if source.kind == "soundcard"]
    if not cards:
        return f"{work}; the source waits when they are {daemon.queue_s:g} s behind"
    memory = f"{sum(cards) / 1e6:.2g} MB" if sum(cards) < 1e8 else f"{sum(cards) / 1e6:.0f} MB"
    return f"{work}; when they are {daemon.queue_s:g} s behind, samples are lost (queue_s, {memory} of memory)"


def _recording_lines(config: Configuration) -> Iterator[str]:
    from driftwatch.daemon.state import recordings_folder
    from driftwatch.pipeline.outlook import recording_outlook

    record = config.record
    if record.keep_hours <= 0:
        yield "raw samples are not kept ([record] keep_hours)"
        return
    yield f"raw samples: in {recordings_folder(config)}, {record.segment_s:g} s to a file"
    outlook = recording_outlook(config)
    if outlook is None:
        yield f"  the last {record.keep_hours:g} h, and at most {record.most_gb:g} GB"
        return
    inputs = f"{outlook.inputs} input{'s' if outlook.inputs > 1 else ''}"
    gigabytes = outlook.hours * outlook.gb_per_hour
    yield (
        f"  {inputs} make {outlook.gb_per_hour:.2g} GB an hour; the last {outlook.hours:.3g} h are kept: "
        f"{gigabytes:.3g} GB of at most {record.most_gb:g}"
    )


def live_objects(config: Configuration) -> dict[str, Any]:
    """Return the same for programs."""
    from driftwatch.daemon.state import recordings_folder
    from driftwatch.pipeline.outlook import recording_outlook

    daemon, record = config.daemon, config.record
    cards = [queue_bytes(config, source) for source in config.source if source.kind == "soundcard"]
    said: dict[str, Any] = {
        "workers": daemon.workers,
        "queue_s": daemon.queue_s,
        "queue_bytes": sum(cards) if cards else None,
        "state": str(config.state),
        "recording": None,
    }
    if record.keep_hours > 0:
        outlook = recording_outlook(config)
        said["recording"] = {
            "folder": str(recordings_folder(config)),
            "keep_hours": record.keep_hours,
            "most_gb": record.most_gb,
            "gb_per_hour": outlook.gb_per_hour if outlook else None,
            "hours": outlook.hours if outlook else None,
        }
    return said
