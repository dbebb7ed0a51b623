"""``driftwatch keys``: who may listen to a daemon from elsewhere, and who may command it."""

from __future__ import annotations

import json
import time
from dataclasses import dataclass
from functools import wraps
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from driftwatch.cli.figures import moment
from driftwatch.cli.looking import DEFAULT_STORE, print_lines, print_table, quiet_pipe
from driftwatch.cli.shared import refuse

if TYPE_CHECKING:
    from collections.abc import Callable

    from driftwatch.bus.keys import ClientKey, KeyFolder
    from driftwatch.config import Configuration

_Function = TypeVar("_Function", bound="Callable[..., Any]")


@dataclass(frozen=True, slots=True)
class Where:
    """Whose keys are meant."""

    config: Configuration | None
    folder: KeyFolder


def folder_options(function: _Function) -> Callable[..., Any]:
    """Add ``--config`` and ``--state``, given to the function as `Where`."""

    @click.option(
        "--config",
        metavar="CONFIG",
        type=click.Path(path_type=Path),
        help="The keys of this configuration's daemon.",
    )
    @click.option(
        "--state",
        metavar="FOLDER",
        type=click.Path(path_type=Path),
        help="The keys in this state folder; left out: in the current folder, if a daemon ran there.",
    )
    @wraps(function)
    def placed(config: Path | None, state: Path | None, **others: Any) -> Any:
        return function(where=_where(config, state), **others)

    return placed


@click.group("keys")
def command() -> None:
    """Grant, list and revoke the keys with which others may listen to a daemon or command it.

    The user who runs a daemon needs none: theirs is made at its first start. What is granted or revoked counts at
    once, for a running daemon, too.

    \b
    Example: driftwatch keys grant "night shift" --role operate --config config/demo.toml
    Example: driftwatch keys revoke "night shift" --config config/demo.toml
    """  # noqa: D301 - \b is click's mark for lines that stay as they are


@command.command("grant")
@click.argument("name")
@click.option(
    "--role",
    type=click.Choice(["look", "operate"]),
    required=True,
    help="look: listen, and ask how things stand; operate: give commands as well.",
)
@click.option("--out", metavar="FILE", type=click.Path(path_type=Path), help="Where to; left out: NAME.key here.")
@click.option(
    "--host", metavar="HOST", help="How others call this computer; left out: its endpoint's address, or its name."
)
@folder_options
def grant(name: str, role: str, out: Path | None, host: str | None, where: Where) -> None:
    """Make a key called NAME and let it in; write all that its owner needs to a file to hand over.

    The file is like a password: hand it over in a way that nobody else can read.

    Example: driftwatch keys grant "night shift" --role operate --config config/demo.toml
    """
    from driftwatch.bus.errors import KeysError
    from driftwatch.bus.keys import Role, checked_name
    from driftwatch.daemon.door import user_name

    try:
        file = out or Path(f"{checked_name(name)}.key")
        control, publish = (_reached(endpoint, host) for endpoint in _endpoints(where))
        _make_state(where.folder.path.parent)
        where.folder.ensure(user_name())
        key = where.folder.grant(name, Role(role), time.time_ns(), (control, publish), file)
    except KeysError as error:
        refuse([error])
    click.echo(f"{key.name} may {key.role}. Hand over {file}, as a password would be: whoever has it may come in.")
    _remark(key)


@command.command("list")
@click.option("--json", "as_json", is_flag=True, help="One JSON object a line.")
@folder_options
def list_(as_json: bool, where: Where) -> None:
    """Print whose keys are let in, in the order in which they were granted; first the daemon's own user.

    Example: driftwatch keys list --config config/demo.toml
    """
    from driftwatch.bus.errors import KeysError, NoKeyError

    try:
        keys = [(one.name, one.role.value, one.granted_ns, one.public) for one in where.folder.granted()]
        operator = where.folder.operator()
        rows = [(operator.name, operator.role.value, None, operator.public), *keys]
    except NoKeyError:
        rows = []
    except KeysError as error:
        refuse([error])
    with quiet_pipe():
        if as_json:
            print_lines(json.dumps(_object(*row), ensure_ascii=False).encode() for row in rows)
        elif rows:
            cells = [[name, role, _granted(at_ns), f"{public[:8]}..."] for name, role, at_ns, public in rows]
            print_table(["name", "role", "granted", "public key"], cells)
        else:
            click.echo(f"There are no keys in {where.folder.path} yet.", err=True)


@command.command("revoke")
@click.argument("name")
@folder_options
def revoke(name: str, where: Where) -> None:
    """Let the key called NAME in no more; whoever is in with it is sent away.

    Example: driftwatch keys revoke "night shift" --config config/demo.toml
    """
    from driftwatch.bus.errors import KeysError

    try:
        gone = where.folder.revoke(name)
    except KeysError as error:
        refuse([error])
    click.echo(f"{gone.name} is let in no more.")


# ---------------------------------------------------------------------------------------------- where


def _where(config: Path | None, state: Path | None) -> Where:
    from driftwatch.bus.keys import FOLDER_NAME, KeyFolder
    from driftwatch.config import ConfigError, load

    if config is not None and state is not None:
        raise click.UsageError("got both --config and --state; expected one of them; leave out the other")
    if config is not None:
        try:
            found = load(config)
        except ConfigError as error:
            refuse(error.problems)
        return Where(found, KeyFolder(found.state))
    if state is None and not any(Path(name).exists() for name in (FOLDER_NAME, DEFAULT_STORE)):
        raise click.UsageError("no daemon ran in the current folder; expected --config CONFIG or --state FOLDER")
    return Where(None, KeyFolder((state or Path()).absolute()))


def _make_state(folder: Path) -> None:
    """Make a state folder as a daemon's first start would."""
    from driftwatch.bus.keyfiles import FOLDER_MODE, unusable

    try:
        folder.mkdir(FOLDER_MODE, exist_ok=True)
    except OSError as error:
        raise unusable(folder, error) from None


def _endpoints(where: Where) -> tuple[str, str]:
    """Return where the daemon is: for commands, and for what it publishes."""
    from driftwatch.bus.errors import NoKeyError

    if where.config is not None:
        return (where.config.bus.control, where.config.bus.publish)
    try:
        operator = where.folder.operator()
    except NoKeyError:
        operator = None
    if operator is None or operator.control is None or operator.publish is None:
        raise click.UsageError(
            f"{where.folder.path} does not tell where the daemon is: it has not run yet; expected --config CONFIG"
        )
    return (operator.control, operator.publish)


def _reached(endpoint: str, host: str | None) -> str:
    """Return an endpoint as others reach it."""
    import socket

    bound, _, port = endpoint.removeprefix("tcp://").rpartition(":")
    if host is None and bound in ("*", "0.0.0.0", "[::]"):  # noqa: S104 - not bound here
        host = socket.gethostname()
    return f"tcp://{host or bound}:{port}"


def _remark(key: ClientKey) -> None:
    from driftwatch.config import is_loopback

    near = [
        what for what, endpoint in (("commands", key.control), ("messages", key.publish)) if is_loopback(endpoint or "")
    ]
    if near:
        click.echo(
            f"Note: {' and '.join(near)} can be had on this computer only; [bus] control and publish say where.",
            err=True,
        )


# ---------------------------------------------------------------------------------------------- printing


def _granted(at_ns: int | None) -> str:
    return "with the daemon" if at_ns is None else moment(at_ns)


def _object(name: str, role: str, at_ns: int | None, public: str) -> dict[str, Any]:
    from driftwatch.records import time_text

    granted = None if at_ns is None else time_text(at_ns)
    return {"kind": "key", "name": name, "role": role, "granted": granted, "public": public}
