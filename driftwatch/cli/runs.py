"""Print what runs a store holds."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Any

import click

from driftwatch.cli.figures import moment, span
from driftwatch.cli.looking import opened_store, print_lines, print_table, quiet_pipe, store_options
from driftwatch.records import time_text

if TYPE_CHECKING:
    from driftwatch.store.queries import RunSummary

_HEADS = ["run", "from", "origin", "duration", "readings", "tracks", "alerts", "standing", "end"]


@click.command("runs")
@store_options
@click.option("--json", "as_json", is_flag=True, help="One JSON object a line.")
def command(store: str | None, config: str | None, as_json: bool) -> None:
    """Print the runs in a store, in the order in which they were written, with the alerts that stand.

    Times are stream time. A run without an end still goes on, or was cut off. The table shows the begin of each run's
    UUID, which --run of other commands takes; --json shows all of it. What is counted are records: an alert has one for
    each change, also the first time that it can be told.

    Example: driftwatch runs --config config/demo.toml
    """
    with quiet_pipe(), opened_store(store, config) as reader:
        runs = reader.runs()
        if as_json:
            print_lines(json.dumps(_summary(run), ensure_ascii=False).encode() for run in runs)
        elif runs:
            print_table(_HEADS, [_row(run) for run in runs])
        else:
            click.echo("The store holds no runs yet.", err=True)


def _row(run: RunSummary) -> list[str]:
    counts = [str(run.counts.get(kind, 0)) for kind in ("measurement", "track", "alert")]
    standing = ", ".join(f"{alert.alert} {alert.state}" for alert in run.standing) or "none"
    end = "none" if run.end is None else (run.end.reason or "ended")
    return [run.run[:8], moment(run.first_ns), run.origin, span(run.first_ns, run.last_ns), *counts, standing, end]


def _summary(run: RunSummary) -> dict[str, Any]:
    return {
        "run": run.run,
        "station": run.station,
        "origin": run.origin,
        "time_quality": run.time_quality,
        "first": time_text(run.first_ns),
        "last": time_text(run.last_ns),
        "ended": run.end is not None,
        "reason": run.end.reason if run.end else None,
        "counts": run.counts,
        "standing": [
            {
                "alert": alert.alert,
                "occurrence": alert.occurrence,
                "state": alert.state,
                "priority": alert.priority,
                "since": time_text(alert.since_ns),
            }
            for alert in run.standing
        ],
    }
