"""Look at notes, and write one."""

from __future__ import annotations

import click

from driftwatch.cli.asking import Asked, asking_options, give
from driftwatch.cli.figures import moment
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
from driftwatch.records import HANDOVER, Note


@click.group("notes", cls=LookingGroup)
def command() -> None:
    """Print what people wrote down, or write a note.

    \b
    Example: driftwatch notes add "belt tensioned" --config config/demo.toml --by anna
    Example: driftwatch notes --config config/demo.toml --handover
    """  # noqa: D301 - \b is click's mark for lines that stay as they are


@command.command("list", short_help="Print notes, oldest first.")
@store_options
@span_options
@click.option("--handover", is_flag=True, help="Only those for the next shift.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object a line, as on the bus.")
def listed(  # noqa: PLR0913, RUF100 - one parameter an option
    store: str | None,
    config: str | None,
    run: str | None,
    since: int | None,
    until: int | None,
    limit: int | None,
    handover: bool,
    as_json: bool,
) -> None:
    """Print notes, oldest first, with who wrote them.

    Example: driftwatch notes list --config config/demo.toml --since 2026-03-01T06:00:00Z
    """
    from driftwatch.store.queries import Wanted

    with quiet_pipe(), opened_store(store, config) as reader:
        wanted = Wanted(run=reader.find_run(run) if run else None, since_ns=since, until_ns=until)
        found = [(one, one.body) for one in reader.records("note", wanted) if isinstance(one.body, Note)]
        shown = [pair for pair in found if pair[1].handover or not handover]
        most = limited(limit, as_json)
        latest = shown if most is None else shown[-most:]
        if as_json:
            print_envelopes(envelope for envelope, _ in latest)
        elif latest:
            rows = [
                [moment(one.time_ns), note.by, "handover" if note.handover else "", note.text] for one, note in latest
            ]
            print_table(["time", "by", "for", "note"], rows)
            if len(latest) < len(shown):
                click.echo(f"The latest {len(latest)}; --limit shows more than {SHOWN}.", err=True)
        else:
            click.echo("No note here is as asked for; `driftwatch notes add TEXT` writes one.", err=True)


@command.command("add", short_help="Write a note.")
@click.argument("text")
@click.option("--handover", is_flag=True, help="For the next shift.")
@asking_options
def added(text: str, handover: bool, asked: Asked) -> None:
    """Write down TEXT, with who and when, beside what was measured.

    The daemon is asked; where none runs, it is written at the end of its last run.

    \b
    Example: driftwatch notes add "belt tensioned" --config config/demo.toml
    Example: driftwatch notes add "watch the drive end, it ran hot" --handover --by anna --config config/demo.toml
    """  # noqa: D301 - \b is click's mark for lines that stay as they are
    give(asked, "note", target=HANDOVER if handover else None, reason=text)
