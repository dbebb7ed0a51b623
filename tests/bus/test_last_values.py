"""The last message of each topic is due again for whoever comes late: in order, once, not too often."""

from __future__ import annotations

import json

import pytest
from driftwatch.bus import last_values as module
from driftwatch.bus.last_values import REPEAT_EVERY_S, LastValues
from hypothesis import given
from hypothesis import strategies as st

TOPICS = [b"alert/a/b/c", b"alert/a/b/d", b"run", b"track/a/b", b"track/a/bc"]


def _line(sequence: int) -> bytes:
    return b'{"sequence":%d}' % sequence


def _sequences(frames: list[tuple[bytes, bytes]]) -> list[tuple[bytes, int]]:
    return [(topic, json.loads(message)["sequence"]) for topic, message in frames]


@given(
    st.lists(st.sampled_from(TOPICS), max_size=30), st.lists(st.sampled_from([b"", b"track/", b"alert/a/b/c", b"x"]))
)
def test_due_are_the_last_messages_of_the_topics_asked_for_in_order(topics: list[bytes], prefixes: list[bytes]) -> None:
    values = LastValues()
    for sequence, topic in enumerate(topics, 1):
        values.sent(topic, _line(sequence))
    values.want(*prefixes)
    last = {topic: sequence for sequence, topic in enumerate(topics, 1)}
    expected = [(topic, n) for topic, n in last.items() if any(topic.startswith(prefix) for prefix in prefixes)]
    due = values.due(0.0)
    assert _sequences(due) == sorted(expected, key=lambda one: one[1])
    assert all(json.loads(message)["repeated"] is True for _, message in due)
    assert values.due(10.0) == []


def test_those_who_come_within_a_second_share_a_round() -> None:
    values = LastValues()
    values.sent(b"run", _line(1))
    values.want(b"")
    assert len(values.due(5.0)) == 1
    for _ in range(1000):
        values.want(b"")
        assert values.due(5.0 + 0.99 * REPEAT_EVERY_S) == []
    assert len(values.due(5.0 + REPEAT_EVERY_S)) == 1


def test_what_was_sent_meanwhile_is_not_sent_again() -> None:
    values = LastValues()
    values.sent(b"run", _line(1))
    values.sent(b"track/a/b", _line(2))
    values.want(b"")
    values.sent(b"run", _line(3))
    assert _sequences(values.due(0.0)) == [(b"track/a/b", 2)]


def test_the_topics_that_are_held_are_bounded(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "MOST_TOPICS", 3)
    values = LastValues()
    for sequence, topic in enumerate([b"a", b"b", b"c", b"a", b"d"], 1):
        values.sent(topic, _line(sequence))
        values.want(topic)
    assert _sequences(values.due(0.0)) == [(b"c", 3), (b"a", 4), (b"d", 5)]
