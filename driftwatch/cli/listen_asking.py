"""Where a listener hears a daemon, and how it asks it for what was missed."""

from __future__ import annotations

import time
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Self

import click

from driftwatch.bus.errors import AskError, BusError, NoKeyError
from driftwatch.cli.listen import DEFAULT_ENDPOINT

if TYPE_CHECKING:
    import zmq

    from driftwatch.bus.client import Asker
    from driftwatch.bus.follow import Place
    from driftwatch.config import Configuration

AGAIN_S = 1.0
"""Time between two attempts to ask a daemon that did not answer, seconds."""

BUSY_S = 0.1
"""Wait where more was asked than the daemon answers in a second, seconds."""


@dataclass(frozen=True, slots=True)
class Way:
    """How to reach a daemon."""

    endpoint: str  # where it publishes
    control: str | None = None  # where it answers; None: what the key's file says
    key: Path | None = None  # file of the key to come in with; None: nothing can be asked
    guarded: bool = False  # only whoever has a key hears it


def way_to(endpoint: str | None, config: str | None, key: Path | None) -> Way:
    """Return how to reach the daemon that options name.

    Raises
    ------
    click.UsageError
        When both or neither of two things are given, or what is named cannot be read.
    """
    if config is not None and key is not None:
        raise click.UsageError("got both --config and --key; expected one of them; leave out the other")
    if config is not None:
        return _by_config(endpoint, config)
    return Way(endpoint or DEFAULT_ENDPOINT) if key is None else _by_key(endpoint, key)


def _by_config(endpoint: str | None, config: str) -> Way:
    from driftwatch.config import ConfigError, load

    try:
        return way_of(load(config), endpoint)
    except ConfigError as error:
        raise click.UsageError(str(error)) from None


def way_of(found: Configuration, endpoint: str | None) -> Way:
    """Return how to reach the daemon of a configuration, heard at `endpoint` if there is one; it needs not run."""
    from driftwatch.bus.keys import KeyFolder
    from driftwatch.config import is_loopback
    from driftwatch.daemon.state import state_folder

    key = KeyFolder(state_folder(found)).operator_path
    publish = found.bus.publish
    return Way(endpoint or publish, found.bus.control, key, not is_loopback(publish))


def _by_key(endpoint: str | None, key: Path) -> Way:
    from driftwatch.bus.keys import ClientKey
    from driftwatch.config import is_loopback

    try:
        known = ClientKey.read(key).publish
    except BusError as error:
        raise click.UsageError(str(error)) from None
    if endpoint is None and known is None:
        raise click.UsageError(f"{key} does not tell where the daemon publishes; expected its ENDPOINT; give it")
    used = endpoint or known or ""
    return Way(used, None, key, not (is_loopback(used) and is_loopback(known or used)))


def let_in(socket: zmq.Socket[bytes], way: Way) -> None:
    """Give a subscriber its key where the daemon publishes for keys alone, which it does beyond its own computer.

    Raises
    ------
    click.UsageError
        When the key cannot be read.
    """
    from driftwatch.bus.keys import ClientKey

    if way.key is None or not way.guarded:
        return
    try:
        key = ClientKey.read(way.key)
    except BusError as error:
        raise click.UsageError(str(error)) from None
    socket.curve_publickey, socket.curve_secretkey = key.public.encode(), key.secret.encode()
    socket.curve_serverkey = key.daemon.encode()


class StoredSince:
    """Asks a daemon for what it stored after a record, and opens the connection when that is first needed.

    Parameters
    ----------
    way
        To the daemon, with a key.
    """

    def __init__(self, way: Way) -> None:
        self._way = way
        self._asker: Asker | None = None
        self._failed: tuple[float, BusError] | None = None

    def __call__(self, place: Place | None) -> dict[str, Any]:
        """Return the next page, as `Since` says.

        Raises
        ------
        BusError
            When nobody answers, the key is refused, or the daemon cannot tell now; for `AGAIN_S` nothing more is asked.
        """
        if self._failed is not None and time.monotonic() < self._failed[0]:
            raise self._failed[1]
        self._failed = None
        try:
            return self._page(place)
        except BusError as error:
            self.close()
            self._failed = (time.monotonic() + AGAIN_S, error)
            raise

    def _page(self, place: Place | None) -> dict[str, Any]:
        asker = self._opened()
        while True:
            run, sequence = (None, None) if place is None else (place.run, place.sequence)
            reply = asker.ask("since", run=run, sequence=sequence)
            if reply.get("ok"):
                return reply
            if reply.get("fault") != "rate":
                raise AskError(f"{asker.endpoint} answers: {reply.get('outcome')}")
            time.sleep(BUSY_S)

    def _opened(self) -> Asker:
        from driftwatch.bus.client import Asker

        if self._asker is None:
            if self._way.key is None:
                raise NoKeyError("there is no key to ask the daemon with for what was missed")
            self._asker = Asker(self._way.control, self._way.key)
        return self._asker

    def close(self) -> None:
        """End the connection."""
        if self._asker is not None:
            self._asker.close()
            self._asker = None

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()
