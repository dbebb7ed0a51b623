"""``driftwatch run``: watch live, in the foreground."""

from __future__ import annotations

import time
import uuid
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

import click

from driftwatch.cli.shared import (
    CAUTION,
    Output,
    load_served,
    nothing_started,
    print_json,
    refuse_misfit,
    stopped_by_signal,
    typed,
    work_failed,
)
from driftwatch.cli.view import RunView, folded

if TYPE_CHECKING:
    from driftwatch.config import Configuration
    from driftwatch.daemon.stop import Stop
    from driftwatch.stream.source import Source

LINES_EVERY_S = 5.0
"""Stream time between two rounds of lines about the modes."""


@click.command("run", short_help="Watch live, in the foreground, until interrupted.")
@click.argument("config", type=click.Path(path_type=Path))
@click.option("--store", metavar="URL|PATH", help="Database to write; left out: the configuration's.")
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
    view = RunView(((mode.channel, mode.name) for mode in configuration.mode), LINES_EVERY_S)
    with stopped_by_signal() as stop:
        _run(configuration, source, pace, store, publish, None if as_json else view, stop)
    if not as_json:
        _close(view, str(config), ["--config", str(config)] if store is None else ["--store", store])


def _opened(configuration: Configuration) -> tuple[Source, float]:
    """Return the checked source and its pace, or leave with what is wrong with it."""
    from driftwatch.config import RecordingSourceConfig, SimulatedSourceConfig
    from driftwatch.records import TimeQuality
    from driftwatch.stream.recording import open_recordings
    from driftwatch.stream.simulated import SimulatedSource

    (chosen,) = configuration.source  # more are refused as not served
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
    view: RunView | None,
    stop: Stop,
) -> None:
    """Run to the end; without a view print JSON."""
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
    with ExitStack() as opened:
        with nothing_started():  # the port first: where it is taken, no database comes into being
            publisher = opened.enter_context(Publisher(publish or configuration.bus.publish))
            if store is None:
                opened.enter_context(_folder_of(configuration.store.url))
            writer = opened.enter_context(Writer.open(store or configuration.store.url, header.station))
        _announce(configuration, writer.path, publisher.endpoint)
        output = Output(view.show if view else print_json, stop)
        keeper = Keeper(writer, publisher, output)
        pruner = Pruner(writer, configuration.store.keep_days, time.time_ns)
        live = LiveRun(source, station, keeper, pace=pace, publisher=publisher, chore=pruner.step)
        with work_failed():
            live.until(stop)
        output.check()


@contextmanager
def _folder_of(url: str) -> Iterator[None]:
    """Make the folder of the configuration's own store; take it away again if nothing came into it.

    Raises
    ------
    StoreUnreachableError
        When it cannot be made.
    """
    from driftwatch.store.errors import unreachable

    path = Path(url.removeprefix("sqlite:///"))
    folder = path.parent
    missing = not folder.exists() and folder.parent.is_dir()
    if missing:
        try:
            folder.mkdir()
        except OSError as error:
            raise unreachable(path, error) from None
    try:
        yield
    finally:
        if missing and not any(folder.iterdir()):
            folder.rmdir()


def _announce(configuration: Configuration, store: Path, endpoint: str) -> None:
    modes = len(configuration.mode)
    click.echo(f"Watching {modes} mode{'s' if modes > 1 else ''} of {configuration.station.name}.", err=True)
    click.echo(f"Rows go to {store}, messages to {endpoint}. Ctrl-C ends it.", err=True)


def _close(view: RunView, config: str, store: list[str]) -> None:
    """Print the summary and what to type next."""
    click.echo("")
    for line in view.summary():
        click.echo(line)
    click.echo("What next:")
    for what, words in (
        ("its figures", ["readings", *store, "--run", view.run[:8]]),
        ("every run", ["runs", *store]),
        ("its limits", ["check", config]),
        ("a recording", ["replay", config, "RECORDING"]),
    ):
        click.echo(f"  {what:<11}  {typed(*words)}")
    click.echo(folded(CAUTION))
