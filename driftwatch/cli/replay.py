"""``driftwatch replay``: recordings through the same pipeline as the live run."""

from __future__ import annotations

import sys
import uuid
from contextlib import ExitStack
from pathlib import Path
from typing import TYPE_CHECKING

import click

from driftwatch.cli.looking import opened_store
from driftwatch.cli.progress import progress
from driftwatch.cli.shared import (
    CAUTION,
    Output,
    load_served,
    nothing_started,
    print_json,
    refuse,
    refuse_misfit,
    stopped_by_signal,
    told_time,
    typed,
    work_failed,
)
from driftwatch.cli.view import RunView, folded

if TYPE_CHECKING:
    from collections.abc import Sequence

    from driftwatch.config import Configuration, SourceConfig
    from driftwatch.records import Command
    from driftwatch.stream.recording import RecordingSource


@click.command("replay", short_help="Send recordings through the same pipeline, as fast as it can.")
@click.argument("config", type=click.Path(path_type=Path))
@click.argument("recordings", metavar="REC...", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option(
    "--start", metavar="TIME", callback=told_time, help="When the first sample was taken, RFC 3339 with a zone."
)
@click.option("--store", metavar="URL|PATH", help="Database to write; left out: a new one named after the run.")
@click.option("--publish", metavar="ENDPOINT", help="Publish on the bus as well, such as tcp://127.0.0.1:5571.")
@click.option(
    "--with-commands",
    "commands",
    metavar="URL|PATH",
    help="Do again what people did at the time, by the database of the run that made the recordings.",
)
@click.option(
    "--commands-of", "commanded", metavar="UUID", help="Which run in that database: its UUID or the begin of it."
)
@click.option("--json", "as_json", is_flag=True, help="Print every record as one JSON object a line.")
def command(  # noqa: PLR0913, RUF100 - one parameter an option
    config: Path,
    recordings: tuple[Path, ...],
    start: int | None,
    store: str | None,
    publish: str | None,
    commands: str | None,
    commanded: str | None,
    as_json: bool,
) -> None:
    """Send recordings through the same pipeline as `run`, as fast as it can.

    Several recordings are one stream, in the order given, with gaps where their dates say so. What `run` recorded is
    laid out exactly, by the side files of its segments: name the folder, or some of its segments; --start is refused
    there. Without --store the rows go into a new database in the current folder, named after the run; the
    configuration's own store is never touched. With --with-commands alerts are acknowledged, and notes and values
    given, where they were at the time; left out, --commands-of is the last run in that database. Ctrl-C ends it early:
    what was read by then is stored, and the exit status is 1.

    \b
    Example: driftwatch replay config/post-mortem.toml before.wav during.wav --start 2026-03-01T06:00:00Z
    """  # noqa: D301 - \b is click's mark for lines that stay as they are
    configuration = load_served(config, live=False)
    source = _opened(configuration, recordings, start)
    for warning in source.warnings:
        click.echo(f"Warning: {warning}", err=True)
    if commanded is not None and commands is None:
        raise click.UsageError("got --commands-of without --with-commands; expected the database as well; name it")
    given = _commands(commands, commanded or "last") if commands is not None else []
    run = str(uuid.uuid4())
    _replay(configuration, source, run, (store or f"run-{run}.db", publish), given, as_json)


def _opened(configuration: Configuration, recordings: tuple[Path, ...], start_ns: int | None) -> RecordingSource:
    """Return the checked recordings, or leave with everything that is wrong with them."""
    from driftwatch.stream.recording import open_recordings

    stood_for = _stood_for(configuration)
    with nothing_started():
        source = open_recordings(
            recordings,
            start_ns,
            stood_for.name if stood_for else "recording",
            rate_hz=getattr(stood_for, "rate_hz", None),
            least_inputs=max(channel.input for channel in configuration.channel),
        )
    refuse_misfit(configuration, source.rate_hz, source.inputs)
    return source


def _commands(store: str, run: str) -> list[Command]:
    """Return what was asked for in a run, in order."""
    from driftwatch.pipeline.commands import again
    from driftwatch.records import Action
    from driftwatch.store.queries import Wanted

    with opened_store(store, None) as reader:
        given = again(reader.records("command", Wanted(run=reader.find_run(run))))
    if any(one.action == Action.RELOAD for one in given):
        click.echo(
            "Note: the configuration was reloaded then; this replay judges by CONFIG from begin to end.", err=True
        )
    return given


def _stood_for(configuration: Configuration) -> SourceConfig | None:
    """Return the source in whose place the recordings are read, None in a file without; leave where that is open."""
    sources = {one.name: one for channel in configuration.channel if (one := configuration.source_of(channel))}
    if len(sources) > 1:
        listed = ", ".join(f'"{name}"' for name in sources)
        problem = (
            f"source: got channels of {len(sources)}, {listed}; expected those of one, in whose place the recordings "
            "are read; replay with a file that has only its channels and modes"
        )
        refuse([problem])
    return next(iter(sources.values()), None)


def _replay(
    configuration: Configuration,
    source: RecordingSource,
    run: str,
    where: tuple[str, str | None],
    commands: Sequence[Command],
    as_json: bool,
) -> None:
    """Replay into a database, and onto the bus where the second of `where` says so."""
    from driftwatch.bus.publisher import Publisher
    from driftwatch.daemon.keeper import Keeper
    from driftwatch.daemon.replay import replay
    from driftwatch.pipeline.station import RunHeader, Station
    from driftwatch.records import Origin
    from driftwatch.store.writer import Writer

    store, publish = where
    header = RunHeader(configuration.station.name, run, Origin.REPLAY, source.time_quality)
    station = Station(configuration, header, [source])
    view = RunView(((mode.channel, mode.name) for mode in configuration.mode), every_s=None)
    with ExitStack() as opened:
        with nothing_started():  # the port first: where it is taken, no database comes into being
            publisher = opened.enter_context(Publisher(publish)) if publish else None
            writer = opened.enter_context(Writer.open(store, header.station))
        stop = opened.enter_context(stopped_by_signal())
        output = Output(print_json if as_json else view.show, stop)
        first = source.first_sample  # segments may hold the end of a long run
        shown = not (as_json and sys.stdout.isatty())
        bar = opened.enter_context(progress(source.length - first, source.rate_hz, shown=shown))
        with work_failed():
            ended = replay(
                source,
                station,
                Keeper(writer, publisher, output),
                lambda sample: bar(sample - first),
                stop.is_set,
                commands,
            )
    output.check()
    if not as_json:
        _close(view, store)
    if not ended and not output.is_lost:
        done = station.samples / source.rate_hz
        raise click.ClickException(
            f"interrupted after {done:.1f} s of signal; what was read is stored in {writer.path}"
        )


def _close(view: RunView, store: str) -> None:
    for line in view.summary():
        click.echo(line)
    click.echo(f"What next:  {typed('readings', '--store', store, '--run', view.run[:8])}")
    click.echo(folded(CAUTION))
