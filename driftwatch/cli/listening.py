"""What ``devices --watch`` shows: what each input hears, twice a second."""

from __future__ import annotations

import json
import math
import sys
import time
from contextlib import contextmanager
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import click

from driftwatch.cli.devices import answered
from driftwatch.cli.figures import NONE
from driftwatch.cli.looking import print_lines
from driftwatch.cli.shared import stopped_by_signal
from driftwatch.stream.meter import CLIPPED, InputLevel, LatestSamples, Meter
from driftwatch.stream.soundcard import CardStream, SoundInput, leave_hung

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Sequence

    from rich.table import Table

REFRESH_S = 0.5
SILENT_S = 2.0
"""An input from which nothing came for so long is told so."""

CLOSE_S = 3.0
MOST_INPUTS = 16
"""A device that claims more has as many as one likes: a sound server makes them up. Two are opened then."""

LOUDER = 2.0
"""An input whose held peak is so many times every other one's is marked."""

BAR, FLOOR_DB = 24, -96.0
"""Columns of a level's bar, and the level where it begins."""

_COLUMNS = {"input": 24, "rms": 9, "peak": 9, "held": 9, "clipped": 7, "line": 10, "remark": 0}
"""Heads, with their widths in plain lines."""


@dataclass(frozen=True, slots=True)
class _Watched:
    device: SoundInput
    latest: LatestSamples
    meter: Meter
    stream: CardStream


@dataclass(frozen=True, slots=True)
class _Line:
    """What is shown of one input."""

    device: str
    input: int  # from 1
    level: InputLevel
    remark: str


def watch_inputs(
    devices: Sequence[SoundInput], *, rate_hz: int | None, inputs: int | None, seconds: float | None, as_json: bool
) -> None:
    """Show what inputs hear, until interrupted or for so many seconds.

    Raises
    ------
    click.ClickException
        When a device is lost meanwhile (exit status 1).
    """
    watched: list[_Watched] = []
    status, problem = 0, ""
    try:
        watched.extend(_opened(device, rate_hz, inputs) for device in devices)
        with stopped_by_signal() as stop, _shown(as_json) as show:
            end = math.inf if seconds is None else time.monotonic() + seconds
            while not problem and (left := end - time.monotonic()) > 0 and not stop.wait(min(REFRESH_S, left)):
                show(_read(watched))
                problem = _lost(watched)
    finally:
        closed = [one.stream.close(CLOSE_S) for one in watched]
    if problem:
        status = 1
        click.echo(f"Error: {problem}", err=True)
    if not all(closed):
        click.echo("The sound system hangs: it did not let go of the input.", err=True)
        leave_hung(status)
    sys.exit(status)


def _opened(device: SoundInput, rate_hz: int | None, inputs: int | None) -> _Watched:
    rate = rate_hz or round(device.rate_hz)
    count = inputs or (device.inputs if device.inputs <= MOST_INPUTS else 2)
    latest = LatestSamples(rate, count)
    stream = answered(
        lambda: CardStream(
            device, rate_hz=rate, inputs=count, sample_format="float32", frames=max(1, rate // 50), sink=latest
        )
    )
    return _Watched(device, latest, Meter(rate, count), stream)


def _lost(watched: Sequence[_Watched]) -> str:
    """Return what is wrong with a device that gives no more; nothing where all is well."""
    gone = [repr(one.device.name) for one in watched if one.stream.finished]
    if not gone:
        return ""
    return f"sound input {', '.join(gone)} is gone; expected it to stay; see its plug or its sound server, start again"


# ---------------------------------------------------------------------------------------------- what is read


def _read(watched: Sequence[_Watched]) -> list[_Line]:
    lines: list[_Line] = []
    for one in watched:
        levels = one.meter.read(one.latest.fresh())
        age_s = one.latest.age_s
        late = f"nothing came for {age_s:.0f} s" if age_s > SILENT_S else ""
        lines += [
            _Line(one.device.name, number, level, late or _remark(level)) for number, level in enumerate(levels, 1)
        ]
    return _marked(lines)


def _remark(level: InputLevel) -> str:
    if level.held_peak == 0:
        return "silent"
    return "" if level.like is None else f"same signal as input {level.like + 1}"


def _marked(lines: list[_Line]) -> list[_Line]:
    """Return the lines, with the loudest marked where it is so by far."""
    peaks = sorted((line.level.held_peak for line in lines), reverse=True)
    if len(peaks) < 2 or peaks[0] < LOUDER * peaks[1]:
        return lines
    return [
        replace(line, remark="loudest") if line.level.held_peak == peaks[0] and not line.remark else line
        for line in lines
    ]


# ---------------------------------------------------------------------------------------------- what is shown


@contextmanager
def _shown(as_json: bool) -> Iterator[Callable[[Sequence[_Line]], None]]:
    """Give what shows a reading: JSON lines, a table that stands still on a terminal, else plain lines."""
    if as_json:
        yield lambda lines: print_lines(json.dumps(_object(line), ensure_ascii=False).encode() for line in lines)
    elif sys.stdout.isatty():
        from rich.live import Live

        with Live(auto_refresh=False) as live:
            yield lambda lines: live.update(_table(lines), refresh=True)
    else:
        click.echo("  ".join(head.ljust(width) for head, width in _COLUMNS.items()).rstrip())
        yield _print_plain


def _print_plain(lines: Sequence[_Line]) -> None:
    for line in lines:
        cells = zip(_cells(line), _COLUMNS.values(), strict=True)
        click.echo("  ".join(cell.ljust(width) for cell, width in cells).rstrip())
    sys.stdout.flush()


def _table(lines: Sequence[_Line]) -> Table:
    from rich import box
    from rich.table import Table
    from rich.text import Text

    table = Table(box=box.SIMPLE_HEAD, padding=(0, 1, 0, 0), pad_edge=False)
    for head in _COLUMNS:
        table.add_column(head, no_wrap=head != "input", overflow="fold")
    table.add_column(f"{FLOOR_DB:g} dB to 0 dB", no_wrap=True)
    for line in lines:
        full = line.level.held_peak >= CLIPPED
        style = "red" if full else "bold" if line.remark == "loudest" else ""
        table.add_row(*(Text(cell, style=style) for cell in (*_cells(line), bar(line.level))))
    return table


def bar(level: InputLevel) -> str:
    """Return a bar up to the rms, with a mark at the held peak."""
    filled, mark = (round(BAR * (1 - max(_db(size), FLOOR_DB) / FLOOR_DB)) for size in (level.rms, level.held_peak))
    cells = ["━"] * min(filled, BAR) + [" "] * (BAR - filled)
    if mark > 0:
        cells[min(mark, BAR) - 1] = "┃"
    return "".join(cells)


def _cells(line: _Line) -> list[str]:
    level = line.level
    tone = NONE if level.line_hz is None else f"{level.line_hz:.1f} Hz"
    levels = [NONE if size == 0 else f"{_db(size):.1f} dB" for size in (level.rms, level.peak, level.held_peak)]
    return [f"{line.device} {line.input}", *levels, str(level.clipped), tone, line.remark]


def _object(line: _Line) -> dict[str, Any]:
    level = line.level
    rms, peak, held = (None if size == 0 else _db(size) for size in (level.rms, level.peak, level.held_peak))
    return {
        "device": line.device,
        "input": line.input,
        "rms_db": rms,
        "peak_db": peak,
        "held_peak_db": held,
        "clipped": level.clipped,
        "line_hz": level.line_hz,
        "remark": line.remark or None,
    }


def _db(size: float) -> float:
    return 20 * math.log10(size) if size > 0 else -math.inf
