"""Remake the pictures of the guides from the program's own output: ``.venv/bin/python tools/pictures/make.py``.

The demo's simulated source goes through the pipeline into a store, as fast as it can; what is drawn is read back from
the store. Start time and seed are fixed, so the same program draws the same figures. Needs the extra ``report``.
"""

from __future__ import annotations

import tempfile
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click
import numpy as np
from driftwatch.config import BandConfig, ModeConfig, SimulatedSourceConfig, load
from driftwatch.daemon.keeper import Keeper
from driftwatch.daemon.replay import replay
from driftwatch.pipeline.station import RunHeader, Station
from driftwatch.records import NS, Alert, AlertState, Measurement, Origin, TimeQuality, Track, parse_time
from driftwatch.store.queries import Reader, Wanted
from driftwatch.store.writer import Writer
from driftwatch.stream.course import Course
from driftwatch.stream.simulated import SimulatedSource
from numpy.typing import NDArray

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

HERE = Path(__file__).parent
DEMO = HERE.parent.parent / "config" / "demo.toml"
SECONDS = 60.0
START_NS = parse_time("2026-03-01T06:00:00Z")
RUN = "00000000-0000-4000-8000-000000000001"

TRACK, RIBBON, READING, LIMIT, ALERT, TRUTH = "#0072B2", "#9CC9E6", "#7A7A7A", "#000000", "#B03A00", "#000000"
"""Colours that also differ in grey and for the colour-blind; each thing has its own line or marker besides."""


_Body = TypeVar("_Body", Track, Measurement, Alert)


@dataclass(frozen=True, slots=True)
class Curve:
    """One quantity of one mode over stream time."""

    seconds: NDArray[np.float64]  # since the first sample
    value: NDArray[np.float64]
    low: NDArray[np.float64]  # 95 % interval
    high: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class ModeRows:
    """What the store holds of one mode, and what was simulated."""

    mode: ModeConfig
    tracks: list[tuple[float, Track]]  # seconds since the first sample, and the body
    readings: list[tuple[float, Measurement]]
    alerts: list[tuple[float, Alert]]
    frequency_truth: Course
    q_truth: Course


# ---------------------------------------------------------------------------------------------- from the pipeline


def stored_demo(store: Path) -> list[ModeRows]:
    """Send `SECONDS` of the demo through the pipeline into a new store, and read back each mode's rows."""
    config = load(DEMO)
    (described,) = config.source
    if not isinstance(described, SimulatedSourceConfig):
        raise TypeError(f"{DEMO} has a source of kind {described.kind}; expected a simulated one")
    source = SimulatedSource(described.model_copy(update={"seconds": SECONDS}), START_NS)
    header = RunHeader(config.station.name, RUN, Origin.SIMULATED, TimeQuality.ASSUMED)
    with Writer.open(store, config.station.name) as writer:
        replay(source, Station(config, header, [source]), Keeper(writer))
    with Reader.open(store) as reader:
        return [_rows(reader, mode, described) for mode in config.mode]


def _rows(reader: Reader, mode: ModeConfig, source: SimulatedSourceConfig) -> ModeRows:
    wanted = Wanted(channel=mode.channel, mode=mode.name)
    (truth,) = [
        one for one in source.resonator if mode.search_hz.low < one.frequency_hz[0][1] < mode.search_hz.high
    ]  # the search bands of the demo do not overlap
    return ModeRows(
        mode,
        list(_bodies(reader, "track", wanted, Track)),
        list(_bodies(reader, "measurement", wanted, Measurement)),
        list(_bodies(reader, "alert", wanted, Alert)),
        Course.of(truth.frequency_hz),
        Course.of(truth.q),
    )


def _bodies(reader: Reader, kind: str, wanted: Wanted, body: type[_Body]) -> Iterator[tuple[float, _Body]]:
    for envelope in reader.records(kind, wanted):
        if not isinstance(envelope.body, body):
            raise TypeError(f"a {kind} in the store is a {type(envelope.body).__name__}")
        yield (envelope.time_ns - START_NS) / NS, envelope.body


def frequency_curve(rows: Sequence[tuple[float, Track | Measurement]]) -> Curve:
    """Return fn in Hz with its 95 % interval, Gaussian."""
    told = [
        (at, body.frequency_hz, 1.96 * body.frequency_std_hz)
        for at, body in rows
        if body.frequency_hz is not None and body.frequency_std_hz is not None
    ]
    return _curve([(at, value, value - half, value + half) for at, value, half in told])


def q_curve(rows: Sequence[tuple[float, Track | Measurement]]) -> Curve:
    """Return Q with its 95 % interval as stored."""
    return _curve(
        [
            (at, body.q, body.q_low, body.q_high)
            for at, body in rows
            if body.q is not None and body.q_low is not None and body.q_high is not None
        ]
    )


def _curve(rows: list[tuple[float, float, float, float]]) -> Curve:
    return Curve(*np.array(rows, dtype=np.float64).reshape(-1, 4).T)


# ---------------------------------------------------------------------------------------------- drawing


def drawn(modes: Sequence[ModeRows]) -> Figure:
    """Return the figure: a row a mode, frequency on the left and Q on the right."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(10.0, 8.4), dpi=100)
    axes = figure.subplots(len(modes), 2, sharex=True)
    for row, rows in enumerate(modes):
        name = f"{rows.mode.channel} / {rows.mode.name}"
        _draw(axes[row, 0], rows, "frequency", frequency_curve, rows.frequency_truth)
        _draw(axes[row, 1], rows, "q", q_curve, rows.q_truth)
        axes[row, 0].set_title(name, loc="left", fontsize=10, fontweight="bold")
        axes[row, 0].set_ylabel("natural frequency / Hz")
        axes[row, 1].set_ylabel("Q")
    for bottom in axes[-1]:
        bottom.set_xlabel("time since the first sample / s")
        bottom.set_xlim(0.0, SECONDS)
    _legend(figure, axes.flat)
    figure.tight_layout(rect=(0.0, 0.0, 1.0, 0.93))
    return figure


def _draw(
    axes: Axes,
    rows: ModeRows,
    quantity: str,
    curve_of: Callable[[Sequence[tuple[float, Track | Measurement]]], Curve],
    truth: Course,
) -> None:
    track, readings = curve_of(rows.tracks), curve_of(rows.readings)
    seconds = np.linspace(0.0, SECONDS, 601)
    axes.plot(track.seconds, track.value, "-", color=TRACK, linewidth=2.0, zorder=3, label="track")
    axes.fill_between(
        track.seconds, track.low, track.high, color=RIBBON, linewidth=0, label="95 % interval of the track"
    )
    axes.plot(readings.seconds, readings.value, ".", color=READING, markersize=3.5, label="measurement, one 4 s window")
    axes.plot(seconds, truth.at(seconds), ":", color=TRUTH, linewidth=1.4, label="what was simulated")
    for band in rows.mode.band:
        if band.quantity == quantity:
            _draw_limits(axes, band)
            for at, alert in _raised(rows, band):
                _draw_alert(
                    axes, at, float(np.interp(at, track.seconds, track.value)), f"{band.name}: {alert.priority}"
                )
    axes.grid(visible=True, color="#E0E0E0", linewidth=0.6)
    axes.set_axisbelow(True)
    axes.margins(y=0.12)


def _draw_limits(axes: Axes, band: BandConfig) -> None:
    for limit in (band.low, band.high):
        if limit is not None:
            axes.axhline(limit, color=LIMIT, linestyle=(0, (6, 3)), linewidth=1.1, label="limit of the band")


def _raised(rows: ModeRows, band: BandConfig) -> Iterator[tuple[float, Alert]]:
    name = f"{rows.mode.channel}/{rows.mode.name}/{band.name}"
    for at, alert in rows.alerts:
        if alert.alert == name and alert.previous_state is not alert.state is AlertState.UNACKNOWLEDGED:
            yield at, alert


def _draw_alert(axes: Axes, at: float, value: float, words: str) -> None:
    axes.axvline(at, color=ALERT, linestyle="-.", linewidth=1.0)
    mark: dict[str, Any] = {
        "color": ALERT,
        "markeredgecolor": "white",
        "markersize": 11.0,
        "linestyle": "none",
        "zorder": 5.0,
    }
    axes.plot([at], [value], marker="v", label="alert raised", **mark)
    place = axes.get_xaxis_transform()  # seconds, and the share of the axes' height
    axes.text(at + 0.8, 0.7, f"{words}\nat {at:.0f} s", transform=place, color=ALERT, fontsize=9)


def _legend(figure: Figure, every: Iterable[Axes]) -> None:
    found = {label: handle for axes in every for handle, label in zip(*axes.get_legend_handles_labels(), strict=True)}
    figure.legend(list(found.values()), list(found.keys()), loc="upper center", ncols=3, frameon=False, fontsize=9)


@click.command()
@click.option("--to", "folder", type=click.Path(path_type=Path, file_okay=False, exists=True), default=HERE)
def main(folder: Path) -> None:
    """Write demo.png into a folder, left out: beside this script."""
    with tempfile.TemporaryDirectory() as scratch:
        modes = stored_demo(Path(scratch) / "demo.db")
    target = folder / "demo.png"
    drawn(modes).savefig(target, metadata={"Software": None})
    print(f"{target}: {target.stat().st_size / 1000:.0f} kB")


if __name__ == "__main__":
    main()
