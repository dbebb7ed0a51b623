"""Look at alerts, and take note of them."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from driftwatch.cli.asking import Asked, asking_options, give
from driftwatch.cli.figures import NONE, moment
from driftwatch.cli.looking import (
    SHOWN,
    limited,
    opened_store,
    print_envelopes,
    print_table,
    quiet_pipe,
    span_options,
    store_options,
)
from driftwatch.cli.verbs import LookingGroup
from driftwatch.records import Alert, AlertState

if TYPE_CHECKING:
    from driftwatch.records import Envelope

_HEADS = ["time", "alert", "state", "priority", "by", "what happened"]


@click.group("alerts", cls=LookingGroup)
def command() -> None:
    """Print what alerts did, or acknowledge one.

    \b
    Example: driftwatch alerts --config config/demo.toml --standing
    Example: driftwatch alerts acknowledge "drive end/housing rocking/bolts" --config config/demo.toml --reason "seen"
    """  # noqa: D301 - \b is click's mark for lines that stay as they are


@command.command("list", short_help="Print what alerts did, oldest first.")
@store_options
@span_options
@click.option("--standing", is_flag=True, help="Only the last word on each alert that stands now.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object a line, as on the bus.")
def listed(  # noqa: PLR0913, RUF100 - one parameter an option
    store: str | None,
    config: str | None,
    run: str | None,
    since: int | None,
    until: int | None,
    limit: int | None,
    standing: bool,
    as_json: bool,
) -> None:
    """Print what alerts did: each change of state, and of what can be told, oldest first.

    With --standing the last word on each alert of the run that is not normal; left out, --run is then the last.

    Example: driftwatch alerts list --config config/demo.toml --standing
    """
    from driftwatch.store.queries import Wanted

    with quiet_pipe(), opened_store(store, config) as reader:
        found = reader.find_run(run) if run else None
        if standing:
            latest = reader.latest(found)
            shown = [one for one in (latest.records if latest else ()) if _stands(one)]
        else:
            most = limited(limit, as_json)
            shown = list(reader.records("alert", Wanted(run=found, since_ns=since, until_ns=until, limit=most)))
        if as_json:
            print_envelopes(shown)
        elif shown:
            print_table(_HEADS, [_row(one) for one in shown])
            if not standing and len(shown) == (limit or SHOWN):
                click.echo(f"The latest {len(shown)}; --limit shows more.", err=True)
        else:
            click.echo("No alert stands." if standing else "No alert here is as asked for.", err=True)


def _stands(envelope: Envelope) -> bool:
    return isinstance(envelope.body, Alert) and envelope.body.state is not AlertState.NORMAL


def _row(envelope: Envelope) -> list[str]:
    body = envelope.body
    if not isinstance(body, Alert):
        raise TypeError(f"{envelope.kind} is no alert")
    state = str(body.state).replace("_", " ") + ("" if body.determinate else ", cannot tell")
    return [moment(envelope.time_ns), body.alert, state, str(body.priority), body.by or NONE, body.reason or NONE]


@command.command("acknowledge", short_help="Tell that somebody has taken note of an alert.")
@click.argument("alert")
@click.option("--reason", metavar="TEXT", help="What was found, or what is done about it.")
@asking_options
def acknowledged(alert: str, reason: str | None, asked: Asked) -> None:
    """Tell that somebody has taken note of ALERT, as `driftwatch alerts` names it.

    The daemon is asked; where none runs, it is written at the end of its last run. It is stored with who, when and why,
    and the alert no longer asks for attention; it returns to normal once its figure is back inside.

    \b
    Example: driftwatch alerts acknowledge "drive end/housing rocking/bolts" --config config/demo.toml --reason slack
    """  # noqa: D301 - \b is click's mark for lines that stay as they are
    give(asked, "acknowledge", target=alert, reason=reason)
