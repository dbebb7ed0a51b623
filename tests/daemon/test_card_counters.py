"""A daemon that has run for long: past 2^31 and 2^32 samples, over midnight, and while the clock is set by an hour.

The program is the real one, on a real device. Two stand-ins make weeks short: the daemon is told that it began long ago
and lost its device a moment ago; and the computer's clock, as the program reads it, is set by an hour.
"""

from __future__ import annotations

import calendar
import time
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from card_files import NS, RATE, Floats, Row, configuration, ns_of, place_in, recorded, replay
from live_card import Beat, Daemon

from soundrig import Rig

LEAD_S = 9
"""So long before the crossing the device was lost."""

LOST_S = 2
"""So long ago it was lost when its reading begins: a shorter gap would be filled, where a replay begins anew."""

BEHIND_S = 3
"""So much is measured behind it."""

HOUR_S = 3600.0

JITTER_S = 0.03
"""How much the smallest lag of a few heartbeats may move."""

BEGAN_LONG_AGO = """
import os, sys, time
if "run" in sys.orig_argv:
    from driftwatch.daemon.feed import CardFeed
    from driftwatch.daemon.messages import LiveSource, ReadCard
    from driftwatch.records import Fault, TimeQuality
    make = CardFeed.make_ring
    def make_ring(self):
        ring = make(self)
        shape = ring.shape
        self.known = LiveSource(
            self.name, shape.rate_hz, shape.inputs, {start_ns}, TimeQuality.FREE, ("rig",), (), {first}
        )
        return ring
    def order(self, begun, cause):
        return ReadCard(self._source, self._least, {start_ns}, Fault.DEVICE)
    CardFeed.make_ring, CardFeed.order = make_ring, order
if "driftwatch.daemon.process" in sys.orig_argv and "capture" in sys.orig_argv:
    from driftwatch.daemon.card import CardCapture
    from driftwatch.stream.instants import instant_ns
    from driftwatch.stream.ring import Tie
    resume = CardCapture._resume
    def lost_before(self):
        self._ring.tie(Tie({first}, instant_ns() - {lost_ns}, 0.0))
        with open(os.path.join(os.path.dirname(__file__), "lost"), "w") as file:
            file.write(str(time.time_ns() - {lost_ns}))
        resume(self)
    CardCapture._resume = lost_before
"""

CLOCK = """
import os, time
true_ns = time.time_ns
def time_ns():
    there = os.path.exists(os.path.join(os.path.dirname(__file__), "an-hour-on"))
    return true_ns() + (3_600_000_000_000 if there else 0)
time.time_ns = time_ns
"""


@dataclass(frozen=True, slots=True)
class Run:
    """A live run that ended."""

    config: Path
    rows: list[Row]
    beats: list[Beat]
    stretches: list[tuple[int, Floats]]
    status: int
    set_at: float = 0.0  # monotonic: when the clock was set
    lost_ns: int = 0  # UTC at which the device was lost


@dataclass(frozen=True, slots=True)
class Crossing:
    """A sample that is taken at midnight."""

    sample: int
    midnight: str

    @property
    def start_ns(self) -> int:
        """Time of sample 0."""
        seconds = calendar.timegm(time.strptime(self.midnight, "%Y-%m-%d"))
        return seconds * NS - self.sample * NS // RATE


CROSSINGS = {"2^31": Crossing(2**31, "2027-01-01"), "2^32": Crossing(2**32, "2028-02-29")}


def run_across(crossing: Crossing, folder: Path, wav: Path) -> Run:
    config = configuration(folder, daemon="workers = 2")
    words = {"lost_ns": LOST_S * NS, "first": crossing.sample - LEAD_S * RATE, "start_ns": crossing.start_ns}
    (folder / "sitecustomize.py").write_text(BEGAN_LONG_AGO.format(**words))
    with Rig() as rig:
        rig.play(wav)
        with Daemon(config, rig.env | {"PYTHONPATH": str(folder)}) as daemon:
            daemon.until(lambda: daemon.reached > crossing.sample + BEHIND_S * RATE)
            status = daemon.stop()
            lost_ns = int((folder / "lost").read_text())
            return Run(config, daemon.rows, daemon.beats, recorded(config), status, lost_ns=lost_ns)


def run_while_the_clock_is_set(folder: Path, wav: Path) -> Run:
    config = configuration(folder)
    (folder / "sitecustomize.py").write_text(CLOCK)
    with Rig() as rig:
        rig.play(wav)
        with Daemon(config, rig.env | {"PYTHONPATH": str(folder)}) as daemon:
            daemon.measuring()
            daemon.more_beats(3)
            set_at = time.monotonic()
            (folder / "an-hour-on").touch()
            daemon.row(lambda row: row["kind"] == "health" and row["fault"] == "clock_step")
            daemon.more_beats(3)
            status = daemon.stop()
            return Run(config, daemon.rows, daemon.beats, recorded(config), status, set_at)


@pytest.fixture(scope="module", autouse=True)
def runs(pool: ThreadPoolExecutor, wav: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, Future[Run]]:
    made = {
        name: pool.submit(run_across, crossing, tmp_path_factory.mktemp("crossing"), wav)
        for name, crossing in CROSSINGS.items()
    }
    return made | {"step": pool.submit(run_while_the_clock_is_set, tmp_path_factory.mktemp("step"), wav)}


@pytest.mark.parametrize("name", CROSSINGS)
def test_samples_are_counted_on_across(runs: dict[str, Future[Run]], played: Floats, name: str) -> None:
    """One stretch, bit by bit as played, from before the crossing to behind it; what was lost before is one gap."""
    run, crossing = runs[name].result(), CROSSINGS[name]
    assert run.status == 0
    ((first, heard),) = run.stretches
    assert first < crossing.sample < first + len(heard) == run.rows[-1]["samples"]
    place = place_in(played, heard[:16])
    np.testing.assert_array_equal(heard, played[place : place + len(heard)])
    begin, end = [row for row in run.rows if row["kind"] == "health"]
    assert (begin["phase"], end["phase"], begin["incident"]) == ("begin", "end", end["incident"])
    assert end["first_sample"] + end["lost_samples"] == first


@pytest.mark.parametrize("name", CROSSINGS)
def test_stream_time_goes_on_as_the_clock_did_while_the_device_was_lost(
    runs: dict[str, Future[Run]], name: str
) -> None:
    run, crossing = runs[name].result(), CROSSINGS[name]
    lost_at_ns = crossing.start_ns + (crossing.sample - LEAD_S * RATE) * NS // RATE
    lag_s = min(beat.lag_s for beat in run.beats) - (run.lost_ns - lost_at_ns) / NS
    assert abs(lag_s) <= JITTER_S


@pytest.mark.parametrize("name", CROSSINGS)
def test_times_are_right_to_the_sample_across_and_over_midnight(runs: dict[str, Future[Run]], name: str) -> None:
    run, crossing = runs[name].result(), CROSSINGS[name]
    rows = [row for row in run.rows if row["kind"] == "measurement" and row["usable"]]
    for row in rows:
        assert ns_of(row["time"]) == crossing.start_ns + (row["first_sample"] + row["samples"]) * NS // RATE
    ends = {row["first_sample"] + row["samples"] > crossing.sample: row["time"] for row in rows}
    assert set(ends) == {False, True}
    assert ends[False][:10] < crossing.midnight == ends[True][:10]
    for channel in ("a", "b"):
        firsts = [row["first_sample"] for row in rows if row["channel"] == channel]
        assert firsts == list(range(firsts[0], firsts[-1] + 1, firsts[1] - firsts[0]))


@pytest.mark.parametrize("name", CROSSINGS)
def test_a_replay_of_the_segments_gives_the_same_measurements(
    runs: dict[str, Future[Run]], name: str, tmp_path: Path
) -> None:
    run = runs[name].result()
    again = replay(run.config, tmp_path, run.config.parent / "state" / "recordings")
    ours, theirs = ([bare(row) for row in rows if row["kind"] == "measurement"] for rows in (run.rows, again))
    usable = [row for row in ours if row["usable"]]
    assert len(usable) > 20
    assert usable == [row for row in theirs if row["usable"]]


def bare(row: Row) -> Row:
    """Return a row without what two runs may have different."""
    return {name: row[name] for name in row if name not in ("run", "origin", "sequence", "previous", "time_quality")}


def test_a_clock_that_is_set_by_an_hour_is_told_once_and_moves_no_sample(
    runs: dict[str, Future[Run]], played: Floats
) -> None:
    run = runs["step"].result()
    assert run.status == 0
    begin, end = [row for row in run.rows if row["kind"] == "health"]
    assert (begin["fault"], begin["phase"], end["phase"]) == ("clock_step", "begin", "end")
    assert begin["incident"] == end["incident"]
    assert begin["value"] == pytest.approx(HOUR_S, abs=0.05)  # the least step that counts as one
    ((first, heard),) = run.stretches
    place = place_in(played, heard[:16])
    assert first == 0
    np.testing.assert_array_equal(heard, played[place : place + len(heard)])
    for row in run.rows:
        if row["kind"] == "measurement":
            end_ns = (row["first_sample"] + row["samples"]) * NS // RATE
            assert ns_of(row["time"]) == ns_of(run.rows[0]["time"]) + end_ns
    before = min(beat.lag_s for beat in run.beats if beat.came < run.set_at)
    after = min(beat.lag_s for beat in run.beats if beat.came > run.set_at)
    assert abs(after - before) <= JITTER_S
