"""Tell a running daemon something: a value, or what to do."""

from __future__ import annotations

import click

from driftwatch.cli.asking import Asked, asking_options, give


@click.group("tell")
def command() -> None:
    """Give a daemon a value, or have it reload its configuration or end.

    \b
    Example: driftwatch tell value temperature 21.5 degC --config config/demo.toml
    Example: driftwatch tell reload --config config/demo.toml
    """  # noqa: D301 - \b is click's mark for lines that stay as they are


@command.command(
    "value",
    short_help="Give one value of a slow quantity.",
    context_settings={"ignore_unknown_options": True},  # a value may be negative
)
@click.argument("name")
@click.argument("value")
@click.argument("unit")
@asking_options
def value(name: str, value: str, unit: str, asked: Asked) -> None:
    """Give one VALUE of a slow quantity NAME, such as a temperature or a speed, in UNIT; `missing`: it is not known.

    It becomes a `covariate` record at this moment of the stream, for whoever compares figures later. Without a daemon
    it is written at the end of the last run.

    \b
    Example: driftwatch tell value "chamber temperature" -40.2 degC --config config/demo.toml
    """  # noqa: D301 - \b is click's mark for lines that stay as they are
    give(asked, "covariate", target=name, value=_number(value), unit=unit)


def _number(text: str) -> float | None:
    if text == "missing":
        return None
    try:
        return float(text)
    except ValueError:
        raise click.UsageError(f"got the value {text!r}; expected a number such as 21.5, or `missing`") from None


@command.command("reload", short_help="Have bands and alert settings read again.")
@click.option("--reason", metavar="TEXT", help="Why.")
@asking_options
def reload(reason: str | None, asked: Asked) -> None:
    """Have the daemon read its configuration again, as a hang-up signal does, without losing a sample.

    What needs a restart is refused, with the reason.

    Example: driftwatch tell reload --config config/demo.toml --reason "wider band after the repair"
    """
    give(asked, "reload", reason=reason, needs_daemon=True)


@command.command("stop", short_help="Have the daemon store everything and end.")
@click.option("--reason", metavar="TEXT", help="Why.")
@asking_options
def stop(reason: str | None, asked: Asked) -> None:
    """Have the daemon store everything that came, and end.

    A service manager may start it again; stop it there instead.

    Example: driftwatch tell stop --config config/demo.toml --reason "end of the shift"
    """
    give(asked, "stop", reason=reason, needs_daemon=True)
