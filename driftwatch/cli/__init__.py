"""The command line: parse, call, print. Each command is a module of this package, imported only when it is used."""

from __future__ import annotations

import importlib
import sys
import traceback

import click

from driftwatch import __version__

COMMANDS = {
    "run": "Watch live, in the foreground, until interrupted.",
    "replay": "Send recordings through the same pipeline, as fast as it can.",
    "status": "Tell whether a daemon measures and what stands, worst first.",
    "check": "Read and explain a configuration.",
    "devices": "Print the sound inputs, and what they hear.",
    "simulate": "Make a recording of resonators with known truth.",
    "alerts": "Print what alerts did, or acknowledge one.",
    "notes": "Print what people wrote down, or write a note.",
    "tell": "Give a daemon a value, or have it reload or end.",
    "readings": "Print stored measurements and track points.",
    "runs": "Print what runs a store holds.",
    "listen": "Print what the bus carries.",
    "store": "Look after a store: info, check, prune, backup.",
    "keys": "Grant, list and revoke keys for others.",
}
"""Name and summary of every command: the group's help needs no import of theirs."""


class _Group(click.Group):
    """A group that imports a command's module when it is called, and reports errors in one line."""

    def list_commands(self, ctx: click.Context) -> list[str]:  # noqa: ARG002 - click's signature
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:  # noqa: ARG002
        if cmd_name not in COMMANDS:
            return None
        command = importlib.import_module(f"driftwatch.cli.{cmd_name}").command
        if not isinstance(command, click.Command):
            raise TypeError(f"driftwatch.cli.{cmd_name}.command is not a command")
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:  # noqa: ARG002
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))

    def invoke(self, ctx: click.Context) -> object:
        try:
            return super().invoke(ctx)
        except (click.exceptions.Exit, click.Abort, click.ClickException, BrokenPipeError):
            raise
        except Exception as error:  # noqa: BLE001 - the last stop: one line for people, everything with --debug
            if ctx.params.get("debug"):
                traceback.print_exc()
            else:
                click.echo(
                    f"Error: {type(error).__name__}: {error} (`driftwatch --debug COMMAND` shows where)", err=True
                )
            sys.exit(1)


@click.group(
    cls=_Group,
    invoke_without_command=True,
    no_args_is_help=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)
@click.version_option(__version__, prog_name="driftwatch")
@click.option("--debug", is_flag=True, help="Show the traceback of an unexpected error.")
@click.pass_context
def main(ctx: click.Context, debug: bool) -> None:  # noqa: ARG001 - read from the context
    """Follow the natural frequency and Q of resonances, and say when they leave their bands.

    Example: driftwatch replay config/post-mortem.toml recording.wav
    """
    if ctx.invoked_subcommand is None:
        click.echo(ctx.get_help())
        click.echo(
            "\nWhere to begin:\n"
            "  driftwatch run config/demo.toml     watches three simulated resonances\n"
            "  driftwatch check config/demo.toml   explains a configuration\n"
            "  driftwatch COMMAND --help           explains a command, with an example"
        )
