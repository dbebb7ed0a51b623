"""What one table cannot know alone: names that must differ, references, rates.

The checks read the document itself and look only at values of the right kind, so that they find what they can in a
file that is wrong elsewhere: a person sees every problem in one pass.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from driftwatch.config.errors import Problem
from driftwatch.config.keys import Loc, place
from driftwatch.config.models import ChannelConfig, Configuration
from driftwatch.config.sources import SimulatedSourceConfig, SoundcardSourceConfig
from driftwatch.config.values import composed, is_number

Document = Mapping[str, Any]

LOST_NAME = "lost"
"""Name of the alert of a lost mode where the file gives it none."""


def cross_problems(document: Document) -> Iterator[Problem]:
    """Yield what is wrong between the tables of a document."""
    yield from _something_to_follow(document)
    for loc, items in _named_arrays(document):
        yield from _same_names(document, loc, items)
    yield from _taken_names(document)
    yield from _channel_problems(document)
    yield from _mode_problems(document)
    yield from _regime_problems(document)
    yield from _record_problems(document)


def check_rate(config: Configuration, rate_hz: float, inputs: int) -> list[Problem]:
    """Return why a configuration does not fit samples of this rate and so many inputs.

    For recordings, whose rate and inputs the file does not know.
    """
    document = config.model_dump(mode="json", by_alias=True)
    return [
        *(
            problem
            for index, channel in enumerate(config.channel)
            for problem in _input_problem(document, index, channel.input, inputs)
        ),
        *(
            problem
            for index, mode in enumerate(config.mode)
            for problem in _search_problem(document, index, list(mode.search_hz), rate_hz)
        ),
    ]


# ---------------------------------------------------------------------------------------------- reading the document


def _tables(holder: Any, key: str) -> list[tuple[int, Document]]:
    """Return the tables of an array with their indices; a single table, wrong as it is, counts as the first."""
    items = holder.get(key) if isinstance(holder, Mapping) else None
    items = [items] if isinstance(items, Mapping) else items
    return [(i, item) for i, item in enumerate(items) if isinstance(item, Mapping)] if isinstance(items, list) else []


def _text(table: Document, key: str) -> str | None:
    """Return a text as the models keep names, None where there is none: equal looks are equal names."""
    value = table.get(key)
    return composed(value) if isinstance(value, str) else None


def _whole(table: Document, key: str, default: int | None) -> int | None:
    value = table.get(key, default)
    return value if isinstance(value, int) and not isinstance(value, bool) else None


def _names(document: Document, key: str) -> list[str]:
    return [name for _, table in _tables(document, key) if (name := _text(table, "name")) is not None]


# ---------------------------------------------------------------------------------------------- presence and names


def _something_to_follow(document: Document) -> Iterator[Problem]:
    for key in ("channel", "mode"):
        if document.get(key, []) == []:
            yield Problem(key, "none", f"at least one [[{key}]]", "else there is nothing to follow")


def _named_arrays(document: Document) -> Iterator[tuple[Loc, list[tuple[int, Document]]]]:
    """Yield the groups of tables within which names must differ, each with where it stands."""
    for key in ("source", "channel", "regime", "alert"):
        yield (key,), _tables(document, key)
    modes = _tables(document, "mode")
    for channel in dict.fromkeys(_text(mode, "channel") for _, mode in modes):
        yield ("mode",), [(i, mode) for i, mode in modes if _text(mode, "channel") == channel]
    for index, mode in modes:
        yield ("mode", index, "band"), _tables(mode, "band")


def _same_names(document: Document, loc: Loc, items: Sequence[tuple[int, Document]]) -> Iterator[Problem]:
    first: dict[str, int] = {}
    for index, table in items:
        name = _text(table, "name")
        if name is None:
            continue
        earlier = first.setdefault(name.casefold(), index)
        if earlier != index:
            yield Problem(
                place(document, (*loc, index, "name")),
                f'"{name}" a second time',
                f"a name that differs from {place(document, (*loc, earlier))}, without regard to case",
                "rename one of them",
            )


def _taken_names(document: Document) -> Iterator[Problem]:
    """Yield the bands named like the alert of a lost mode: both would be channel/mode/name."""
    named = [_text(alert, "name") for _, alert in _tables(document, "alert") if alert.get("condition") == "lost"]
    taken = {name.casefold() for name in named or [LOST_NAME] if name}
    for index, mode in _tables(document, "mode"):
        for number, band in _tables(mode, "band"):
            name = _text(band, "name")
            if name is not None and name.casefold() in taken:
                key = place(document, ("mode", index, "band", number, "name"))
                yield Problem(key, f'"{name}"', "another name than that of the alert of a lost mode", "rename the band")


def _unknown_name(key: str, name: str, known: list[str], what: str) -> Iterator[Problem]:
    if name not in known:
        listed = ", ".join(f'"{one}"' for one in known) or f"none, for the file has no [[{what}]]"
        yield Problem(key, f'"{name}"', f"the name of a {what} in this file: {listed}", f"add the {what} or correct it")


# ---------------------------------------------------------------------------------------------- channels


def _source_of(document: Document, channel: Document) -> Document | None:
    """Return the source of a channel, None where it cannot be told."""
    sources = [table for _, table in _tables(document, "source")]
    if len(sources) == 1 and "source" not in channel:
        return sources[0]
    name = _text(channel, "source")
    return next((table for table in sources if name is not None and _text(table, "name") == name), None)


def _inputs_of(source: Document | None) -> int | None:
    """Return how many inputs a source has, None where only the device or the recording knows."""
    return _whole(source, "inputs", 1) if source and source.get("kind") in ("simulated", "feed") else None


def _channel_problems(document: Document) -> Iterator[Problem]:
    names = _names(document, "source")
    for index, channel in _tables(document, "channel"):
        key = place(document, ("channel", index, "source"))
        chosen = _text(channel, "source")
        if chosen is not None:
            yield from _unknown_name(key, chosen, names, "source")
        elif "source" not in channel and len(names) > 1:
            listed = ", ".join(f'"{name}"' for name in names)
            yield Problem(key, "nothing", f"one of {listed}", "say which source the channel comes from")
        inputs = _inputs_of(_source_of(document, channel))
        wanted = _whole(channel, "input", 1)
        if inputs is not None and wanted is not None:
            yield from _input_problem(document, index, wanted, inputs)


def _input_problem(document: Document, index: int, wanted: int, inputs: int) -> Iterator[Problem]:
    if wanted > inputs > 0:
        key = place(document, ("channel", index, "input"))
        yield Problem(key, str(wanted), f"an input from 1 to {inputs}", "choose an input that the samples have")


# ---------------------------------------------------------------------------------------------- modes and regimes


def _mode_problems(document: Document) -> Iterator[Problem]:
    channels, regimes = _names(document, "channel"), _names(document, "regime")
    for index, mode in _tables(document, "mode"):
        chosen = _text(mode, "channel")
        if chosen is not None:
            yield from _unknown_name(place(document, ("mode", index, "channel")), chosen, channels, "channel")
            yield from _rate_of_mode(document, index, mode, chosen)
        yield from _reference_problems(document, index, mode, channels)
        wanted = mode.get("regimes")
        for name in wanted if isinstance(wanted, list) else []:
            if isinstance(name, str):
                key = place(document, ("mode", index, "regimes"))
                yield from _unknown_name(key, composed(name), regimes, "regime")


def _rate_of_mode(document: Document, index: int, mode: Document, channel: str) -> Iterator[Problem]:
    for _, table in _tables(document, "channel"):
        source = _source_of(document, table) if _text(table, "name") == channel else None
        rate_hz = _rate_of_source(source) if source else None
        if rate_hz is not None and rate_hz > 0:
            yield from _search_problem(document, index, mode.get("search_hz"), rate_hz)


def _rate_of_source(source: Document) -> int | None:
    """Return the rate of a source in Hz, None where only the recording knows it."""
    is_card = source.get("kind") == "soundcard"
    return _whole(source, "rate_hz", SoundcardSourceConfig.model_fields["rate_hz"].default if is_card else None)


def _search_problem(document: Document, index: int, search_hz: Any, rate_hz: float) -> Iterator[Problem]:
    if not isinstance(search_hz, list) or len(search_hz) != 2 or not all(is_number(edge) for edge in search_hz):
        return
    if search_hz[1] >= rate_hz / 2:
        key = place(document, ("mode", index, "search_hz"))
        came = f"[{search_hz[0]:g}, {search_hz[1]:g}] at {rate_hz:g} samples a second"
        yield Problem(key, came, f"frequencies under half the rate, {rate_hz / 2:g} Hz", "lower it or sample faster")


def _reference_problems(document: Document, index: int, mode: Document, channels: list[str]) -> Iterator[Problem]:
    wanted = _text(mode, "reference")
    if wanted is None:
        return
    key = place(document, ("mode", index, "reference"))
    yield from _unknown_name(key, wanted, channels, "channel")
    for number, channel in _tables(document, "channel"):
        if _text(channel, "name") == wanted and channel.get("role", "response") == "response":
            where = place(document, ("channel", number))
            yield Problem(key, f'"{wanted}", a response', "a channel whose role is reference", f"set role in {where}")


def _regime_problems(document: Document) -> Iterator[Problem]:
    for index, regime in _tables(document, "regime"):
        when = regime.get("when")
        level = _text(when, "level") if isinstance(when, Mapping) else None
        if level is not None:
            key = place(document, ("regime", index, "when", "level"))
            yield from _unknown_name(key, level, _names(document, "channel"), "channel")


# ---------------------------------------------------------------------------------------------- raw recording


def _record_problems(document: Document) -> Iterator[Problem]:
    """Yield that a microphone would be recorded raw without anybody's leave.

    All inputs that are opened are recorded. What is on those that no channel names nobody can know here;
    `record_cautions` tells of them.
    """
    record = document.get("record")
    if not isinstance(record, Mapping):
        return
    hours, allowed = record.get("keep_hours", 0.0), _text(record, "pressure_allowed_by")
    if not is_number(hours) or hours <= 0 or (allowed is not None and allowed.strip()):
        return
    for _, channel in _tables(document, "channel"):
        if channel.get("quantity") == "pressure":
            yield Problem(
                place(document, ("record", "pressure_allowed_by")),
                f'nothing, with keep_hours = {hours:g} and the pressure of channel "{_text(channel, "name") or ""}"',
                "who allowed that it is recorded raw",
                "a microphone may record speech: get consent, follow local law and name who allowed it, "
                "or set keep_hours = 0",
            )


def record_cautions(config: Configuration) -> list[str]:
    """Return what a person must be told before a run records raw samples; nothing where it does not.

    All inputs of a source are recorded, also those that no channel names: what hangs on them the file does not say.
    """
    record = config.record
    if record.keep_hours <= 0:
        return []
    cautions = []
    microphones = [f'"{channel.name}"' for channel in config.channel if channel.quantity == "pressure"]
    if microphones:
        cautions.append(
            f"The last {record.keep_hours:g} h of {', '.join(microphones)} are recorded raw, as "
            f"{record.pressure_allowed_by} allowed. A microphone may record speech: get consent and follow local law."
        )
    for source in config.source:
        used = {channel.input for channel in config.channel if channel.source == source.name}
        needed = max(used, default=0)
        if isinstance(source, SoundcardSourceConfig):
            opened = source.opened_inputs(needed)
        else:
            opened = getattr(source, "inputs", needed)
        unnamed = sorted(set(range(1, opened + 1)) - used)
        if unnamed:
            cautions.append(
                f"All inputs of {source.name} are recorded raw for {record.keep_hours:g} h, so those that no channel "
                f"names too: {', '.join(str(one) for one in unnamed)}. See that no microphone is on them."
            )
    return cautions


# ---------------------------------------------------------------------------------------------- what a file says


def rate_of(config: Configuration, channel: ChannelConfig) -> int | None:
    """Return the rate of a channel's source in Hz, None where only a recording knows it."""
    source = config.source_of(channel)
    return getattr(source, "rate_hz", None)


def is_simulated(config: Configuration) -> bool:
    """Say whether every source is simulated."""
    return bool(config.source) and all(isinstance(source, SimulatedSourceConfig) for source in config.source)
