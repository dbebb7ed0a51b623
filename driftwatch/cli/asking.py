"""What commands that act share: whom they ask, who asks, and what they do where no daemon runs."""

from __future__ import annotations

import json
import sys
import uuid
from collections.abc import Callable
from dataclasses import dataclass
from functools import wraps
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from driftwatch.cli.looking import print_lines

if TYPE_CHECKING:
    from driftwatch.config import Configuration

_Function = TypeVar("_Function", bound="Callable[..., Any]")


@dataclass(frozen=True, slots=True)
class Asked:
    """Whom to ask, and who asks."""

    config: Path | None  # of the daemon on this computer
    key: Path | None  # that was granted, with where its daemon is
    by: str | None  # person
    as_json: bool


def asking_options(function: _Function) -> Callable[..., Any]:
    """Add ``--config``, ``--key``, ``--by`` and ``--json``, given to the function as `Asked`."""

    @click.option(
        "--config",
        metavar="CONFIG",
        type=click.Path(path_type=Path),
        help="Ask the daemon of this configuration, which runs under the same user on this computer.",
    )
    @click.option(
        "--key",
        metavar="FILE",
        type=click.Path(path_type=Path),
        help="Ask with a key that `driftwatch keys grant` made, on whatever computer.",
    )
    @click.option("--by", metavar="NAME", help="Who asks; left out: the name of the key.")
    @click.option("--json", "as_json", is_flag=True, help="Print the reply as one JSON object.")
    @wraps(function)
    def asking(config: Path | None, key: Path | None, by: str | None, as_json: bool, **others: Any) -> Any:
        return function(asked=Asked(config, key, by, as_json), **others)

    return asking


def give(asked: Asked, action: str, *, needs_daemon: bool = False, **fields: Any) -> None:
    """Give a command to the daemon and print what came of it; where none runs, write it down instead if that will do.

    Parameters
    ----------
    asked
        Whom, and who.
    action
        What to do.
    needs_daemon
        Whether it means nothing without one.
    fields
        ``target``, ``reason``, ``value``, ``unit``.

    Raises
    ------
    click.UsageError
        When it is not said whom to ask (exit status 2).
    click.ClickException
        When nothing came of it (exit status 1).
    """
    if asked.config is None and asked.key is None:
        raise click.UsageError("got neither --config nor --key; expected one of them, which tells where the daemon is")
    configuration = None if asked.config is None else _configuration(asked.config)
    reply = None
    if configuration is not None and asked.key is None and not needs_daemon:
        reply = _offline(configuration, action, asked.by, fields)
    if reply is None:
        reply = _answer(configuration, asked, action, fields)
    if asked.as_json:
        print_lines([json.dumps(reply, ensure_ascii=False).encode()])
        sys.exit(0 if reply["ok"] else 1)
    if not reply["ok"]:
        raise click.ClickException(reply["outcome"])
    click.echo(reply["outcome"])


def _configuration(path: Path) -> Configuration:
    from driftwatch.config import ConfigError, load

    try:
        return load(path)
    except ConfigError as error:
        raise click.UsageError(str(error)) from None


def _offline(config: Configuration, action: str, by: str | None, fields: dict[str, Any]) -> dict[str, Any] | None:
    """Write a command at the end of the last run; None where a daemon runs, which is to be asked."""
    from driftwatch.daemon.door import user_name
    from driftwatch.daemon.offline import carry_out
    from driftwatch.daemon.state import StateBusyError, StateError
    from driftwatch.records import Command
    from driftwatch.store.errors import StoreError

    user = user_name()
    who = f"{by} ({user})" if by else user
    command = Command(0, str(uuid.uuid4()), who, action, **{"target": None, "reason": None, **fields})
    try:
        done = carry_out(config, command)
    except StateBusyError:
        return None
    except (StateError, StoreError) as error:
        raise click.ClickException(str(error)) from None
    outcome = done.outcome or ""
    ok = not outcome.startswith("refused")  # as a daemon replies
    return {"request": done.request, "ok": ok, "outcome": outcome, "stored": True}


def _answer(config: Configuration | None, asked: Asked, action: str, fields: dict[str, Any]) -> dict[str, Any]:
    from driftwatch.bus.client import Asker
    from driftwatch.bus.errors import BusError
    from driftwatch.bus.keys import KeyFolder

    endpoint = None if config is None or asked.key is not None else config.bus.control
    try:
        key = asked.key or KeyFolder(config.state).operator_path  # type: ignore[union-attr]
        with Asker(endpoint, key) as asker:
            return asker.ask(action, by=asked.by, **fields)
    except BusError as error:
        raise click.ClickException(str(error)) from None
