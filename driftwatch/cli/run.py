"""``driftwatch run``: watch live, in the foreground."""

from __future__ import annotations

import signal
import time
import uuid
from pathlib import Path
from threading import Event
from typing import TYPE_CHECKING

import click

from driftwatch.cli.shared import CAUTION, load_served, nothing_started, print_json, refuse, refuse_misfit, work_failed
from driftwatch.cli.view import RunView

if TYPE_CHECKING:
    from driftwatch.config import Configuration
    from driftwatch.stream.source import Source

LINES_EVERY_S = 5.0
"""Stream time between two rounds of lines about the modes."""


@click.command("run", short_help="Watch live, in the foreground, until interrupted.")
@click.argument("config", type=click.Path(path_type=Path))
@click.option("--store", metavar="URL", help="Database to write; left out: the configuration's.")
@click.option("--publish", metavar="ENDPOINT", help="Where to publish; left out: the configuration's.")
@click.option("--json", "as_json", is_flag=True, help="Print every record as one JSON object a line.")
def command(config: Path, store: str | None, publish: str | None, as_json: bool) -> None:
    """Watch live, in the foreground, until Ctrl-C, SIGTERM, or the end of the source.

    Each record is committed to the store before it is published on the bus. This version reads simulated sources
    and recordings, at their pace.

    Example: driftwatch run config/demo.toml
    """
    configuration = load_served(config, live=True)
    source, pace = _opened(configuration)
    for warning in source.warnings:
        click.echo(f"Warning: {warning}", err=True)
    stop = Event()
    for number in (signal.SIGINT, signal.SIGTERM):
        signal.signal(number, lambda *_: stop.set())
    _run(configuration, source, pace, store, publish, as_json, stop)


def _opened(configuration: Configuration) -> tuple[Source, float]:
    """Return the checked source and its pace, or leave with what is wrong with it."""
    from driftwatch.config import RecordingSourceConfig, SimulatedSourceConfig
    from driftwatch.records import TimeQuality
    from driftwatch.stream.recording import open_recordings
    from driftwatch.stream.simulated import SimulatedSource

    if len(configuration.source) > 1:
        refuse([f"source: got {len(configuration.source)}; expected one, more are not served by this version"])
    chosen = configuration.source[0]
    if isinstance(chosen, SimulatedSourceConfig):
        return SimulatedSource(chosen, time.time_ns(), TimeQuality.FREE), chosen.pace
    if not isinstance(chosen, RecordingSourceConfig):
        raise TypeError(f"a source of kind {chosen.kind} was not refused")
    least = max(channel.input for channel in configuration.channel)
    with nothing_started():
        source = open_recordings([chosen.path], None, chosen.name, least_inputs=least)
    refuse_misfit(configuration, source.rate_hz, source.inputs)
    return source, chosen.pace


def _run(
    configuration: Configuration,
    source: Source,
    pace: float,
    store: str | None,
    publish: str | None,
    as_json: bool,
    stop: Event,
) -> None:
    from driftwatch.bus.publisher import Publisher
    from driftwatch.config import is_simulated
    from driftwatch.daemon.keeper import Keeper
    from driftwatch.daemon.live import LiveRun
    from driftwatch.daemon.pruner import Pruner
    from driftwatch.pipeline.station import RunHeader, Station
    from driftwatch.records import Origin
    from driftwatch.store.writer import Writer

    origin = Origin.SIMULATED if is_simulated(configuration) else Origin.REPLAY
    header = RunHeader(configuration.station.name, str(uuid.uuid4()), origin, source.time_quality)
    station = Station(configuration, header, [source])
    view = RunView(LINES_EVERY_S)
    url = store or configuration.store.url
    with (
        nothing_started(),
        Writer.open(url, header.station) as writer,
        Publisher(publish or configuration.bus.publish) as publisher,
    ):
        _announce(configuration, url, publisher.endpoint)
        keeper = Keeper(writer, publisher, print_json if as_json else view.show)
        pruner = Pruner(writer, configuration.store.keep_days, time.time_ns)
        live = LiveRun(source, station, keeper, pace=pace, publisher=publisher, chore=pruner.step)
        with work_failed():
            live.until(stop)
    if not as_json:
        _close(view, url, str(configuration.path))


def _announce(configuration: Configuration, url: str, endpoint: str) -> None:
    click.echo(
        f"Watching {len(configuration.mode)} modes of {configuration.station.name}. "
        f"Rows go to {url}, messages to {endpoint}. Ctrl-C ends it.",
        err=True,
    )


def _close(view: RunView, url: str, config: str) -> None:
    """Print the summary and what to type next."""
    click.echo("")
    for line in view.summary():
        click.echo(line)
    click.echo("What next:")
    for what, words in (
        ("its figures, newest first", f"driftwatch readings --store {url} --run {view.run}"),
        ("every run in the store", f"driftwatch runs --store {url}"),
        ("what a configuration says and can resolve", f"driftwatch check {config}"),
        ("a recording through the same watch", f"driftwatch replay {config} RECORDING"),
    ):
        click.echo(f"  {words:<{72}}  {what}")
    click.echo(CAUTION)
