"""The daemon live on a sound card: nothing lost, what it costs, and how soon a reading is on the bus.

Eight channels of 48 kHz with three modes each, windows of 2 s, two readings of each mode a second, through PortAudio
and a virtual sound card, on two cores. The daemon is that of ``driftwatch run``, in processes of its own; a
subscriber's socket, here, stamps each message as it comes, on the clock by which the daemon dates arrivals.

A reading's way in time: the block that holds its window's last sample arrives; the zoom's hop and edge delay later the
block arrives upon which it can be measured; its record is made; the next group is committed and published; it is heard.
"""

from __future__ import annotations

import json
import tempfile
from collections.abc import Iterator
from pathlib import Path

import numpy as np
from driftwatch.daemon.crew import LOOK_S
from driftwatch.daemon.keeper import COMMIT_EVERY_S
from driftwatch.stream.recording import open_recordings
from numpy.typing import NDArray

from benchmarks.bars import Row, Size
from benchmarks.live_run import Heard, listened
from benchmarks.live_scene import FRAMES, STEP_S, LiveScene, two_cores
from benchmarks.scene import RATE_HZ

SCENE = LiveScene(channels=8, modes=3)
WORKERS = 2
SECONDS = 600.0
SECONDS_SMALL = 6.0
WARM_UP_S = 5.0
RECORDED_S = 60.0
"""Length of the second run at most, with the raw recorder: what it keeps is 1.5 MB a second."""

MOST_SHARE = 60.0
"""Of one core, in per cent, for the whole daemon."""

MOST_LATENCY_S = 0.060
GROUP_S = COMMIT_EVERY_S + LOOK_S
"""How long a record may wait for the commit of its group at most."""

NEAR = 0.01
"""A mode is found when the median of its frequencies is relatively so near to the truth; channels lie 3 % apart."""

_DAEMON = f"[daemon]\nworkers = {WORKERS}\n"
_RECORD = "[record]\nkeep_hours = 1.0\nsegment_s = 20.0\n"


def run(size: Size) -> Iterator[Row]:
    """Yield what was lost, found, spent and how late it was; then the same, in short, with the raw recorder on.

    In small there is one run only, with the recorder.
    """
    seconds = size.seconds or (SECONDS if size.full else SECONDS_SMALL)
    if size.full:
        yield from _run(seconds, WARM_UP_S, size.full, record=False)
    yield from _run(min(seconds, RECORDED_S), WARM_UP_S if size.full else 0.0, size.full, record=True)


def _run(seconds: float, warm_up_s: float, full: bool, *, record: bool) -> Iterator[Row]:
    with tempfile.TemporaryDirectory() as name, two_cores():
        heard = listened(Path(name), SCENE, _DAEMON + _RECORD * record, seconds, warm_up_s)
        different = differing(Path(name) / "recordings", SCENE.loop()) if record else 0
    case = f"{len(SCENE.truth())} modes, {heard.wall_s:.0f} s{', recorder' if record else ''}"
    yield from _kept(case, heard)
    if record:
        yield Row(case, "samples recorded not as played", different, "none", different == 0)
    yield from _cost(case, heard, full)
    yield from _latency(case, heard, full)


def _kept(case: str, heard: Heard) -> Iterator[Row]:
    """Yield what was lost, and whether each mode was found where it is."""
    records = [json.loads(message) for _, message in heard.messages]
    faults = [record for record in records if record["kind"] == "health"]
    lost = sum(record["lost_samples"] or 0 for record in faults if record["phase"] == "end")
    yield Row(case, "records of a fault", len(faults), "none", not faults)
    yield Row(case, "samples lost", lost, "none", lost == 0)
    yield Row(case, "clock over samples that came, ms", 1e3 * _ahead_s(heard), "", None)
    fill = max((record["queue_fill"] for record in records if record["kind"] == "heartbeat"), default=float("nan"))
    yield Row(case, "fullest queue, per cent", 100 * fill, "", None)
    yield Row(case, "player ran dry, times", heard.ran_dry, "never", heard.ran_dry == 0)
    yield Row(case, "processes started again", float(heard.restarted), "none", not heard.restarted)
    found, least = _found(records)
    yield Row(case, "modes at their true frequency", found, f"all {len(SCENE.truth())}", found == len(SCENE.truth()))
    wanted = int(heard.wall_s / STEP_S) - 1
    yield Row(case, "readings of a mode, least", least, f"at least {wanted}", least >= wanted)


def _found(records: list[dict[str, object]]) -> tuple[int, int]:
    """Return how many modes' median frequency is right, and the least number of readings of one."""
    seen: dict[tuple[str, str], list[float]] = {mode: [] for mode in SCENE.truth()}
    counts = dict.fromkeys(seen, 0)
    for record in records:
        if record["kind"] == "measurement":
            mode = str(record["channel"]), str(record["mode"])
            counts[mode] += 1
            if record["usable"]:
                seen[mode].append(float(str(record["frequency_hz"])))
    right = [
        bool(seen[mode]) and abs(float(np.median(seen[mode])) / truth - 1) < NEAR
        for mode, truth in SCENE.truth().items()
    ]
    return sum(right), min(counts.values())


def _ahead_s(heard: Heard) -> float:
    """Return by how much the clock went on further than the samples that came say: the whole of any loss, told or not.

    Blocks come in bursts, and the server's rate is not quite its nominal one: some ten milliseconds are nothing.
    """
    arrived_ns = heard.notes[:, 0]
    return float(arrived_ns[-1] - arrived_ns[0]) * 1e-9 - (len(arrived_ns) - 1) * FRAMES / RATE_HZ


def _cost(case: str, heard: Heard, full: bool) -> Iterator[Row]:
    for name, share in heard.shares.items():
        yield Row(case, f"{name}, per cent of a core", share, "", None)
    total = sum(heard.shares.values()) if heard.shares else float("nan")
    ok = total < MOST_SHARE if full else None
    yield Row(case, "the daemon, per cent of a core", total, f"under {MOST_SHARE:.0f}", ok)
    for name, share in heard.others.items():
        yield Row(case, f"({name}, per cent of a core)", share, "", None)


def _latency(case: str, heard: Heard, full: bool) -> Iterator[Row]:
    """Yield how long each part of a reading's way took."""
    limit_ms = 1e3 * (MOST_LATENCY_S + GROUP_S)
    for name, seconds in latencies(heard).items():
        median_ms, late_ms, most_ms = (1e3 * float(value) for value in np.percentile(seconds, [50, 99, 100]))
        yield Row(case, f"{name}, median, ms", median_ms, "", None)
        if name == "arrived to heard":
            yield Row(case, f"{name}, 99 %, ms", late_ms, f"under {limit_ms:.0f}", late_ms < limit_ms if full else None)
        else:
            yield Row(case, f"{name}, 99 %, ms", late_ms, "", None)
        yield Row(case, f"{name}, most, ms", most_ms, "", None)


def latencies(heard: Heard) -> dict[str, NDArray[np.float64]]:
    """Return the parts of each reading's way, seconds, tied by the sequence of its record.

    Raises
    ------
    RuntimeError
        When a message's record was made upon no block.
    """
    notes = heard.notes[heard.notes[:, 3] > 0]
    came, made, to_bus, whole, window = [], [], [], [], []
    for heard_ns, message in heard.messages:
        record = json.loads(message)
        if record["kind"] != "measurement" or heard_ns < heard.began_ns:
            continue
        place = int(np.searchsorted(notes[:, 3], record["sequence"]))
        if place == len(notes) or notes[place, 2] > record["sequence"]:
            continue  # of the end of the stream: made known upon no block
        arrived_ns, made_ns = int(notes[place, 0]), int(notes[place, 1])
        last = record["first_sample"] + record["samples"] - 1
        completed_ns = int(heard.notes[last // FRAMES, 0])  # blocks are whole and nothing was lost
        came.append(arrived_ns - completed_ns)
        made.append(made_ns - arrived_ns)
        to_bus.append(heard_ns - made_ns)
        whole.append(heard_ns - arrived_ns)
        window.append(heard_ns - completed_ns)
    if not whole:
        raise RuntimeError("no reading was heard; expected some of every mode")
    named = {
        "window's end to arrived": came,
        "arrived to made": made,
        "made to heard": to_bus,
        "arrived to heard": whole,
        "window's end to heard": window,
    }
    return {name: np.array(values) * 1e-9 for name, values in named.items()}


def differing(recorded: Path, played: NDArray[np.float32]) -> int:
    """Return how many recorded samples are not those that were played, round and round, wherever it began."""
    source = open_recordings([recorded], None, "recorded")
    place: int | None = None
    different = 0
    for block in source.blocks(RATE_HZ):
        if place is None:
            (begins,) = np.nonzero(np.all(played == block.samples[0], axis=1))
            if len(begins) != 1:
                return block.count  # not what was played
            place = int(begins[0]) - block.first_sample
        index = (place + block.first_sample + np.arange(block.count)) % len(played)
        different += int(np.count_nonzero(np.any(played[index] != block.samples, axis=1)))
    return different
