"""What sound cards and processes do to a daemon in weeks, done to the real one: each is one gap, told once, and over.

The cause of each scenario ends at a known instant. Where the player plays on meanwhile, how much was lost is known
from where in the played recording the samples before and after stand; where the sound server itself stood still or
died, from stream time against UTC.
"""

from __future__ import annotations

import math
import time
from concurrent.futures import Future, ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest
from card_files import (
    BLOCK,
    LIMIT_S,
    NS,
    OF_THE_STREAM,
    RATE,
    TRUTH,
    WINDOW_S,
    Floats,
    Row,
    configuration,
    first_difference,
    ns_of,
    of_the_stream,
    place_in,
    replay,
    stored,
    usable,
)
from card_scenarios import SCENARIOS, Outcome, play_out
from live_card import Daemon

from soundrig import Rig

FLOWS_S = 5.0
"""So soon after the end of a cause samples must flow, where some are missing."""

SETTLED_S = 1.0
"""So much later than a window's length after the first sample the first measurement must be usable."""

EXACT = BLOCK
"""How wrong the length of a gap may be, samples."""

JITTER_S = 0.02
"""How much the smallest lag of a few heartbeats may move: the server's own period, cut into blocks of another one."""

SIGMAS = 5.0
"""A usable reading further off than this is wrong. A right one is with probability 6e-7; in all scenarios together
there are about 800, each of frequency and Q: a false alarm in 1000 runs at most."""


@pytest.fixture(scope="module")
def outcomes(
    pool: ThreadPoolExecutor, wav: Path, tmp_path_factory: pytest.TempPathFactory
) -> dict[str, Future[Outcome]]:
    """Return what comes of every scenario, the longest begun first."""
    folder = tmp_path_factory.mktemp("failures")
    folders = {name: folder / name.replace(" ", "-") for name in SCENARIOS}
    for one in folders.values():
        one.mkdir()
    return {name: pool.submit(play_out, name, folders[name], wav) for name in SCENARIOS}


GAPS = [name for name, scenario in SCENARIOS.items() if scenario.is_gap]
"""Where samples are missing."""

KNOWN = [name for name, scenario in SCENARIOS.items() if scenario.plays_on]
"""Where the player plays on, so that the samples tell what was lost; elsewhere only the clock does."""


@pytest.fixture(params=SCENARIOS, scope="module")
def outcome(request: pytest.FixtureRequest, outcomes: dict[str, Future[Outcome]]) -> Outcome:
    return outcomes[request.param].result()


# ---------------------------------------------------------------------------------------------- what must come of it


def test_no_process_outlives_a_main_process_that_was_killed_and_the_next_one_takes_over(
    outcomes: dict[str, Future[Outcome]], rig: Rig, wav: Path, tmp_path: Path
) -> None:
    """The rows told until then are whole, and all of them are in the store. (The scenarios go on meanwhile.)"""
    config = configuration(tmp_path, daemon="workers = 2")
    with Daemon(config, rig.env) as daemon:
        rig.play(wav)
        daemon.measuring()
        assert sorted(daemon.processes().values()) == ["capture", "recorder", "run", "tracker", "tracker"]
        daemon.process.kill()
        daemon.process.wait()
        deadline = time.monotonic() + LIMIT_S
        while daemon.processes():
            assert time.monotonic() < deadline, f"left behind: {daemon.processes()}"
            time.sleep(0.05)
        numbers = [row["sequence"] for row in daemon.rows]
        assert numbers == list(range(1, len(numbers) + 1))
        kept = stored(config)
        assert kept == list(range(1, len(kept) + 1))
        assert len(kept) >= len(numbers)
    with Daemon(config, rig.env) as daemon:  # neither lock nor port is left taken
        assert daemon.rows[daemon.row(lambda row: row["kind"] == "run")]["phase"] == "begin"
        assert daemon.stop() == 0


@pytest.mark.parametrize("outcome", GAPS, indirect=True)
def test_samples_flow_within_5_s_of_the_end_of_the_cause(outcome: Outcome) -> None:
    """By the time at which the first sample was taken: when it is told depends on how busy the computer is.

    A process may have to be started for it. Where the daemon's own start took longer than that, so may this.
    """
    first_ns = ns_of(outcome.rows[0]["time"]) + outcome.gap_end * NS // RATE
    assert (first_ns - outcome.ended_ns) / NS <= max(FLOWS_S, outcome.starting_s)


@pytest.mark.parametrize("outcome", GAPS, indirect=True)
def test_the_first_usable_measurement_comes_a_window_and_a_second_later_at_most(outcome: Outcome) -> None:
    """Counted in samples from the end of the gap; how soon it is then told is for the bench, here it is told at all."""
    for channel in TRUTH:
        row, came = next(
            (row, came)
            for row, came in zip(outcome.rows, outcome.came, strict=True)
            if usable(row, channel, outcome.gap_end)
        )
        assert row["first_sample"] + row["samples"] - outcome.gap_end <= (WINDOW_S + SETTLED_S) * RATE
        assert came - outcome.told <= LIMIT_S


def test_each_cause_is_one_incident_with_one_begin_and_one_end(outcome: Outcome) -> None:
    if not outcome.scenario.faults:
        assert not outcome.incidents
        return
    phases = [row["phase"] for row in outcome.incidents if row["phase"] != "continue"]
    assert phases == ["begin", "end"], outcome.incidents
    assert len({row["incident"] for row in outcome.incidents}) == 1
    assert {row["fault"] for row in outcome.incidents} <= set(outcome.scenario.faults)
    assert (outcome.incidents[-1]["lost_samples"] > 0) == outcome.scenario.is_gap


def test_the_gap_is_where_and_as_long_as_it_is_told_to_be(outcome: Outcome, played: Floats) -> None:
    """Told, recorded and dated alike."""
    if not outcome.scenario.is_gap:
        assert len(outcome.stretches) == 1
        return
    (first, before), (after, _) = outcome.stretches
    end = outcome.incidents[-1]
    assert first == 0
    assert end["first_sample"] == len(before)
    assert outcome.gap_end == after
    assert end["seconds"] == end["lost_samples"] / RATE
    assert ns_of(end["since"]) == ns_of(outcome.rows[0]["time"]) + len(before) * NS // RATE
    assert ns_of(end["time"]) == ns_of(end["since"]) + end["lost_samples"] * NS // RATE


@pytest.mark.parametrize("outcome", KNOWN, indirect=True)
def test_what_is_told_to_be_missing_is_missing_and_nothing_else(outcome: Outcome, played: Floats) -> None:
    """The samples stand in the recording bit by bit, and between two stretches as many are missing as is told."""
    places = []
    for _, heard in outcome.stretches:
        places.append(place_in(played, heard[:16]))
        np.testing.assert_array_equal(heard, played[places[-1] : places[-1] + len(heard)])
    if outcome.scenario.is_gap:
        lost = places[1] - places[0] - len(outcome.stretches[0][1])
        assert abs(outcome.incidents[-1]["lost_samples"] - lost) <= EXACT


@pytest.mark.parametrize("outcome", [name for name in SCENARIOS if name not in KNOWN], indirect=True)
def test_stream_time_is_where_it_was_against_utc(outcome: Outcome) -> None:
    before = min(beat.lag_s for beat in outcome.beats if beat.came < outcome.began)
    after = min(beat.lag_s for beat in outcome.beats[-5:])
    assert abs(after - before) <= EXACT / RATE + JITTER_S


def test_no_reading_is_wrong(outcome: Outcome) -> None:
    """Of samples in which the player was silent, so that there is no truth, none is judged."""
    judged = 0
    for row in outcome.rows:
        if row["kind"] != "measurement" or not row["usable"] or is_silent(outcome.stretches, row):
            continue
        frequency_hz, q = TRUTH[row["channel"]]
        assert abs(row["frequency_hz"] - frequency_hz) <= SIGMAS * row["frequency_std_hz"], row
        assert abs(math.log(row["q"] / q)) <= SIGMAS * row["q_std"] / row["q"], row
        judged += 1
    assert judged >= 8


def is_silent(stretches: list[tuple[int, Floats]], row: Row) -> bool:
    """Say whether a measurement saw a stretch of zeros: the player had stopped, or had not begun."""
    first, samples = row["first_sample"], row["samples"]
    begin, recorded = next(one for one in reversed(stretches) if one[0] <= first)
    seen = recorded[first - begin : first - begin + samples]
    assert len(seen) == samples, "a usable measurement of samples that were not recorded"
    return bool((~seen.any(axis=1)).sum() > BLOCK)


def test_it_ends_well_with_every_row_told_and_stored(outcome: Outcome) -> None:
    assert outcome.status == 0, outcome.errors
    numbers = [row["sequence"] for row in outcome.rows]
    assert numbers == list(range(1, len(numbers) + 1))
    assert outcome.sequences == numbers
    assert (outcome.rows[-1]["kind"], outcome.rows[-1]["reason"]) == ("run", "stopped")


@pytest.mark.parametrize("outcome", ["capture killed"], indirect=True)
def test_rows_are_those_of_a_replay_of_the_segments_gap_and_all(outcome: Outcome, tmp_path: Path) -> None:
    segments = outcome.config.parent / "state" / "recordings"
    live, again = of_the_stream(outcome.rows), of_the_stream(replay(outcome.config, tmp_path, segments))
    assert {row["kind"] for row in live} == set(OF_THE_STREAM)
    assert first_difference(live, again) is None


def test_no_process_is_left_behind(outcome: Outcome) -> None:
    assert outcome.left == {}
