"""What commands that act share: whom they ask, who asks, and what they do where no daemon runs."""

from __future__ import annotations

import dataclasses
import json
import socket
import sys
import time
import uuid
from collections.abc import Callable
from dataclasses import dataclass
from functools import wraps
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from driftwatch.cli.looking import print_lines

if TYPE_CHECKING:
    from driftwatch.bus.request import Request
    from driftwatch.config import Configuration

_Function = TypeVar("_Function", bound="Callable[..., Any]")


PATIENCE_S = 10.0
"""How long a command is asked for again, with the same id, until the daemon has stored it, seconds."""

ANOTHER_TRY_S = 0.5

KNOCK_S = 0.5
"""How long it is tried to reach the control port before it counts as free, seconds."""


@dataclass(frozen=True, slots=True)
class Asked:
    """Whom to ask, and who asks."""

    config: Path | None  # of the daemon on this computer
    store: str | None  # the database that it was started with, where that is not the configuration's
    key: Path | None  # that was granted, with where its daemon is
    by: str | None  # person
    request: str | None  # id of the request, to ask again for what may be done already
    as_json: bool


_OPTIONS = (
    click.option(
        "--config",
        metavar="CONFIG",
        type=click.Path(path_type=Path),
        help="Ask the daemon of this configuration, which runs under the same user on this computer.",
    ),
    click.option("--store", metavar="URL|PATH", help="The database, where the daemon was started with --store."),
    click.option(
        "--key",
        metavar="FILE",
        type=click.Path(path_type=Path),
        help="Ask with a key that `driftwatch keys grant` made, on whatever computer.",
    ),
    click.option("--by", metavar="NAME", help="Who asks; left out: the name of the key."),
    click.option("--request", metavar="ID", help="Ask again for what was not answered: it is not done twice."),
    click.option("--json", "as_json", is_flag=True, help="Print the reply as one JSON object."),
)


def asking_options(function: _Function) -> Callable[..., Any]:
    """Add the options that say whom to ask and who asks, given to the function as `Asked`."""

    @wraps(function)
    def asking(**given: Any) -> Any:
        asked = Asked(**{field.name: given.pop(field.name) for field in dataclasses.fields(Asked)})
        return function(asked=asked, **given)

    for option in reversed(_OPTIONS):
        asking = option(asking)
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
        When it is not said whom to ask, or what is asked for is malformed (exit status 2).
    click.ClickException
        When nothing came of it (exit status 1).
    """
    if asked.config is None and asked.key is None:
        raise click.UsageError("got neither --config nor --key; expected one of them, which tells where the daemon is")
    configuration = None if asked.config is None else _configuration(asked.config)
    request = _request(asked, action, fields)
    reply = None
    if configuration is not None and asked.key is None and not needs_daemon:
        reply = _offline(configuration, asked, request)
    if reply is None:
        reply = _answer(configuration, asked, request)
    if asked.as_json:
        print_lines([json.dumps(reply, ensure_ascii=False).encode()])
        sys.exit(0 if reply["ok"] else 1)
    if not reply["ok"]:
        raise click.ClickException(reply["outcome"])
    click.echo(reply["outcome"])
    if not reply.get("stored", True):
        click.echo(f"It is not stored yet; {_again(request)} tells what came of it.", err=True)


def _configuration(path: Path) -> Configuration:
    from driftwatch.config import ConfigError, load

    try:
        return load(path)
    except ConfigError as error:
        raise click.UsageError(str(error)) from None


def _request(asked: Asked, action: str, fields: dict[str, Any]) -> Request:
    """Return the request, checked as a daemon would."""
    from driftwatch.bus.request import RequestError, parse_request

    said = {"request": asked.request or str(uuid.uuid4()), "action": action, "by": asked.by, **fields}
    try:
        return parse_request(json.dumps(said).encode())
    except RequestError as error:
        raise click.UsageError(str(error)) from None


def _again(request: Request) -> str:
    return f"the same command with --request {request.request}"


def _offline(config: Configuration, asked: Asked, request: Request) -> dict[str, Any] | None:
    """Write a command at the end of the last run; None where somebody is at the control port, who is to be asked."""
    from driftwatch.bus.clerk import by_of
    from driftwatch.bus.keys import Granted, Role
    from driftwatch.daemon.door import user_name
    from driftwatch.daemon.offline import carry_out
    from driftwatch.daemon.state import StateBusyError, StateError
    from driftwatch.records import Command
    from driftwatch.store.errors import StoreError

    if _is_taken(config.bus.control):  # also by a daemon that was started with another store, and so another lock
        return None
    by = by_of(request, Granted(user_name(), Role.OPERATE, "", 0))
    command = Command(
        0, request.request, by, request.action, request.target, request.reason, request.value, request.unit
    )
    try:
        done = carry_out(config, command, asked.store)
    except StateBusyError:
        return None
    except (StateError, StoreError) as error:
        raise click.ClickException(str(error)) from None
    outcome = done.outcome or ""
    ok = not outcome.startswith("refused")  # as a daemon replies
    return {"request": done.request, "ok": ok, "outcome": outcome, "stored": True}


def _is_taken(endpoint: str) -> bool:
    """Say whether somebody listens at an endpoint."""
    from driftwatch.bus.client import reachable

    host, _, port = reachable(endpoint).removeprefix("tcp://").rpartition(":")
    try:
        with socket.create_connection((host.strip("[]"), int(port)), KNOCK_S):
            return True
    except OSError:
        return False


def _answer(config: Configuration | None, asked: Asked, request: Request) -> dict[str, Any]:
    """Return the daemon's reply; where it is slow to store, the same is asked for again for a while."""
    from driftwatch.bus.client import Asker
    from driftwatch.bus.errors import BusError, NoDaemonError
    from driftwatch.bus.keys import KeyFolder
    from driftwatch.daemon.state import state_folder

    endpoint = None if config is None or asked.key is not None else config.bus.control
    said = {name: getattr(request, name) for name in ("request", "by", "target", "reason", "value", "unit")}
    end = time.monotonic() + PATIENCE_S
    try:
        key = asked.key
        if key is None and config is not None:
            key = KeyFolder(state_folder(config, asked.store)).operator_path
        if key is None:
            raise ValueError("neither a configuration nor a key was named")
        with Asker(endpoint, key) as asker:
            while True:
                reply = asker.ask(request.action, **said)
                is_final = reply.get("stored", True) and reply.get("fault") != "rate"
                if is_final or time.monotonic() > end:
                    return reply
                time.sleep(ANOTHER_TRY_S)
    except NoDaemonError as error:
        raise click.ClickException(f"{error}; if one was only busy, {_again(request)} is not done twice") from None
    except BusError as error:
        raise click.ClickException(str(error)) from None
