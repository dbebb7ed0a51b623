"""A listener knows what it missed, of all topics and of a part, and says so once."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

from driftwatch.bus.holes import Hole, HoleFinder
from hypothesis import given
from hypothesis import strategies as st

TOPICS = ("measurement/a", "track/a", "alert/a")


def _messages(topics: list[str]) -> list[tuple[str, dict[str, Any]]]:
    """Return a run's messages as a publisher numbers them, a heartbeat where the topic is so called."""
    last: dict[str, int] = {}
    found: list[tuple[str, dict[str, Any]]] = []
    sequence = 0
    for topic in topics:
        if topic == "heartbeat":
            found.append((topic, {"kind": "heartbeat", "run": "r", "sequence": sequence}))
            continue
        sequence += 1
        kind = topic.partition("/")[0]
        found.append((topic, {"kind": kind, "run": "r", "sequence": sequence, "previous": last.get(topic)}))
        last[topic] = sequence
    return found


def _is_record(message: dict[str, Any]) -> bool:
    return bool(message["kind"] != "heartbeat")


@given(st.lists(st.sampled_from([*TOPICS, "heartbeat"]), max_size=40), st.integers(0, 39))
def test_a_listener_that_misses_nothing_finds_no_hole_wherever_it_begins(topics: list[str], begin: int) -> None:
    for everything in (True, False):
        finder = HoleFinder(everything=everything)
        for topic, message in _messages(topics)[begin:]:
            if everything or topic in (TOPICS[0], "heartbeat"):
                assert finder.seen(topic, message) is None


@given(st.lists(st.sampled_from([*TOPICS, "heartbeat"]), min_size=3, max_size=40), st.data())
def test_every_run_of_missed_records_is_one_hole_with_its_bounds(topics: list[str], data: Any) -> None:
    messages = _messages(topics)
    first = data.draw(st.integers(1, len(messages) - 2))
    last = data.draw(st.integers(first + 1, len(messages) - 1))
    missed = [message["sequence"] for _, message in messages[first:last] if _is_record(message)]
    finder = HoleFinder(everything=True)
    holes = [finder.seen(topic, message) for topic, message in messages[:first] + messages[last:]]
    found = [hole for hole in holes if hole]
    assert found == ([Hole(None, missed[0] - 1, missed[-1] + 1)] if missed else [])


@given(st.lists(st.sampled_from(TOPICS), min_size=1, max_size=40), st.data())
def test_a_listener_to_a_part_misses_only_records_of_its_part(topics: list[str], data: Any) -> None:
    mine = [(topic, message) for topic, message in _messages(topics) if topic == TOPICS[0]]
    dropped = data.draw(st.sets(st.integers(0, 39)))
    came = [pair for place, pair in enumerate(mine) if place not in dropped]
    finder = HoleFinder(everything=False)
    found = [finder.seen(topic, message) for topic, message in came]
    expected = [message["previous"] != before["sequence"] for (_, before), (_, message) in pairwise(came)]
    assert [hole is not None for hole in found] == ([False, *expected] if came else [])


def test_a_new_run_counts_anew() -> None:
    finder = HoleFinder(everything=True)
    for run in ("one", "two"):
        for sequence in (5, 6):
            assert finder.seen("level/a", {"kind": "level", "run": run, "sequence": sequence, "previous": None}) is None


def test_a_hole_reads_as_a_sentence() -> None:
    assert str(Hole(None, 4, 9)) == "missed records after sequence 4 and before 9"
    assert str(Hole("alert/a", 4, 9)) == "missed records on alert/a after sequence 4 and before 9"


@given(st.lists(st.sampled_from([*TOPICS, "heartbeat"]), min_size=1, max_size=40), st.data())
def test_what_is_sent_again_is_neither_a_hole_nor_progress(topics: list[str], data: Any) -> None:
    messages = _messages(topics)
    records = [(topic, message) for topic, message in messages if _is_record(message)]
    mixed = []
    for message in messages:
        mixed.append(message)
        if records and data.draw(st.booleans()):
            topic, record = data.draw(st.sampled_from(records))
            mixed.append((topic, record | {"repeated": True}))
    for everything in (True, False):
        finder, plain = HoleFinder(everything=everything), HoleFinder(everything=everything)
        kept = [pair for place, pair in enumerate(messages) if place % 3 != 1]  # some are missed
        holes = [plain.seen(topic, message) for topic, message in kept]
        found = [
            finder.seen(topic, message) for topic, message in mixed if (topic, message) in kept or "repeated" in message
        ]
        assert [hole for hole in found if hole] == [hole for hole in holes if hole]
