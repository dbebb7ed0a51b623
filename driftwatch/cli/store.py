"""Look after a store as a file: what it is, whether it is whole, what is old in it, and a copy of it."""

from __future__ import annotations

import json
import math
import sys
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from driftwatch.cli.figures import moment
from driftwatch.cli.looking import print_lines, quiet_pipe, store_options, store_url
from driftwatch.cli.progress import working
from driftwatch.records import time_text

if TYPE_CHECKING:
    from collections.abc import Iterator

    from driftwatch.store.care import StoreInfo

_json_option = click.option("--json", "as_json", is_flag=True, help="One JSON object.")


def _finite(context: click.Context, parameter: click.Parameter, value: float) -> float:
    """Return a number that is one; click's callback of an option."""
    if not math.isfinite(value):
        raise click.BadParameter(f"got {value}; expected a number of days", context, parameter)
    return value


@click.group("store")
def command() -> None:
    """Look after a store: what it is, whether it is whole, what is old in it, and a copy of it.

    \b
    Example: driftwatch store info --config config/demo.toml
    Example: driftwatch store backup copy.db --config config/demo.toml
    """  # noqa: D301 - \b is click's mark for lines that stay as they are


@command.command("info", short_help="Print what the store is: size, schema, who writes, what it holds.")
@store_options
@_json_option
def info_command(store: str | None, config: str | None, as_json: bool) -> None:
    """Print what the store is: its size, its schema, who writes to it, what it holds, and what stood before it.

    Example: driftwatch store info --config config/demo.toml
    """
    from driftwatch.store.care import info

    with quiet_pipe(), _work():
        found = info(_path(store, config))
        if as_json:
            _print_json(_object(found))
            return
        for name, value in _lines(found):
            click.echo(f"{name:<12}  {value}")


@command.command("check", short_help="Look through the store for damage and missing records.")
@store_options
@_json_option
def check_command(store: str | None, config: str | None, as_json: bool) -> None:
    """Look through the whole store: its pages, its references, and that no record of a run is missing.

    What was pruned, and what could not be stored as the health records say, is no fault. Exit status 1 where there is
    one. A daemon may write meanwhile.

    Example: driftwatch store check --config config/demo.toml
    """
    from driftwatch.store.checking import check

    with quiet_pipe(), _work():
        path = _path(store, config)
        with working(shown=_bar_shown(as_json)) as bar:
            found = check(path, bar)
        if as_json:
            told = {"path": str(path), "ok": not found.faults, "runs": found.runs, "records": found.records}
            _print_json(told | {"faults": found.faults, "remarks": found.remarks})
        else:
            for line in found.remarks:
                click.echo(f"Note: {line}")
            for line in found.faults:
                click.echo(f"Fault: {line}")
            verdict = "whole" if not found.faults else f"not whole: {len(found.faults)} faults"
            runs = "1 run" if found.runs == 1 else f"{found.runs} runs"
            click.echo(f"{path} is {verdict}; {found.records} records of {runs} were looked at.")
            if found.faults:
                click.echo(
                    "What next: keep the file; `driftwatch readings` still shows what can be read; the daemon sets a "
                    "damaged store aside and begins a new one."
                )
    if found.faults:
        raise click.exceptions.Exit(1)


@command.command("prune", short_help="Remove what is older than so many days.")
@store_options
@click.option(
    "--keep-days",
    type=click.FloatRange(min=0.0),
    required=True,
    callback=_finite,
    metavar="DAYS",
    help="Remove what is older than this.",
)
@_json_option
def prune_command(store: str | None, config: str | None, keep_days: float, as_json: bool) -> None:
    """Remove records older than so many days, as a daemon does by itself after [store] keep_days.

    Baselines stay, and so do a run's own records and its standing alerts as long as anything else of the run does.
    The file does not shrink: the room in it is used again. Refused while a daemon writes.

    Example: driftwatch store prune --keep-days 90 --config config/demo.toml
    """
    path = _path(store, config)
    removed = _pruned(path, keep_days, _bar_shown(as_json))
    if as_json:
        _print_json({"path": str(path), "removed": removed})
    else:
        click.echo(f"{removed} records older than {keep_days:g} days were removed from {path}.")


def _pruned(path: Path, keep_days: float, shown: bool) -> int:
    """Remove what is old and return how much that was."""
    import time

    from driftwatch.cli.shared import nothing_started, stopped_by_signal, work_failed
    from driftwatch.store.retention import count_old, prune
    from driftwatch.store.writer import Writer

    now_ns, removed = time.time_ns(), 0
    with nothing_started():
        writer = Writer.open(path, "driftwatch store prune")
    with writer, work_failed(), stopped_by_signal() as stop, working(shown=shown) as bar:
        with writer.transaction() as connection:
            total = count_old(connection, keep_days, now_ns)
        while not stop.is_set() and (step := prune(writer, keep_days, now_ns)):
            removed += step
            bar(removed, max(total, removed))
    if stop.is_set():
        raise click.ClickException(f"interrupted after {removed} of {total} records; what was removed is gone")
    return removed


@command.command("backup", short_help="Copy the store while a daemon writes, and verify the copy.")
@click.argument("target", metavar="TO", type=click.Path(path_type=Path))
@store_options
@_json_option
def backup_command(target: Path, store: str | None, config: str | None, as_json: bool) -> None:
    """Copy the store to the file TO as it is at one instant, and verify the copy; a daemon may write meanwhile.

    The copy gets its name only once it is whole. A file that is there already is never written over.

    Example: driftwatch store backup copy.db --config config/demo.toml
    """
    from driftwatch.store.care import backup
    from driftwatch.store.errors import StoreError
    from driftwatch.store.opening import is_there

    path = _path(store, config)
    try:
        is_taken = is_there(target)
    except StoreError as error:
        raise click.UsageError(str(error)) from None
    if is_taken:
        raise click.UsageError(f"{target} is there already; expected a new name; name another, or move it away")
    with _work(), working(shown=_bar_shown(as_json)) as bar:
        size = backup(path, target.absolute(), bar)
    if as_json:
        _print_json({"path": str(path), "copy": str(target.absolute()), "bytes": size, "verified": True})
    else:
        click.echo(f"{path} was copied to {target}, {_megabytes(size)}; the copy is whole.")


# ---------------------------------------------------------------------------------------------- parts


def _path(store: str | None, config: str | None) -> Path:
    """Return the database that the options name.

    Raises
    ------
    click.UsageError
        When there is none, or it is foreign (exit status 2).
    """
    from driftwatch.store.care import refuse_missing
    from driftwatch.store.errors import StoreError
    from driftwatch.store.location import database_path

    try:
        path = database_path(store_url(store, config), Path.cwd())
        refuse_missing(path)
    except StoreError as error:
        raise click.UsageError(str(error)) from None
    return path


@contextmanager
def _work() -> Iterator[None]:
    """Turn what goes wrong with a store that is there into exit status 1."""
    from driftwatch.store.errors import StoreError

    try:
        yield
    except StoreError as error:
        raise click.ClickException(str(error)) from None


def _bar_shown(as_json: bool) -> bool:
    return not (as_json and sys.stdout.isatty())


def _print_json(message: dict[str, Any]) -> None:
    print_lines([json.dumps(message, ensure_ascii=False, allow_nan=False).encode()])


def _megabytes(size: int) -> str:
    return f"{size / 2**20:.1f} MB" if size >= 2**20 // 10 else f"{size / 2**10:.1f} kB"


def _lines(found: StoreInfo) -> Iterator[tuple[str, str]]:
    yield "file", str(found.path)
    yield "size", f"{_megabytes(found.bytes)}, of which {_megabytes(found.free_bytes)} are free for records to come"
    yield "log", _megabytes(found.log_bytes) if found.log_bytes else "none"
    yield "schema", found.schema or "none"
    yield "SQLite", found.sqlite
    yield "writer", found.writer or "nobody"
    yield "runs", str(found.runs)
    for kind, count in found.counts.items():
        yield f"  {kind}", str(count)
    yield "oldest", "none" if found.oldest_ns is None else moment(found.oldest_ns)
    yield "newest", "none" if found.newest_ns is None else moment(found.newest_ns)
    for one in found.predecessors:
        yield "before it", f"{one.path}, until {moment(one.at_ns)}: {one.reason}"


def _object(found: StoreInfo) -> dict[str, Any]:
    return {
        "path": str(found.path),
        "bytes": found.bytes,
        "log_bytes": found.log_bytes,
        "free_bytes": found.free_bytes,
        "schema": found.schema,
        "sqlite": found.sqlite,
        "writer": found.writer,
        "runs": found.runs,
        "counts": found.counts,
        "oldest": None if found.oldest_ns is None else time_text(found.oldest_ns),
        "newest": None if found.newest_ns is None else time_text(found.newest_ns),
        "predecessors": [
            {"path": one.path, "reason": one.reason, "time": time_text(one.at_ns)} for one in found.predecessors
        ],
    }
