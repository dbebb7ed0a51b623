"""A follower has every stored record exactly once, whatever is lost, late, ended or away in between."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import pytest
from driftwatch.bus.errors import NoDaemonError
from driftwatch.bus.follow import Follower, Message, Place
from hypothesis import given, settings
from hypothesis import strategies as st


class Daemon:
    """A store, a bus and a control port as the promises say: stored before published, a heartbeat with the number."""

    def __init__(self, page: int = 3) -> None:
        self.store: list[Message] = []
        self.bus: list[Message] = []
        self.is_away = False
        self._page = page
        self._run, self._sequence = 1, 0

    def record(self, *, published: bool = True) -> None:
        self._sequence += 1
        message = {"kind": "track", "run": f"run {self._run}", "sequence": self._sequence}
        self.store.append(message)
        if published:
            self.bus.append(message)

    def beat(self) -> None:
        self.bus.append({"kind": "heartbeat", "run": f"run {self._run}", "sequence": self._sequence})

    def repeat(self) -> None:
        if self.store and self.store[-1]["run"] == f"run {self._run}":
            self.bus.append(self.store[-1] | {"repeated": True})

    def restart(self) -> None:
        self._run, self._sequence = self._run + 1, 0

    def since(self, place: Place | None) -> dict[str, Any]:
        if self.is_away:
            raise NoDaemonError("nobody answers")
        places = [Place.of(message) for message in self.store]
        begin = next((at for at, one in enumerate(places) if place and one.run == place.run), 0)
        while (
            place
            and begin < len(places)
            and places[begin].run == place.run
            and (places[begin].sequence <= place.sequence)
        ):
            begin += 1
        records = self.store[begin : begin + self._page]
        known = place is None or place.run in {one.run for one in places}
        return {"records": records, "more": begin + self._page < len(self.store), "known": known}


EVENTS = st.sampled_from(
    ["record"] * 6 + ["beat", "beat", "repeat", "restart", "lose", "unheard", "hear", "hear", "away", "back", "kill"]
)


@given(st.lists(EVENTS, max_size=60))
@settings(max_examples=200)
def test_whatever_happens_every_stored_record_is_had_once_and_in_order(events: list[str]) -> None:
    daemon, had, heard = Daemon(), [], 0
    follower = Follower(daemon.since, had.extend, lambda _: None, lasting=True)
    for event in events:
        match event:
            case "record" | "beat" | "repeat" | "restart":
                getattr(daemon, event)()
            case "unheard":
                daemon.record(published=False)
            case "lose":  # what is under way
                heard = len(daemon.bus)
            case "hear":
                for message in daemon.bus[heard:]:
                    follower.take(message)
                heard = len(daemon.bus)
            case "away" | "back":
                daemon.is_away = event == "away"
            case "kill":  # a new one knows only what it wrote
                heard = len(daemon.bus)
                place = Place.of(had[-1]) if had else None
                follower = Follower(daemon.since, had.extend, lambda _: None, place, lasting=True)
        assert had == daemon.store[: len(had)]
    daemon.is_away = False
    daemon.record(published=False)
    daemon.beat()
    follower.take(daemon.bus[-1])
    assert had == daemon.store


def _followed(daemon: Daemon, messages: Sequence[Message], *, lasting: bool) -> tuple[list[Message], list[str]]:
    had: list[Message] = []
    told: list[str] = []
    follower = Follower(daemon.since, had.extend, told.append, lasting=lasting)
    for message in messages:
        follower.take(message)
    return had, told


@pytest.mark.parametrize("by", ["record", "beat"])
def test_one_that_only_looks_begins_with_what_comes_next_and_fills_holes(by: str) -> None:
    daemon = Daemon()
    for _ in range(5):
        daemon.record()
    daemon.beat()
    for _ in range(10):
        daemon.record()
    getattr(daemon, by)()
    had, told = _followed(daemon, [daemon.bus[5], daemon.bus[6], daemon.bus[-1]], lasting=False)
    assert had == daemon.store[5:]
    assert told == []


def test_where_nobody_can_be_asked_one_that_only_looks_tells_the_hole_and_goes_on() -> None:
    daemon = Daemon()
    for _ in range(9):
        daemon.record()
    daemon.is_away = True
    had, told = _followed(daemon, [*daemon.bus[:2], *daemon.bus[6:8]], lasting=False)
    assert [one["sequence"] for one in had] == [1, 2, 7, 8]
    assert told == ["nobody answers", "Hole: missed records after sequence 2 and before 7"]


def test_one_that_lasts_waits_where_nobody_can_be_asked_and_says_so_once() -> None:
    daemon = Daemon()
    for _ in range(9):
        daemon.record()
    daemon.is_away = True
    had, told = _followed(daemon, daemon.bus, lasting=True)
    assert (had, told) == ([], ["nobody answers"])


def test_another_daemons_store_is_told_once_and_not_taken_for_the_one_that_publishes() -> None:
    daemon, other = Daemon(), Daemon()
    for _ in range(4):
        other.restart()
    for _ in range(3):
        daemon.record()
        other.record()
    had: list[Message] = []
    told: list[str] = []
    follower = Follower(daemon.since, had.extend, told.append, lasting=True)
    for message in [*other.bus, *other.bus]:
        follower.take(message)
    assert had == daemon.store
    assert [words.partition(" is published")[0] for words in told] == ["run run 5"]


def test_a_run_that_the_store_no_longer_holds_is_told() -> None:
    daemon = Daemon()
    for _ in range(3):
        daemon.record()
    had: list[Message] = []
    told: list[str] = []
    follower = Follower(daemon.since, had.extend, told.append, Place("run 0", 7), lasting=True)
    follower.take(daemon.bus[-1])
    assert had == daemon.store
    assert told == [
        "the store holds nothing any more of run run 0, the last one that was had; going on at its oldest record"
    ]


def test_rows_that_the_store_lost_are_told_as_holes_within_a_page_and_between_pages() -> None:
    daemon = Daemon(page=3)
    for _ in range(12):
        daemon.record()
    daemon.restart()
    for _ in range(3):
        daemon.record()
    for number in (10, 6, 5, 4, 1):  # pages are then 1 3 4, 8 9 10, 12 and two of the next run
        del daemon.store[number]
    had, told = _followed(daemon, [daemon.bus[-1]], lasting=True)
    assert had == daemon.store
    assert told == [
        f"Hole: missed records after sequence {after} and before {before}"
        for after, before in ((1, 3), (4, 8), (10, 12))
    ]


def test_where_the_store_begins_anew_what_was_had_of_it_does_not_come_twice() -> None:
    """The last run that was had is gone from the store, as where an older copy of it was put back; others are there."""
    daemon = Daemon(page=2)
    for _ in range(3):
        for _ in range(5):
            daemon.record()
        daemon.restart()
    had: list[Message] = []
    told: list[str] = []
    follower = Follower(daemon.since, had.extend, told.append, lasting=True)
    follower.take(daemon.bus[-1])
    assert had == daemon.store
    stored = list(had)
    daemon.store = [one for one in daemon.store if one["run"] != "run 3"]
    for _ in range(5):
        daemon.record(published=False)
    daemon.beat()
    for message in (daemon.bus[-1], daemon.bus[-1]):
        follower.take(message)
    assert had == stored + daemon.store[10:]
    assert [words.partition(";")[0] for words in told] == [
        "the store holds nothing any more of run run 3, the last one that was had"
    ]
