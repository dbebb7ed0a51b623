"""Run benches and print their table."""

from __future__ import annotations

import importlib
import json
import sys
import time

import click

from benchmarks.bars import FAMILY_BENCH, Row, Size

NAMES = (
    "ambient",
    "ringdown",
    "falsestart",
    "speed",
    "memory",
    "live",
    "memory_live",
    "listeners",
    "slow",
    "kills",
    "writing",
    "hostile",
)
"""Every bench, each a module of this package with a function ``run(size)`` that yields rows."""


@click.command()
@click.argument("names", nargs=-1, type=click.Choice(NAMES))
@click.option("--trials", default=2000, show_default=True, help="Independent trials a cell.")
@click.option("--seconds", type=click.FloatRange(min=5.0), help="How long live benches run; left out: in full.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object a line.")
def main(names: tuple[str, ...], trials: int, seconds: float | None, as_json: bool) -> None:
    """Measure NAMES (default: all) and compare with what they must reach.

    Example: tools/bench ambient speed --trials 500
    """
    failed = 0
    for name in names or NAMES:
        began = time.monotonic()
        print(f"{name}: measuring ...", file=sys.stderr, flush=True)
        for row in importlib.import_module(f"benchmarks.{name}").run(Size(trials, FAMILY_BENCH, seconds=seconds)):
            failed += row.ok is False
            print(_json_line(name, row) if as_json else _text_line(name, row), flush=True)
        print(f"{name}: {time.monotonic() - began:.0f} s", file=sys.stderr, flush=True)
    sys.exit(1 if failed else 0)


def _json_line(name: str, row: Row) -> str:
    return json.dumps(
        {"bench": name, "case": row.case, "figure": row.figure, "value": row.value, "bar": row.bar, "ok": row.ok}
    )


def _text_line(name: str, row: Row) -> str:
    verdict = {True: "holds", False: "FAILS", None: ""}[row.ok]
    return f"{name:10s}  {row.case:38s}  {row.figure:34s}  {row.value:12.5g}  {row.bar:28s}  {verdict}".rstrip()


if __name__ == "__main__":
    main()
