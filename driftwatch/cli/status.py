"""Tell whether a daemon measures, since when, and what stands."""

from __future__ import annotations

import json
import sys
from typing import TYPE_CHECKING

import click

from driftwatch.cli.listen import DEFAULT_ENDPOINT
from driftwatch.cli.looking import DEFAULT_STORE, print_lines, quiet_pipe

if TYPE_CHECKING:
    from driftwatch.cli.board import Verdict
    from driftwatch.cli.looks import Look, Looker, NextBeat, Place
    from driftwatch.cli.rows import Entry

WAIT_S = 3.0
"""Time without a heartbeat after which a daemon counts as unreachable, seconds; it gives one every second."""

SILENT_WINDOWS = 3.0
"""So many windows without a track point, and `SILENT_S` more, make an ambient mode one that cannot be told."""

SILENT_S = 10.0

_NO_LIMIT = 1_000_000  # lines


@click.command("status")
@click.option(
    "--config",
    metavar="CONFIG",
    type=click.Path(),
    help="Ask the daemon of this configuration, and look into its store.",
)
@click.option(
    "--store", metavar="URL|PATH", help=f"Look into this database; left out: CONFIG's, or {DEFAULT_STORE} here."
)
@click.option(
    "--publish", metavar="ENDPOINT", help=f"Where the daemon publishes; left out: CONFIG's, or {DEFAULT_ENDPOINT}."
)
@click.option(
    "--wait",
    type=click.FloatRange(min=0.1),
    default=WAIT_S,
    show_default=True,
    metavar="SECONDS",
    help="Longest wait for a sign of life.",
)
@click.option("--watch", is_flag=True, help="Go on, a look a second, until interrupted.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object, a line for each look.")
def command(  # noqa: PLR0913, RUF100 - one parameter an option
    config: str | None, store: str | None, publish: str | None, wait: float, watch: bool, as_json: bool
) -> None:
    """Tell whether a daemon measures, since when, and what stands; worst first.

    It listens for the daemon's heartbeat and reads the rest from its store. Exit status: 0 all is quiet, 1 no sign of
    life, 3 an alert stands, 4 something cannot be told: a mode that is not tracked, an alert, an open fault, samples
    that do not advance, a store that is not the daemon's. With --watch it is that of the last look.

    \b
    Example: driftwatch status --config config/demo.toml
    Example: driftwatch status --config config/demo.toml --watch
    """  # noqa: D301 - \b is click's mark for lines that stay as they are
    from driftwatch.cli.looks import Looker, listening

    place = _place(config, store, publish)
    with quiet_pipe(), listening(place) as next_beat:
        if watch:
            verdict = _watch(Looker(place, wait), next_beat, wait, as_json)
        else:
            look = Looker(place, wait).look(next_beat(wait, lambda: False))
            _print(look, as_json)
            verdict = look.verdict
    raise click.exceptions.Exit(int(verdict))


def _place(config: str | None, store: str | None, publish: str | None) -> Place:
    from driftwatch.cli.listen_asking import way_of
    from driftwatch.cli.looks import Place
    from driftwatch.cli.view import key_of
    from driftwatch.config import ConfigError, load
    from driftwatch.records import Method

    if config is None:
        return Place(publish or DEFAULT_ENDPOINT, store or DEFAULT_STORE)
    try:
        found = load(config)
    except ConfigError as error:
        raise click.UsageError(str(error)) from None
    modes = tuple((mode.channel, mode.name) for mode in found.mode)
    silent = {
        key_of(mode.channel, mode.name): SILENT_WINDOWS * mode.window_s + SILENT_S
        for mode in found.mode
        if Method.AMBIENT in mode.methods
    }
    way = way_of(found, publish)
    return Place(way.endpoint, store or found.store.url, modes, silent, way.key if way.guarded else None)


# ---------------------------------------------------------------------------------------------- printing


def _watch(looker: Looker, next_beat: NextBeat, wait_s: float, as_json: bool) -> Verdict:
    """Look again at each heartbeat until interrupted; return the verdict of the last look."""
    from driftwatch.cli.board import Verdict
    from driftwatch.cli.live_view import Pane, on_terminal
    from driftwatch.cli.shared import stopped_by_signal

    verdict = Verdict.UNREACHABLE
    pane = Pane() if on_terminal() and not as_json else None
    with stopped_by_signal() as stop:
        try:
            while not stop.is_set():
                beat = next_beat(wait_s, stop.is_set)
                if stop.is_set():
                    break
                look = looker.look(beat)
                verdict = look.verdict
                if pane is None:
                    _print(look, as_json)
                else:
                    pane.draw(_screen(look, *pane.size))
        finally:
            if pane is not None:
                pane.close(keep=True)
    return verdict


def _screen(look: Look, width: int, height: int) -> list[Entry]:
    """Return a look as entries for so many columns and lines."""
    from driftwatch.cli.board import Verdict
    from driftwatch.cli.live_view import screen_of
    from driftwatch.cli.rows import COLOURS, Entry, alert_text, fitted, wrapped

    if look.verdict is not Verdict.UNREACHABLE:
        return screen_of(look.board, width, height)
    texts = [f"UNREACHABLE  no sign of life from {look.place.endpoint}; is a daemon running that publishes there?"]
    found = [Entry("verdict", (texts[0],), COLOURS[look.verdict]), Entry("state", (look.told,))]
    now_ns = look.last.time_ns if look.last else 0
    found += [Entry("alert that stands", (f"then: {alert_text(one, now_ns)}",)) for one in look.board.standing]
    return fitted([wrapped(entry, width) for entry in found], width, height)


def _print(look: Look, as_json: bool) -> None:
    if as_json:
        from driftwatch.cli.looks import object_of

        print_lines([json.dumps(object_of(look), ensure_ascii=False, allow_nan=False).encode()])
        return
    from driftwatch.cli.live_view import Pane, on_terminal
    from driftwatch.cli.view import WIDTH

    if on_terminal():
        pane = Pane()
        pane.print(_screen(look, pane.size[0], _NO_LIMIT))
        return
    for entry in _screen(look, WIDTH, _NO_LIMIT):
        for line in entry.lines:
            click.echo(line)
    sys.stdout.flush()
