"""``driftwatch check``: read and explain a configuration."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from driftwatch.cli.check_live import live_lines, live_objects, source_object, source_words, unguarded_problems
from driftwatch.cli.shared import CAUTION, refuse

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from rich.table import Table

    from driftwatch.config import BandConfig, Configuration, Problem
    from driftwatch.pipeline.outlook import ModeOutlook

WIDTH = 120
"""Columns where standard output is no terminal."""


@click.command("check", short_help="Read and explain a configuration.")
@click.argument("config", type=click.Path(path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object: the explanation, or each problem.")
def command(config: Path, as_json: bool) -> None:
    """Read a configuration and explain it: what is followed, what its windows can resolve, where the rows go.

    Whatever is wrong is listed in one go, each line with the key, what came, what was expected and what to do; the
    exit status is then 2. What is right but not served by this version is a remark: `run` and `replay` would refuse it.
    Nothing is started and nothing is written.

    Example: driftwatch check config/demo.toml
    """
    from driftwatch.config import ConfigError, load

    try:
        configuration = load(config)
    except ConfigError as error:
        _refuse(error.problems, as_json)
    if problems := unguarded_problems(configuration):
        _refuse(problems, as_json)
    if as_json:
        click.echo(json.dumps(explained(configuration), ensure_ascii=False, allow_nan=False))
    else:
        _print(configuration)


def _refuse(problems: Sequence[Problem], as_json: bool) -> None:
    if as_json:
        for one in problems:
            problem = {"key": one.key, "came": one.came, "expected": one.expected, "remedy": one.remedy}
            click.echo(json.dumps({"kind": "problem", **problem}, ensure_ascii=False))
    refuse(problems)


# ---------------------------------------------------------------------------------------------- for programs


def explained(config: Configuration) -> dict[str, Any]:
    """Return the explanation as one JSON object."""
    from driftwatch.pipeline.outlook import assumed, outlooks, remarks

    return {
        "kind": "check",
        "schema": config.schema_,
        "station": config.station.name,
        "config": str(config.path),
        "config_sha256": config.sha256,
        "sources": [source_object(config, source) for source in config.source],
        "channels": [
            {key: getattr(channel, key) for key in ("name", "source", "input", "quantity", "unit", "scale", "role")}
            for channel in config.channel
        ],
        "modes": [_mode_object(config, index, outlook) for index, outlook in enumerate(outlooks(config))],
        "store": config.store.url,
        "keep_days": config.store.keep_days,
        "publish": config.bus.publish,
        "control": config.bus.control,
        **live_objects(config),
        "assumed": list(assumed(config)),
        "remarks": list(remarks(config)),
    }


def _mode_object(config: Configuration, index: int, outlook: ModeOutlook) -> dict[str, Any]:
    mode = config.mode[index]
    return {
        "channel": outlook.channel,
        "mode": outlook.mode,
        "search_hz": list(mode.search_hz),
        "methods": [method.value for method in mode.methods],
        "rate_hz": outlook.rate_hz,
        "window_s": mode.window_s,
        "window_samples": outlook.window_samples,
        "step_s": mode.step_s,
        "step_samples": outlook.step_samples,
        "latency_s": outlook.latency_s,
        "q_range": outlook.q_range,
        "resolutions": [
            {
                "method": one.method.value,
                "frequency_hz": one.frequency_hz,
                "q": one.q,
                "frequency_std_hz": one.frequency_std_hz,
                "q_std": one.q_std,
            }
            for one in outlook.resolutions
        ],
        "bands": [band.model_dump(mode="json") for band in mode.band],
    }


# ---------------------------------------------------------------------------------------------- for people


def _print(config: Configuration) -> None:
    from rich.console import Console

    from driftwatch.pipeline.outlook import assumed, outlooks, remarks

    console = Console(highlight=False)
    if not console.is_terminal:
        console = Console(highlight=False, width=WIDTH)
    expectations = list(outlooks(config))
    console.print(f"{config.path} is valid. Station {config.station.name}.", markup=False, soft_wrap=True)
    for table in (_sources(config), _channels(config), _modes(config, expectations), _resolutions(expectations)):
        console.print(table)
    if any(mode.band for mode in config.mode):
        console.print(_bands(config))
    for heading, lines in (
        ("Where it goes", _places(config)),
        ("While it runs", live_lines(config)),
        ("Taken for granted", assumed(config)),
        ("Worth a second look", remarks(config)),
    ):
        _section(console.print, heading, list(lines))
    console.print(f"\n{CAUTION}", markup=False, soft_wrap=True)


def _section(show: Any, heading: str, lines: list[str]) -> None:
    if lines:
        show(f"\n{heading}", style="bold")
        for line in lines:
            show(f"  {line}", markup=False, soft_wrap=True)


def _table(title: str, *columns: str, right: Sequence[str] = ()) -> Table:
    from rich import box
    from rich.table import Table

    table = Table(title=f"\n{title}", title_justify="left", title_style="bold", box=box.SIMPLE_HEAD, show_edge=False)
    for column in columns:
        table.add_column(column, justify="right" if column in right else "left", overflow="fold")
    return table


def _row(table: Table, *cells: object) -> None:
    from rich.text import Text

    table.add_row(*(Text(str(cell)) for cell in cells))  # names and units are no markup


def _sources(config: Configuration) -> Table:
    table = _table("Sources", "source", "kind", "what")
    for source in config.source:
        _row(table, source.name, source.kind, ", ".join(source_words(config, source)))
    if not config.source:
        _row(table, "none", "", "this file serves replays")
    return table


def _channels(config: Configuration) -> Table:
    table = _table("Channels", "channel", "source", "input", "senses", "at full scale", "role", right=["input"])
    for channel in config.channel:
        full_scale = "1 (fractions)" if channel.unit == "FS" else f"{channel.scale:g} {channel.unit}"
        _row(table, channel.name, channel.source or "replay", channel.input, channel.quantity, full_scale, channel.role)
    return table


def _modes(config: Configuration, expectations: Sequence[ModeOutlook]) -> Table:
    numbers = ["window", "samples", "every", "latency"]
    table = _table("Modes", "channel / mode", "searched for, Hz", "methods", *numbers, "tells Q from", right=numbers)
    for mode, outlook in zip(config.mode, expectations, strict=True):
        _row(
            table,
            f"{mode.channel} / {mode.name}",
            f"{mode.search_hz.low:g} to {mode.search_hz.high:g}",
            ", ".join(method.value for method in mode.methods),
            f"{mode.window_s:g} s",
            "as recorded" if outlook.window_samples is None else outlook.window_samples,
            f"{mode.step_s:g} s",
            "as recorded" if outlook.latency_s is None else f"{outlook.latency_s:.2g} s",
            "any" if outlook.q_range is None else " to ".join(_digits(q) for q in outlook.q_range),
        )
    return table


def _resolutions(expectations: Sequence[ModeOutlook]) -> Table:
    title = "What one window, or one decay from 40 dB over the noise, tells at best"
    numbers = ["at, Hz", "at Q", "frequency, Hz", "ppm", "Q"]
    table = _table(title, "channel / mode", "method", *numbers, right=numbers)
    for outlook in expectations:
        for one in outlook.resolutions:
            _row(
                table,
                f"{outlook.channel} / {outlook.mode}",
                one.method.value,
                f"{one.frequency_hz:g}",
                f"{one.q:.4g}",
                f"± {_digits(one.frequency_std_hz)}",
                f"± {_digits(one.frequency_std_hz / one.frequency_hz * 1e6)}",
                f"± {_digits(one.q_std / one.q * 100)} %",
            )
    return table


def _digits(value: float) -> str:
    """Return a positive value to two significant digits, written out."""
    decimals = max(0, 1 - math.floor(math.log10(value)))
    return f"{round(value, 1 - math.floor(math.log10(value))):.{decimals}f}"


def _bands(config: Configuration) -> Table:
    table = _table("Bands", "channel / mode / band", "inside is", "fires", "returns", "priority")
    for mode in config.mode:
        for band in mode.band:
            _row(
                table,
                f"{mode.channel}/{mode.name}/{band.name}",
                _inside(band),
                f"{band.confidence:.4g} sure for {band.on_delay_s:g} s",
                _returns(band),
                band.priority.value,
            )
    return table


def _inside(band: BandConfig) -> str:
    name, unit = "frequency" if band.quantity == "frequency" else "Q", _unit(band)
    if band.low is None:
        return f"{name} under {band.high:g}{unit}"
    if band.high is None:
        return f"{name} over {band.low:g}{unit}"
    return f"{name} {band.low:g} to {band.high:g}{unit}"


def _unit(band: BandConfig) -> str:
    """Return the limits' own unit."""
    if band.limits != "absolute":
        return " % of baseline" if band.limits == "percent" else f" {band.limits} of baseline"
    return " Hz" if band.quantity == "frequency" else ""


def _returns(band: BandConfig) -> str:
    by = f" by {band.deadband:g}{_unit(band)}" if band.deadband else ""
    return f"inside{by} for {band.off_delay_s:g} s"


def _places(config: Configuration) -> Iterator[str]:
    yield "a replay writes a new database named after its run, and publishes nothing, unless told to"
    if not config.source:
        return
    yield f"rows of `run`: {config.store.url}, kept {config.store.keep_days:g} days"
    from driftwatch.config import is_loopback

    whom = "whoever is on this computer" if is_loopback(config.bus.publish) else "whoever has a granted key, encrypted"
    yield f"messages of `run`: {config.bus.publish}, for {whom}"
    yield f"commands to `run`: {config.bus.control}, from this user and whoever has a granted key"
