"""Whether a database is whole: its pages, its references, and the numbers of each run's records."""

from __future__ import annotations

import sqlite3
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from itertools import pairwise
from typing import TYPE_CHECKING

from driftwatch.records import KINDS, NS
from driftwatch.store.care import opened, tables_of
from driftwatch.store.errors import Trouble, trouble_of
from driftwatch.store.lock import holder_of

if TYPE_CHECKING:
    from pathlib import Path

MOST_FAULTS = 20
"""Faults of its pages that are told."""

PAGE_ROWS = 50_000
"""Numbers read in one transaction."""

SLACK_NS = 3600 * NS
"""Readings are numbered a little out of the order of time; so far behind the cut of pruning single ones may be gone."""

FRAME = ("run", "alert", "baseline")
"""Kinds that pruning leaves longest."""


@dataclass(slots=True)
class Findings:
    """What a check found."""

    faults: list[str] = field(default_factory=list)  # what is wrong
    remarks: list[str] = field(default_factory=list)  # what is missing, and is told as such
    runs: int = 0
    records: int = 0


def check(path: Path, progress: Callable[[int, int], None] = lambda _done, _all: None) -> Findings:
    """Look through a whole database.

    While a daemon writes it is looked through table by table, so that no transaction lasts for long.

    Parameters
    ----------
    path
        Of the database.
    progress
        Called with steps done, and steps in all.

    Raises
    ------
    StoreError
        When it cannot be read, but for damage.
    """
    found = Findings()
    with opened(path) as connection:
        try:
            _check(connection, path, found, progress)
        except sqlite3.DatabaseError as error:
            if trouble_of(path, error) is not Trouble.DAMAGED:
                raise
            found.faults.append(str(error))
    return found


def _check(connection: sqlite3.Connection, path: Path, found: Findings, progress: Callable[[int, int], None]) -> None:
    tables = sorted(tables_of(connection))
    runs: dict[str, list[int]] = {}
    if "header" in tables:
        for number, run in connection.execute("SELECT id, run FROM header ORDER BY id"):
            runs.setdefault(run, []).append(number)
    parts = [f"({table})" for table in tables] if holder_of(path) else [""]
    steps = len(parts) + 1 + len(runs)
    for step, part in enumerate(parts):
        progress(step, steps)
        found.faults += _wrong(connection, f"PRAGMA integrity_check{part}")
    progress(len(parts), steps)
    for table, row, other, _ in connection.execute("PRAGMA foreign_key_check"):
        found.faults.append(f"a row of {table} ({row}) names a row of {other} that is not there")
    kinds = [kind for kind in KINDS if kind in tables]
    for step, (run, headers) in enumerate(runs.items(), len(parts) + 1):
        progress(step, steps)
        _check_numbers(_Numbers(connection, kinds, run, headers), found)
    found.runs = len(runs)
    progress(steps, steps)


def _wrong(connection: sqlite3.Connection, statement: str) -> list[str]:
    told = [str(row[0]) for row in connection.execute(statement).fetchmany(MOST_FAULTS)]
    return [] if told == ["ok"] else told


# ---------------------------------------------------------------------------------------------- numbers


@dataclass(frozen=True, slots=True)
class _Numbers:
    """The records of a run by number."""

    connection: sqlite3.Connection
    kinds: list[str]
    run: str
    headers: list[int]

    def all(self) -> Iterator[tuple[int, int]]:
        """Yield number and stream time of every record, in order, a page in a transaction."""
        each = [
            f"SELECT sequence, time_ns FROM {kind} WHERE header = {header} AND sequence > :after"  # noqa: S608 - ours
            for kind in self.kinds
            for header in self.headers
        ]
        statement = f"{' UNION ALL '.join(each)} ORDER BY 1 LIMIT {PAGE_ROWS}"
        after = -1
        while page := self.connection.execute(statement, {"after": after}).fetchall():
            yield from page
            after = page[-1][0]

    def first_reading(self) -> tuple[int, int] | None:
        """Return number and stream time of the first record of a kind that pruning takes."""
        found = [
            row
            for kind in self.kinds
            if kind not in FRAME
            for header in self.headers
            for row in self.connection.execute(
                f"SELECT sequence, time_ns FROM {kind} WHERE header = ? ORDER BY sequence LIMIT 1",  # noqa: S608 - ours
                (header,),
            )
        ]
        return min(found, default=None)

    def told_lost(self) -> int:
        """Return how many records were lost as the health records say."""
        chosen = (
            "SELECT total(value) FROM health WHERE header = ? AND phase = 'end' AND unit = 'records' "
            "AND fault IN ('store', 'disk')"
        )
        told = [float(self.connection.execute(chosen, (header,)).fetchone()[0]) for header in self.headers]
        return round(sum(told))


def _check_numbers(numbers: _Numbers, found: Findings) -> None:
    """Look for holes that neither pruning nor a loss that was told explains."""
    first = numbers.first_reading()
    missing, twice, is_pruned = 0, 0, False
    where = ""
    for (before, _), (after, time_ns) in pairwise(_counted(numbers.all(), found)):
        if after == before:
            twice += 1
        elif after > before + 1:
            if first is not None and (after <= first[0] or (is_pruned and time_ns < first[1] + SLACK_NS)):
                is_pruned = True
                continue
            missing += after - before - 1
            where = where or f"the first after record {before}"
    short = f"run {numbers.run[:8]}"
    if twice:
        found.faults.append(f"{short}: {twice} numbers are given twice")
    told = min(missing, numbers.told_lost()) if missing else 0
    if missing > told:
        found.faults.append(f"{short}: {missing - told} records are missing, {where}")
    if told:
        found.remarks.append(f"{short}: {told} records were never stored, as its health records say, {where}")
    if is_pruned:
        found.remarks.append(f"{short}: its begin was pruned")


def _counted(rows: Iterator[tuple[int, int]], found: Findings) -> Iterator[tuple[int, int]]:
    for row in rows:
        found.records += 1
        yield row
