"""What a configuration may say although this version does not do it yet."""

from __future__ import annotations

from collections.abc import Iterator

from driftwatch.config.errors import Problem
from driftwatch.config.keys import place
from driftwatch.config.models import Configuration
from driftwatch.config.modes import ModeConfig
from driftwatch.records import Condition, Method

NOT_SERVED = "not served by this version"

_SERVED_METHODS = (Method.AMBIENT, Method.RINGDOWN)
_SERVED_CONDITIONS = (Condition.NO_DATA, Condition.LOST)
_SERVED_KINDS = ("soundcard", "recording", "simulated")


def unserved(config: Configuration, *, live: bool = True) -> list[Problem]:
    """Return what is valid but not served by this version.

    Parameters
    ----------
    config
        A valid configuration.
    live
        Whether samples come from the configuration's sources. A replay ignores them.
    """
    document = config.model_dump(mode="json", by_alias=True)
    problems = [*_regimes(config), *_alerts(config)]
    if live:
        problems += _sources(config)
    for index, mode in enumerate(config.mode):
        where = place(document, ("mode", index))
        problems += [*_methods(mode, where), *_bands(mode, where)]
    return problems


def _sources(config: Configuration) -> Iterator[Problem]:
    if not config.source:
        yield Problem("source", "none", "at least one [[source]] to run live", "add one, or replay recordings instead")
    if len(config.source) > 1:
        came = f"{len(config.source)}, more than one {NOT_SERVED}"
        yield Problem("source", came, "one [[source]] to run live", "start one run for each, with a file of its own")
    for index, source in enumerate(config.source):
        if source.kind not in _SERVED_KINDS:
            key = f'source[{index + 1}] "{source.name}" . kind'
            yield Problem(key, _refused(source.kind), " or ".join(_SERVED_KINDS), "record with it and replay instead")


def _regimes(config: Configuration) -> Iterator[Problem]:
    for index, regime in enumerate(config.regime):
        key = f'regime[{index + 1}] "{regime.name}"'
        yield Problem(key, f"a regime, {NOT_SERVED}", "no regimes", "take it out: modes are followed always")


def _alerts(config: Configuration) -> Iterator[Problem]:
    served = " or ".join(condition.value for condition in _SERVED_CONDITIONS)
    seen: set[Condition] = set()
    for index, alert in enumerate(config.alert):
        key = f'alert[{index + 1}] "{alert.name}" . condition'
        if alert.condition not in _SERVED_CONDITIONS:
            yield Problem(key, _refused(alert.condition.value), served, "take it out")
        elif alert.condition in seen:
            came = f'"{alert.condition.value}" a second time, {NOT_SERVED}'
            yield Problem(key, came, "each condition once", "take one of them out")
        seen.add(alert.condition)


def _methods(mode: ModeConfig, where: str) -> Iterator[Problem]:
    for method in mode.methods:
        if method not in _SERVED_METHODS:
            served = " and ".join(one.value for one in _SERVED_METHODS)
            yield Problem(f"{where} . methods", _refused(method.value), served, "take it out")


def _bands(mode: ModeConfig, where: str) -> Iterator[Problem]:
    for index, band in enumerate(mode.band):
        if band.limits != "absolute":
            key = f'{where} . band[{index + 1}] "{band.name}" . limits'
            yield Problem(key, _refused(band.limits), "absolute", "write the limits in Hz or as Q")


def _refused(word: str) -> str:
    return f'"{word}", {NOT_SERVED}'
