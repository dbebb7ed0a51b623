"""``driftwatch replay``: recordings through the same pipeline as the live run."""

from __future__ import annotations

import signal
import uuid
from collections.abc import Callable, Iterator
from contextlib import contextmanager, nullcontext
from pathlib import Path
from threading import Event
from typing import TYPE_CHECKING

import click

from driftwatch.cli.shared import CAUTION, load_served, nothing_started, print_json, refuse_misfit, work_failed
from driftwatch.cli.view import RunView

if TYPE_CHECKING:
    from driftwatch.config import Configuration
    from driftwatch.stream.recording import RecordingSource


def _time(_context: click.Context, _parameter: click.Parameter, value: str | None) -> int | None:
    from driftwatch.records import parse_time

    if value is None:
        return None
    try:
        return parse_time(value)
    except ValueError as error:
        raise click.BadParameter(str(error)) from None


@click.command("replay", short_help="Send recordings through the same pipeline, as fast as it can.")
@click.argument("config", type=click.Path(path_type=Path))
@click.argument("recordings", metavar="REC...", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option("--start", metavar="TIME", callback=_time, help="When the first sample was taken, RFC 3339 with a zone.")
@click.option("--store", metavar="URL", help="Database to write; left out: a new one named after the run.")
@click.option("--publish", metavar="ENDPOINT", help="Publish on the bus as well, such as tcp://127.0.0.1:5571.")
@click.option("--json", "as_json", is_flag=True, help="Print every record as one JSON object a line.")
def command(
    config: Path, recordings: tuple[Path, ...], start: int | None, store: str | None, publish: str | None, as_json: bool
) -> None:
    """Send recordings through the same pipeline as `run`, as fast as it can.

    Several recordings are one stream, in the order given, with gaps where their dates say so. Without --store the
    rows go into a new database in the current folder, named after the run; the configuration's own store is never
    touched.

    Example: driftwatch replay config/post-mortem.toml morning.wav noon.wav --start 2026-03-01T06:00:00Z
    """
    configuration = load_served(config, live=False)
    source = _opened(configuration, recordings, start)
    for warning in source.warnings:
        click.echo(f"Warning: {warning}", err=True)
    run = str(uuid.uuid4())
    _replay(configuration, source, run, store or f"run-{run}.db", publish, as_json)


def _opened(configuration: Configuration, recordings: tuple[Path, ...], start_ns: int | None) -> RecordingSource:
    """Return the checked recordings, or leave with everything that is wrong with them."""
    from driftwatch.stream.recording import open_recordings

    only = configuration.source[0] if len(configuration.source) == 1 else None
    with nothing_started():
        source = open_recordings(
            recordings,
            start_ns,
            only.name if only else "recording",
            rate_hz=getattr(only, "rate_hz", None),
            least_inputs=max(channel.input for channel in configuration.channel),
        )
    refuse_misfit(configuration, source.rate_hz, source.inputs)
    return source


def _replay(
    configuration: Configuration, source: RecordingSource, run: str, store: str, publish: str | None, as_json: bool
) -> None:
    from driftwatch.bus.publisher import Publisher
    from driftwatch.daemon.keeper import Keeper
    from driftwatch.daemon.replay import replay
    from driftwatch.pipeline.station import RunHeader, Station
    from driftwatch.records import Origin
    from driftwatch.store.writer import Writer

    header = RunHeader(configuration.station.name, run, Origin.REPLAY, source.time_quality)
    station = Station(configuration, header, [source])
    view = RunView(every_s=None)
    stop = Event()
    with nothing_started():
        writer = Writer.open(store, header.station)
        with writer, Publisher(publish) if publish else nullcontext() as publisher:
            keeper = Keeper(writer, publisher, print_json if as_json else view.show)
            with _stoppable(stop), _progress(source) as advance, work_failed():
                replay(source, station, keeper, advance, stop.is_set)
    if not as_json:
        for line in view.summary():
            click.echo(line)
        click.echo(f"Stored in {writer.path}. To look into it: driftwatch readings --store {store}")
        click.echo(CAUTION)


@contextmanager
def _stoppable(stop: Event) -> Iterator[None]:
    """Let SIGINT and SIGTERM end the replay in good order."""
    before = {number: signal.signal(number, lambda *_: stop.set()) for number in (signal.SIGINT, signal.SIGTERM)}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


@contextmanager
def _progress(source: RecordingSource) -> Iterator[Callable[[int], None]]:
    """Show a bar on standard error with the speed in times real time and the time left."""
    from rich.console import Console
    from rich.progress import BarColumn, Progress, ProgressColumn, Task, TextColumn, TimeRemainingColumn
    from rich.text import Text

    class Speed(ProgressColumn):
        def render(self, task: Task) -> Text:
            speed = task.finished_speed or task.speed
            return Text("" if speed is None else f"{speed / source.rate_hz:.0f} x real time")

    columns = (TextColumn("{task.percentage:3.0f} %"), BarColumn(), Speed(), TimeRemainingColumn(), TextColumn("left"))
    console = Console(stderr=True)
    with Progress(*columns, console=console, transient=True, disable=not console.is_terminal) as bar:
        task = bar.add_task("replay", total=source.length)
        yield lambda sample: bar.update(task, completed=sample)
