"""Endpoints of the bus: written as tcp://host:port; beyond loopback only where keys say who may come in."""

from __future__ import annotations

import ipaddress
import re
from typing import TYPE_CHECKING, Annotated

from pydantic import AfterValidator, Field

from driftwatch.config.errors import Problem
from driftwatch.config.values import refusal

if TYPE_CHECKING:
    from driftwatch.config.models import Configuration

_ENDPOINT = re.compile(r"tcp://(?P<host>\[[0-9a-fA-F:.]+\]|[^\s:/\[\]]+):(?P<port>[0-9]{1,5})", re.ASCII)


BEYOND = "an endpoint on this computer"
"""What is expected of an endpoint, where there are no keys."""

LOOPBACK = 'without keys use a loopback address such as "127.0.0.1"'
"""What to do about an endpoint beyond it."""

GRANT = f"{LOOPBACK}, or grant one first: driftwatch keys grant NAME --role look --config CONFIG"
"""What else can be done where somebody is to come in."""


def check_endpoint(text: str) -> str:
    """Return an endpoint, if it is written as one.

    Raises
    ------
    PydanticCustomError
        A ValueError; when the text is no endpoint.
    """
    found = _ENDPOINT.fullmatch(text)
    if found is None or not 1 <= int(found["port"]) <= 65_535:
        raise refusal("tcp://host:port with a port from 1 to 65535", 'write it as "tcp://127.0.0.1:5571"')
    return text


def is_loopback(endpoint: str) -> bool:
    """Say whether only this computer reaches an endpoint; a name other than ``localhost`` may be any computer."""
    host = endpoint.removeprefix("tcp://").rpartition(":")[0].strip("[]")
    if host.lower() == "localhost":
        return True
    try:
        return ipaddress.ip_address(host).is_loopback
    except ValueError:
        return False


def unguarded(config: Configuration, *, granted: bool) -> list[Problem]:
    """Return which endpoints lie beyond loopback although nobody could be told from a stranger there.

    Parameters
    ----------
    config
        A valid configuration.
    granted
        Whether a key is granted in its state folder.
    """
    if granted:
        return []
    return [
        Problem(f"bus . {key}", f'"{endpoint}", beyond this computer', BEYOND, GRANT)
        for key, endpoint in (("publish", config.bus.publish), ("control", config.bus.control))
        if not is_loopback(endpoint)
    ]


Endpoint = Annotated[str, Field(strict=True), AfterValidator(check_endpoint)]
