"""The control protocol without socket and clock: who gets which answer, when, and how often a thing is done."""

from __future__ import annotations

import json
from typing import Any

import pytest
from driftwatch.bus.clerk import (
    MOST_PENDING,
    MOST_REMEMBERED,
    PATIENCE_S,
    REQUESTS_AT_ONCE,
    REQUESTS_PER_S,
    Behind,
    Clerk,
    LookFailedError,
    Order,
    Progress,
    Reply,
)
from driftwatch.bus.keys import Granted, Role
from driftwatch.bus.request import FIELDS, Request
from driftwatch.bus.sparing import Allowance, SparseLog
from driftwatch.records import CommandDone

OPERATOR = Granted("root", Role.OPERATE, "p" * 40, 0)
LOOKER = Granted("wall screen", Role.LOOK, "q" * 40, 0)
NEEDED: dict[str, dict[str, Any]] = {
    "acknowledge": {"target": "a/b/c"},
    "note": {"reason": "x"},
    "covariate": {"target": "oil", "unit": "K"},
}


class Room:
    """A clerk with all that stands behind it, and what each sender was told."""

    def __init__(self) -> None:
        self.orders: list[Order] = []
        self.lines: list[tuple[str, str]] = []
        self.in_store: dict[str, CommandDone] = {}
        self.full: str | None = None
        self.looked: list[Request] = []
        self.clerk: Clerk[str] = Clerk(
            Behind(self._look, self._submit, self.in_store.get, lambda kind, text: self.lines.append((kind, text)))
        )

    def _look(self, request: Request) -> Reply:
        if request.run is not None:
            raise LookFailedError("the database is gone")
        self.looked.append(request)
        return {"records": []}

    def _submit(self, order: Order) -> str | None:
        if self.full is None:
            self.orders.append(order)
        return self.full

    def ask(
        self, request: str, action: str, *, sender: str = "s", now: float = 0.0, holder: Granted = OPERATOR, **more: Any
    ) -> list[tuple[str, Reply]]:
        fields = NEEDED.get(action, {}) | more
        raw = json.dumps({"request": request, "action": action, **fields}).encode()
        return list(self.clerk.hear(sender, holder, raw, now))

    def stored(self, request: str, outcome: str = "done") -> list[tuple[str, Reply]]:
        assert list(self.clerk.progress(Progress(request, outcome, stored=False))) == []
        return list(self.clerk.progress(Progress(request, outcome, stored=True)))


@pytest.fixture
def room() -> Room:
    return Room()


DONE = {"request": "r", "ok": True, "outcome": "done", "stored": True}


def test_a_command_is_answered_when_it_is_stored_and_not_before(room: Room) -> None:
    assert room.ask("r", "note") == []
    assert list(room.clerk.due(PATIENCE_S / 2)) == []
    assert room.stored("r") == [("s", DONE)]
    assert list(room.clerk.due(100.0)) == []


def test_a_refusal_by_the_pipeline_is_an_answer_that_is_not_ok(room: Room) -> None:
    room.ask("r", "acknowledge")
    ((_, reply),) = room.stored("r", "refused: no alert is called 'a/b/c'")
    assert (reply["ok"], reply["stored"]) == (False, True)


def test_what_cannot_be_stored_in_time_is_answered_with_how_far_it_came(room: Room) -> None:
    room.ask("r", "note")
    ((_, reply),) = room.clerk.due(PATIENCE_S)
    assert (reply["ok"], reply["stored"]) == (True, False)
    assert "not carried out yet" in reply["outcome"]
    assert room.ask("r", "note", now=1.0) == []
    list(room.clerk.progress(Progress("r", "done", stored=False)))
    ((_, reply),) = room.clerk.due(1.0 + PATIENCE_S)
    assert (reply["ok"], reply["stored"]) == (True, False)
    assert reply["outcome"].startswith("done; not stored yet")
    assert room.stored("r") == []  # everybody was told
    assert room.ask("r", "note", now=3.0) == [("s", DONE)]
    assert len(room.orders) == 1


def test_the_same_request_is_done_once_and_everybody_who_asked_hears(room: Room) -> None:
    room.ask("r", "note", sender="a")
    room.ask("r", "note", sender="b")
    assert room.stored("r") == [("a", DONE), ("b", DONE)]
    assert room.ask("r", "note", sender="c") == [("c", DONE)]
    assert len(room.orders) == 1


def test_whoever_repeats_a_request_again_and_again_does_not_put_off_the_answer(room: Room) -> None:
    room.ask("r", "note", sender="a")
    for step in range(1, 8):
        room.ask("r", "note", sender="b", now=step / 10)
    assert ("a", room_reply("r")) in list(room.clerk.due(PATIENCE_S))


def room_reply(request: str) -> Reply:
    words = "taken, but not carried out yet; the same request again tells what came of it"
    return {"request": request, "ok": True, "outcome": words, "stored": False}


def test_a_request_of_an_earlier_start_is_found_in_the_store(room: Room) -> None:
    room.in_store["r"] = CommandDone("r", "Ann (root)", "note", None, "x", None, None, "done")
    assert room.ask("r", "note", by="Ann") == [("s", DONE)]
    assert room.orders == []


@pytest.mark.parametrize("where", ["pending", "answered", "store"])
def test_an_id_that_was_used_for_something_else_is_refused(room: Room, where: str) -> None:
    if where == "store":
        room.in_store["r"] = CommandDone("r", "root", "note", None, "another", None, None, "done")
    else:
        room.ask("r", "note", reason="another")
    if where == "answered":
        room.stored("r")
    ((_, reply),) = room.ask("r", "note")
    assert (reply["ok"], reply["fault"]) == (False, "reused")
    ((_, reply),) = room.ask("r", "note", reason="another", by="Bob")  # nor by somebody else
    assert reply["fault"] == "reused"


def test_who_asks_is_the_key_and_the_person_where_one_is_named(room: Room) -> None:
    for number, by in enumerate((None, "root", "Ann")):
        room.ask(str(number), "note", by=by)
    assert [order.by for order in room.orders] == ["root", "root", "Ann (root)"]


@pytest.mark.parametrize("action", FIELDS)
def test_a_key_to_look_may_look_and_what_else_it_wants_is_refused_and_logged(room: Room, action: str) -> None:
    found = room.ask("r", action, holder=LOOKER, by="Ann")
    assert room.orders == []
    ((_, reply),) = found
    if action in ("status", "since"):
        assert (reply["ok"], reply["records"]) == (True, [])
        assert room.lines == []
    else:
        assert (reply["ok"], reply["fault"], reply["request"]) == (False, "right", "r")
        assert room.lines == [
            ("right of wall screen", f"Refused: {action} by Ann (wall screen): the key may only look")
        ]


@pytest.mark.parametrize("action", FIELDS)
def test_a_revoked_key_gets_nothing_whatever_it_asks(room: Room, action: str) -> None:
    raw = json.dumps({"request": "r", "action": action, **NEEDED.get(action, {})}).encode()
    ((_, reply),) = room.clerk.hear("s", None, raw, 0.0)
    assert (reply["ok"], reply["fault"]) == (False, "key")
    assert (room.orders, room.looked) == ([], [])
    assert room.lines == [("key", "Refused: a request with a revoked key")]


def test_a_look_that_fails_is_answered_with_why(room: Room) -> None:
    ((_, reply),) = room.ask("r", "since", run="5f0e8f0e-1111-4222-8333-123456789abc")
    assert reply == {"request": "r", "ok": False, "fault": "failed", "outcome": "refused: the database is gone"}


def test_a_key_may_ask_so_often_and_one_that_does_not_keep_to_it_takes_nothing_from_others(room: Room) -> None:
    """Of a thousand requests in a second the burst and one second's share are taken."""
    taken = 0
    for step in range(1000):
        ((_, reply),) = room.ask("r", "status", now=step / 1000)
        taken += reply["ok"]
        assert reply["ok"] or reply["fault"] == "rate"
    assert taken == pytest.approx(REQUESTS_AT_ONCE + REQUESTS_PER_S, abs=1.0)
    assert room.ask("r", "status", now=1.0, holder=LOOKER)[0][1]["ok"]
    assert room.ask("r", "status", now=2.0)[0][1]["ok"]


def test_what_is_malformed_counts_against_its_key_too(room: Room) -> None:
    faults = [reply["fault"] for _ in range(100) for _, reply in room.clerk.hear("s", OPERATOR, b"{", 0.0)]
    assert faults == ["malformed"] * int(REQUESTS_AT_ONCE) + ["rate"] * (100 - int(REQUESTS_AT_ONCE))


def test_status_counts_what_was_answered_and_refused(room: Room) -> None:
    list(room.clerk.hear("s", OPERATOR, b"{", 0.0))
    room.ask("r", "stop", holder=LOOKER)
    room.ask("r", "note")
    room.stored("r")
    ((_, reply),) = room.ask("now", "status")
    assert reply["requests"] == {"answered": 2, "refused": {"malformed": 1, "right": 1}}


def test_no_more_commands_wait_than_may(room: Room) -> None:
    for number in range(MOST_PENDING):
        assert room.ask(f"r{number}", "note", now=float(number)) == []
    ((_, reply),) = room.ask("more", "note", now=float(MOST_PENDING))
    assert (reply["ok"], reply["fault"]) == (False, "busy")
    assert len(room.orders) == MOST_PENDING
    room.stored("r0")
    assert room.ask("more", "note", now=float(MOST_PENDING + 1)) == []


def test_a_full_desk_refuses_and_the_request_may_come_again(room: Room) -> None:
    room.full = "64 commands wait to be carried out; ask again later"
    ((_, reply),) = room.ask("r", "note")
    assert (reply["fault"], reply["outcome"]) == ("busy", f"refused: {room.full}")
    room.full = None
    assert room.ask("r", "note") == []


def test_answers_are_remembered_up_to_a_bound(room: Room) -> None:
    for number in range(MOST_REMEMBERED + 10):
        room.ask(f"r{number}", "note", now=float(number))
        room.stored(f"r{number}")
    orders = len(room.orders)
    room.ask(f"r{MOST_REMEMBERED + 9}", "note", now=5000.0)
    assert len(room.orders) == orders
    room.ask("r0", "note", now=5000.0)  # the store would know it
    assert len(room.orders) == orders + 1


def test_at_the_end_everybody_who_waits_is_told(room: Room) -> None:
    room.ask("a", "note")
    room.ask("b", "note")
    list(room.clerk.progress(Progress("b", "done", stored=False)))
    told = {reply["request"]: reply for _, reply in room.clerk.close()}
    assert (told["a"]["ok"], told["a"]["outcome"]) == (False, "refused: the daemon is ending; nothing was done")
    assert (told["b"]["ok"], told["b"]["stored"]) == (True, False)


# ---------------------------------------------------------------------------------------------- sparing


def test_an_allowance_fills_up_again_to_its_burst_and_no_further() -> None:
    allowance = Allowance(10.0, 3.0)
    assert [allowance.take(0.0) for _ in range(4)] == [True, True, True, False]
    assert not allowance.take(0.05)
    assert allowance.take(0.1001)
    assert [allowance.take(1000.0) for _ in range(4)] == [True, True, True, False]


def test_a_log_tells_the_first_at_once_and_of_many_how_many_there_were() -> None:
    log = SparseLog(5.0)
    assert log.note("a", "one", 0.0) == "one"
    assert [log.note("a", f"more {number}", 1.0) for number in range(100)] == [None] * 100
    assert log.note("b", "other", 1.0) == "other"
    assert log.due(4.9) == []
    assert log.due(5.0) == ["more 99 (and 99 more like it)"]
    assert log.due(100.0) == []
    assert log.note("a", "again", 100.0) == "again"
