"""Print stored measurements and track points."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from driftwatch.cli.figures import NONE, known_with_std, moment, with_interval
from driftwatch.cli.looking import (
    limited,
    opened_store,
    print_envelopes,
    print_table,
    quiet_pipe,
    span_options,
    store_options,
)
from driftwatch.records import Envelope, Measurement, Method, Track

if TYPE_CHECKING:
    from driftwatch.store.queries import Reader, Wanted


@click.command("readings")
@store_options
@span_options
@click.option("--channel", metavar="NAME", help="Only this channel.")
@click.option("--mode", metavar="NAME", help="Only this mode.")
@click.option(
    "--method", type=click.Choice([str(method) for method in Method]), help="Only measurements by this method."
)
@click.option("--tracks", is_flag=True, help="Track points instead of measurements.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object a line, as on the bus.")
def command(  # noqa: PLR0913, RUF100 - one parameter an option
    store: str | None,
    config: str | None,
    run: str | None,
    channel: str | None,
    mode: str | None,
    method: str | None,
    since: int | None,
    until: int | None,
    limit: int | None,
    tracks: bool,
    as_json: bool,
) -> None:
    """Print stored measurements, or track points, oldest first.

    Figures carry their standard uncertainty; Q its 95 % interval.

    \b
    Example: driftwatch readings --config config/demo.toml --mode "housing rocking" --limit 10
    Example: driftwatch readings --config config/demo.toml --run last --tracks --json
    """  # noqa: D301 - \b is click's mark for lines that stay as they are
    from driftwatch.store.queries import Wanted

    if tracks and method:
        raise click.UsageError("got --method with --tracks; a track point joins all methods; leave out one of them")
    with quiet_pipe(), opened_store(store, config) as reader:
        wanted = Wanted(
            run=reader.find_run(run) if run else None,
            channel=channel,
            mode=mode,
            method=Method(method) if method else None,
            since_ns=since,
            until_ns=until,
            limit=limited(limit, as_json),
        )
        kind = "track" if tracks else "measurement"
        if as_json:
            print_envelopes(reader.records(kind, wanted))
        else:
            _print_readable(reader, kind, wanted)


def _print_readable(reader: Reader, kind: str, wanted: Wanted) -> None:
    envelopes = list(reader.records(kind, wanted))
    if not envelopes:
        click.echo(f"No {kind} here is as asked for; `driftwatch runs` shows what there is.", err=True)
        return
    several = len({envelope.run for envelope in envelopes}) > 1
    heads = ["time", "channel", "mode", "method", "frequency / Hz", "Q (95 %)", "status"]
    if kind == "track":
        heads.remove("method")
    rows = [_row(envelope) for envelope in envelopes]
    if several:
        heads = ["run", *heads]
        rows = [[envelope.run[:8], *row] for envelope, row in zip(envelopes, rows, strict=True)]
    print_table(heads, rows)
    if wanted.limit == len(rows):
        click.echo(f"The latest {len(rows)}; --limit shows more.", err=True)


def _row(envelope: Envelope) -> list[str]:
    match envelope.body:
        case Measurement() as body:
            kind = [str(body.method)]
            status = ("usable" if body.usable else "not usable") + "".join(f", {word}" for word in body.reasons)
        case Track() as body:
            kind = []
            status = f"{body.status}, {body.reason}" if body.reason else str(body.status)
        case _:
            raise TypeError(f"{envelope.kind} is no reading")
    frequency = known_with_std(body.frequency_hz, body.frequency_std_hz)
    q = with_interval(body.q, body.q_low, body.q_high)
    return [moment(envelope.time_ns), body.channel, body.mode, *kind, frequency, q, status or NONE]
