"""What the commands that look into a store share: finding it, and printing tables and lines."""

from __future__ import annotations

import sys
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from driftwatch.cli.shared import drop_output, told_time

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Iterator, Sequence

    from driftwatch.records import Envelope
    from driftwatch.store.queries import Reader

DEFAULT_STORE = "driftwatch.db"

SHOWN = 40
"""How many rows a table shows where no limit is given."""

UNCUT = ("run", "time", "from", "origin")
"""Heads of columns that are never wrapped."""

_Function = TypeVar("_Function", bound="Callable[..., Any]")


def store_options(function: _Function) -> _Function:
    """Add ``--store`` and ``--config``: which database to look into."""
    of_config = click.option(
        "--config", metavar="CONFIG", type=click.Path(), help="Look into the store of this configuration."
    )
    of_store = click.option(
        "--store", metavar="URL|PATH", help=f"Look into this database; left out: {DEFAULT_STORE} in the current folder."
    )
    return of_store(of_config(function))


def span_options(function: _Function) -> _Function:
    """Add ``--run``, ``--since``, ``--until`` and ``--limit``: which records to look at."""
    for option in (
        click.option(
            "--limit", type=click.IntRange(min=1), help=f"The latest so many; left out: {SHOWN}, or all with --json."
        ),
        click.option("--until", callback=told_time, metavar="TIME", help="Before this moment."),
        click.option(
            "--since", callback=told_time, metavar="TIME", help="From this moment on, such as 2026-03-01T06:00:00Z."
        ),
        click.option("--run", "run", metavar="UUID", help="Only this run: its UUID, the begin of it, or `last`."),
    ):
        function = option(function)
    return function


def limited(limit: int | None, as_json: bool) -> int | None:
    """Return how many records are wanted: without a limit as many as a table shows, and all as JSON."""
    return limit if limit or as_json else SHOWN


@contextmanager
def opened_store(store: str | None, config: str | None) -> Iterator[Reader]:
    """Open the database that the options name, for reading.

    Raises
    ------
    click.UsageError
        When there is no such database (exit status 2).
    click.ClickException
        When reading fails later (exit status 1).
    """
    from driftwatch.store.errors import StoreError
    from driftwatch.store.queries import NoSuchRunError, Reader

    try:
        reader = Reader.open(store_url(store, config))
    except StoreError as error:
        raise click.UsageError(str(error)) from None
    with reader:
        try:
            yield reader
        except NoSuchRunError as error:
            raise click.UsageError(str(error)) from None
        except StoreError as error:
            raise click.ClickException(str(error)) from None


def store_url(store: str | None, config: str | None) -> str:
    """Return which database the options name.

    Raises
    ------
    click.UsageError
        When they name two, or none and there is none by the name that is looked for.
    """
    if store is not None and config is not None:
        raise click.UsageError("got both --store and --config; expected one of them; leave out the other")
    if config is not None:
        return _url_of(config)
    if store is None and not Path(DEFAULT_STORE).exists():
        here = ", ".join(sorted(path.name for path in Path().glob("*.db"))) or "none"
        raise click.UsageError(
            f"no {DEFAULT_STORE} in the current folder (other databases here: {here}); "
            "expected --store PATH or --config CONFIG"
        )
    return store or DEFAULT_STORE


def _url_of(config: str) -> str:
    from driftwatch.config import ConfigError, load

    try:
        return load(config).store.url
    except ConfigError as error:
        raise click.UsageError(str(error)) from None


@contextmanager
def quiet_pipe() -> Iterator[None]:
    """End in silence when whoever read our output, ``head`` perhaps, has had enough."""
    try:
        yield
        sys.stdout.flush()
    except BrokenPipeError:
        drop_output()
        raise click.exceptions.Exit(0) from None


def print_lines(lines: Iterable[bytes]) -> None:
    """Print lines of UTF-8 on stdout."""
    out = sys.stdout.buffer
    for line in lines:
        out.write(line + b"\n")
    out.flush()


def print_envelopes(envelopes: Iterable[Envelope]) -> None:
    """Print records on stdout, one JSON object a line, as on the bus."""
    from driftwatch.bus.wire import encode_json

    print_lines(map(encode_json, envelopes))


def print_table(heads: Sequence[str], rows: Sequence[Sequence[str]]) -> None:
    """Print a table: ruled on a terminal, plain columns elsewhere."""
    if sys.stdout.isatty():
        _print_ruled(heads, rows)
        return
    lines: list[Sequence[str]] = [heads, *rows]
    widths = [max(len(line[place]) for line in lines) for place in range(len(heads))]
    for row in lines:
        click.echo("  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip())


def _print_ruled(heads: Sequence[str], rows: Sequence[Sequence[str]]) -> None:
    from rich import box
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    table = Table(box=box.SIMPLE_HEAD, padding=(0, 1, 0, 0), pad_edge=False)
    for head in heads:  # names may wrap on a narrow terminal; a moment cut short tells nothing
        table.add_column(head, no_wrap=head in UNCUT, overflow="fold")
    for row in rows:
        table.add_row(*map(Text, row))
    Console().print(table)
