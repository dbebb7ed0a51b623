"""Endpoints of the bus: written as tcp://host:port, and not beyond loopback."""

from __future__ import annotations

import ipaddress
import re
from typing import Annotated

from pydantic import AfterValidator, Field

from driftwatch.config.values import refusal

_ENDPOINT = re.compile(r"tcp://(?P<host>\[[0-9a-fA-F:.]+\]|[^\s:/\[\]]+):(?P<port>[0-9]{1,5})", re.ASCII)


def check_endpoint(text: str) -> str:
    """Return an endpoint that may be bound.

    Raises
    ------
    PydanticCustomError
        A ValueError; when the text is no endpoint, or lies beyond loopback, where nobody could be kept out.
    """
    found = _ENDPOINT.fullmatch(text)
    if found is None or not 1 <= int(found["port"]) <= 65_535:
        raise refusal("tcp://host:port with a port from 1 to 65535", 'write it as "tcp://127.0.0.1:5571"')
    if not _is_loopback(found["host"].strip("[]")):
        raise refusal("an endpoint on this computer", 'without keys use a loopback address such as "127.0.0.1"')
    return text


def _is_loopback(host: str) -> bool:
    if host.lower() == "localhost":
        return True
    try:
        return ipaddress.ip_address(host).is_loopback
    except ValueError:
        return False


Endpoint = Annotated[str, Field(strict=True), AfterValidator(check_endpoint)]
