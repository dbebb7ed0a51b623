"""A real daemon obeys whom it may, once, in the order of its stream; and what goes to others is not to be read."""

from __future__ import annotations

import json
import sqlite3
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from driftwatch.bus.client import Asker
from driftwatch.bus.errors import KeyRefusedError
from driftwatch.bus.keys import Role
from driftwatch.store.queries import Reader, Wanted
from far_away import SECRETS, SEEN
from obeyed import NEAR, Obeyed, no_networks, settled, two_computers
from ordered import LONG_S, until

ALERT = "drive end/rocking/low"


@pytest.fixture(scope="module")
def daemon(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Obeyed]:
    """Give a daemon at which an alert stands."""
    found = Obeyed(tmp_path_factory.mktemp("daemon"))
    found.write()
    with found:
        found.wait_for("alert", alert=ALERT, state="unacknowledged")
        yield found


@pytest.fixture(scope="module")
def asker(daemon: Obeyed) -> Iterator[Asker]:
    with daemon.asker() as found:
        yield found


def granted(daemon: Obeyed, name: str, role: Role) -> Path:
    path = daemon.path.parent / f"{name}.key"
    daemon.keys.grant(name, role, time.time_ns(), (daemon.endpoint("control"), daemon.endpoint("publish")), path)
    return path


def stored(daemon: Obeyed, kind: str) -> list[Any]:
    with Reader.open(daemon.path.parent / "state" / "rows.db") as reader:
        return list(reader.records(kind, Wanted()))


def test_status_tells_what_stands(daemon: Obeyed, asker: Asker) -> None:
    def standing() -> Any:
        reply = asker.ask("status")
        return reply["ok"] and reply["standing"] and reply

    reply = until(standing, "the alert stands")
    assert [alert["alert"] for alert in reply["standing"]] == [ALERT]
    assert reply["standing"][0]["state"] == "unacknowledged"
    assert (reply["heartbeat"]["station"], reply["heartbeat"]["worst_alert"]) == ("bench", "medium")


def test_an_acknowledgement_is_in_the_store_when_it_is_answered_and_on_the_bus_after_that(
    daemon: Obeyed, asker: Asker
) -> None:
    reply = settled(asker, "acknowledge", target=ALERT, reason="belt slips", by="Ann", request="ack-1")
    assert reply == {"request": "ack-1", "ok": True, "outcome": "done", "stored": True}
    (command,) = [one for one in stored(daemon, "command") if one.body.request == "ack-1"]
    assert (command.body.action, command.body.target, command.body.reason) == ("acknowledge", ALERT, "belt slips")
    assert command.body.by == f"Ann ({asker.name})"
    (alert,) = [one for one in stored(daemon, "alert") if one.sequence == command.sequence + 1]
    assert (alert.body.state, alert.body.by) == ("acknowledged", command.body.by)
    assert command.sequence in alert.body.because
    assert daemon.wait_for("command", request="ack-1")["sequence"] == command.sequence
    assert daemon.wait_for("alert", state="acknowledged")["alert"] == ALERT


def test_notes_and_values_become_records_and_a_wrong_target_is_refused_on_the_record(
    daemon: Obeyed, asker: Asker
) -> None:
    assert settled(asker, "note", reason="belt tensioned", target="handover")["stored"]
    assert settled(asker, "covariate", target="oil", value=3.5, unit="K")["stored"]
    assert settled(asker, "covariate", target="oil", unit="K")["stored"]
    refused = settled(asker, "acknowledge", target="nothing/like/it", request="wrong")
    assert (refused["ok"], refused["stored"]) == (False, True)
    note = daemon.wait_for("note", text="belt tensioned")
    assert (note["handover"], note["by"]) == (True, asker.name)
    until(lambda: len(daemon.of("covariate", name="oil")) == 2, "both values")
    assert [row["value"] for row in daemon.of("covariate", name="oil")] == [3.5, None]
    assert daemon.wait_for("command", request="wrong")["outcome"].startswith("refused: no alert is called")


def test_since_gives_every_record_of_the_run_in_order(daemon: Obeyed, asker: Asker) -> None:
    rows: list[dict[str, Any]] = []
    run, more = None, True
    while more:
        reply = asker.ask("since", run=run, sequence=rows[-1]["sequence"] if rows else 0)
        rows += reply["records"]
        run, more = rows[-1]["run"], reply["more"]
    assert [row["sequence"] for row in rows] == list(range(1, len(rows) + 1))
    until(lambda: len(daemon.rows) >= len(rows), "they are printed")
    assert rows == daemon.rows[: len(rows)]


def test_a_reload_is_done_as_by_a_signal_and_says_who_asked(daemon: Obeyed, asker: Asker) -> None:
    daemon.path.write_text("nothing", encoding="utf-8")
    reply = settled(asker, "reload", by="Ann")
    assert not reply["ok"]
    assert reply["outcome"].startswith("refused: ")
    daemon.write(low=399.0)
    reply = settled(asker, "reload", by="Ann", reason="new limits", request="again")
    assert reply["ok"]
    assert reply["outcome"].startswith("done: taken over, sha256 ")
    row = daemon.wait_for("command", request="again")
    assert (row["action"], row["by"], row["reason"]) == ("reload", f"Ann ({asker.name})", "new limits")
    assert row["target"] == str(daemon.path)


@pytest.mark.parametrize("action", ["acknowledge", "note", "covariate", "reload", "stop"])
def test_a_key_to_look_changes_nothing_and_that_is_logged(daemon: Obeyed, action: str) -> None:
    fields: dict[str, Any] = {
        "acknowledge": {"target": ALERT},
        "note": {"reason": "x"},
        "covariate": {"target": "oil", "value": 1.0, "unit": "K"},
    }.get(action, {})
    with daemon.asker(granted(daemon, f"screen {action}", Role.LOOK)) as looker:
        assert looker.ask("status")["ok"]
        reply = looker.ask(action, request=f"not {action}", **fields)
    assert (reply["ok"], reply["fault"]) == (False, "right")
    daemon.told(f"Refused: {action} by screen {action}: the key may only look")
    assert [one for one in stored(daemon, "command") if one.body.request == f"not {action}"] == []


def test_a_key_works_as_soon_as_it_is_granted_and_no_longer_than_it_is(daemon: Obeyed) -> None:
    path = granted(daemon, "visitor", Role.OPERATE)
    with daemon.asker(path) as visitor:
        assert settled(visitor, "note", reason="here I am")["stored"]
        daemon.keys.revoke("visitor")
        with pytest.raises(KeyRefusedError):
            visitor.ask("stop")
    with daemon.asker(path) as visitor, pytest.raises(KeyRefusedError):
        visitor.ask("stop")
    daemon.told("No longer let in: visitor")
    daemon.told("Refused: a request with a revoked key")
    daemon.told("Refused: a key that is not granted wanted to give commands")


def test_while_the_store_takes_nothing_a_command_is_obeyed_and_the_answer_says_that_it_is_not_stored(
    daemon: Obeyed, asker: Asker
) -> None:
    """The lock is held until the answer is there: it cannot have been stored before."""
    locked = sqlite3.connect(daemon.path.parent / "state" / "rows.db", isolation_level=None)
    locked.execute("BEGIN IMMEDIATE")
    try:
        reply = asker.ask("note", reason="under lock", request="locked")
        assert (reply["ok"], reply["stored"]) == (True, False)
        assert "not stored yet" in reply["outcome"] or "not carried out yet" in reply["outcome"]
        assert asker.ask("status")["ok"]
    finally:
        locked.close()
    assert settled(asker, "note", reason="under lock", request="locked")["outcome"] == "done"
    assert [one.body.text for one in stored(daemon, "note")].count("under lock") == 1


def test_stop_is_recorded_then_obeyed_and_after_a_restart_no_request_is_done_again(daemon: Obeyed) -> None:
    """The last test of this daemon: it ends, and the next start knows what was asked of the one before."""
    with daemon.asker() as asker:
        reply = asker.ask("stop", by="Ann", reason="end of shift", request="stop-1")
        assert reply["ok"]
    assert daemon.process.wait(LONG_S) == 0
    with daemon:
        rows = len(daemon.rows)
        until(lambda: len(daemon.rows) > rows + 3, "it runs again")
        with daemon.asker() as asker:
            again = settled(asker, "acknowledge", target=ALERT, reason="belt slips", by="Ann", request="ack-1")
            assert again == {"request": "ack-1", "ok": True, "outcome": "done", "stored": True}
            assert asker.ask("stop", by="Ann", reason="end of shift", request="stop-1")["ok"]
            reused = settled(asker, "note", reason="other", request="ack-1")
            assert (reused["ok"], reused["fault"]) == (False, "reused")
            assert settled(asker, "note", reason="it goes on")["stored"]  # so the old stop was not obeyed anew
        daemon.end()
    assert [one.body.request for one in stored(daemon, "command")].count("ack-1") == 1
    assert [one.body.request for one in stored(daemon, "command")].count("stop-1") == 1


WHY_NOT = no_networks()


@pytest.mark.skipif(WHY_NOT is not None, reason=f"networks of their own cannot be made: {WHY_NOT}")
def test_beyond_this_computer_nothing_can_be_read_from_the_cable_and_a_revoked_key_hears_no_more(
    tmp_path: Path,
) -> None:
    """Two computers and a cable of which every byte is written down: what is published and asked does not stand there,
    and what is sent in plain text does."""
    with two_computers() as (near, far):
        daemon = Obeyed(tmp_path, NEAR, near)
        daemon.write()
        (tmp_path / "state").mkdir(0o700)
        daemon.keys.ensure("ann")
        paths = [granted(daemon, "one", Role.OPERATE), granted(daemon, "two", Role.LOOK)]
        with daemon:
            daemon.wait_for("measurement")
            away = subprocess.Popen(
                [*far, sys.executable, str(Path(__file__).parent / "far_away.py"), *map(str, paths)],
                stdin=subprocess.PIPE,
                stdout=subprocess.PIPE,
                text=True,
            )
            try:
                assert away.stdin is not None
                assert away.stdout is not None
                assert away.stdout.readline() == "ready\n"
                daemon.keys.revoke("one")
                away.stdin.write("\n")
                away.stdin.flush()
                found = json.loads(away.stdout.readline())
                assert away.wait(LONG_S) == 0
            finally:
                away.kill()
                away.communicate()
            daemon.end()
    assert found["look"]["ok"]
    assert (found["refused"]["fault"], found["noted"]["stored"]) == ("right", True)
    assert found["strange"] == 0
    assert found["revoked"]
    assert found["silent"]
    assert found["bytes"] > 10_000
    assert found["plain"] == [SEEN.decode()]
    assert daemon.of("note", text=SECRETS[5].decode())  # it did go over the cable
