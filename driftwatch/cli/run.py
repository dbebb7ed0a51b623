"""``driftwatch run``: watch live, in the foreground."""

from __future__ import annotations

import time
from contextlib import ExitStack
from pathlib import Path
from typing import TYPE_CHECKING

import click

from driftwatch.cli.live_output import LiveOutput
from driftwatch.cli.live_view import chosen_view
from driftwatch.cli.log import Log
from driftwatch.cli.shared import (
    CAUTION,
    hung_up,
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
    from driftwatch.daemon.feed import Feed
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

    Each record is committed to the store before it is published on the bus. A sound card that is lost is opened again
    by its name; what is missing is a gap of exact length. SIGHUP reads bands and alert settings again.

    Example: driftwatch run config/demo.toml
    """
    from driftwatch.config import record_cautions, sensor_remarks
    from driftwatch.daemon.service import feed_of

    configuration = load_served(config, live=True)
    for caution in (*sensor_remarks(configuration), *record_cautions(configuration)):
        click.echo(f"Note: {caution}", err=True)
    source, pace = _opened(configuration)
    for warning in source.warnings if source else ():
        click.echo(f"Warning: {warning}", err=True)
    modes = [(mode.channel, mode.name) for mode in configuration.mode]
    view = None if as_json else chosen_view(modes, LINES_EVERY_S)
    with stopped_by_signal() as stop, ExitStack() as closing:
        if view is not None:
            closing.callback(view.close)
        _run(configuration, feed_of(configuration, source, pace), (store, publish), view, stop)
    if view is not None and view.run:
        _close(view, str(config), ["--config", str(config)] if store is None else ["--store", store])


def _opened(configuration: Configuration) -> tuple[Source | None, float]:
    """Return the checked source and its pace, or leave with what is wrong with it; None: a sound card."""
    from driftwatch.config import RecordingSourceConfig, SimulatedSourceConfig
    from driftwatch.records import TimeQuality
    from driftwatch.stream.recording import open_recordings
    from driftwatch.stream.simulated import SimulatedSource

    (chosen,) = configuration.source  # more are refused as not served
    if isinstance(chosen, SimulatedSourceConfig):
        return SimulatedSource(chosen, time.time_ns(), TimeQuality.FREE), chosen.pace
    if not isinstance(chosen, RecordingSourceConfig):
        return None, 1.0
    least = max(channel.input for channel in configuration.channel)
    with nothing_started():
        source = open_recordings([chosen.path], None, chosen.name, least_inputs=least)
    refuse_misfit(configuration, source.rate_hz, source.inputs)
    return source, chosen.pace


def _run(
    configuration: Configuration,
    feed: Feed,
    where: tuple[str | None, str | None],
    view: RunView | None,
    stop: Stop,
) -> None:
    """Run to the end; without a view print JSON."""
    from driftwatch.daemon.service import Outlets, Service

    log = Log(configuration.daemon.log_level, view)

    def opened(store: Path, endpoint: str) -> None:
        _announce(configuration, store, endpoint)

    with LiveOutput(view.show if view else print_json, stop) as output, hung_up() as hangup:
        beat = output.posted(view.beat) if view else lambda _: None
        outlets = Outlets(output, output.posted(log.told), beat, output.posted(opened), log.level)
        with Service(configuration, feed, outlets, *where) as service:
            with nothing_started():
                if not service.open(stop):
                    return
            with work_failed():
                service.until(stop, hangup)


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
