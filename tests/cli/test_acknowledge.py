"""A command walks its whole way: from a person's fingers to the daemon, the store, the bus, and the replay."""

from __future__ import annotations

import socket
import time
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner
from driftwatch.cli import main

OF_THE_RUN = ("run", "origin", "time_quality", "config_sha256", "sources", "assumed", "reason")
"""What a replay says of itself."""

RECORD = "\n[record]\nkeep_hours = 1.0\n"

ALERT = "drive end/rocking/bolts"


def told(lines: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """Records without what differs between a run and its replay."""
    kept = [one for one in lines if one["kind"] not in ("run", "heartbeat")]
    return [{name: value for name, value in one.items() if name not in OF_THE_RUN[:3]} for one in kept]


def wait_for(file: Path, text: str) -> None:
    end = time.monotonic() + 60
    while text not in file.read_text():
        assert time.monotonic() < end, f"{text} did not come"
        time.sleep(0.1)


def test_what_people_do_is_on_the_bus_in_the_store_and_in_the_replay_with_commands(bench: Any, objects: Any) -> None:
    config = bench.config()
    (bench.folder / config).write_text((bench.folder / config).read_text() + RECORD)
    printed, caught = bench.folder / "printed.jsonl", bench.folder / "caught.jsonl"
    with printed.open("wb") as out, caught.open("wb") as ear:  # a pipe that nobody reads would stop them
        listener = bench.start("listen", bench.endpoint, "--json", stdout=ear)
        daemon = bench.start("run", config, "--json", stdout=out)
    wait_for(printed, '"state":"unacknowledged"')
    asked = [
        ("alerts", "acknowledge", ALERT, "--reason", "bolts were tightened", "--by", "anna"),
        ("alerts", "acknowledge", ALERT),
        ("notes", "add", "watch the drive end", "--handover"),
        ("tell", "value", "temperature", "21.5", "degC"),
    ]
    said = [bench.run(*words, "--config", config) for words in asked]
    assert [done.returncode for done in said] == [0, 0, 0, 0], [done.stderr for done in said]
    assert [done.stdout.strip() for done in said] == [
        "done",
        f"nothing to acknowledge: {ALERT} does not ask for it",
        "done",
        "done",
    ]
    unknown = bench.run("alerts", "acknowledge", "bolts", "--config", config)
    assert unknown.returncode == 1
    assert unknown.stderr == "Error: refused: no alert is called 'bolts'\n"
    stopped = bench.run("tell", "stop", "--reason", "end of the shift", "--config", config)
    assert stopped.returncode == 0, stopped.stderr
    assert daemon.wait(timeout=60) == 0
    published = objects(printed.read_text())

    wait_for(caught, '"phase":"end"')
    listener.terminate()
    listener.wait(timeout=60)
    heard = [one for one in objects(caught.read_text()) if one["kind"] != "heartbeat"]
    fresh = [one for one in heard if not one.get("repeated")]
    assert {one["sequence"]: one for one in fresh}.items() <= {one["sequence"]: one for one in published}.items()
    for kind in ("command", "note", "covariate"):
        assert [one for one in fresh if one["kind"] == kind] == [one for one in published if one["kind"] == kind]

    commands = [one for one in published if one["kind"] == "command"]
    assert [one["action"] for one in commands] == [
        "acknowledge",
        "acknowledge",
        "note",
        "covariate",
        "acknowledge",
        "stop",
    ]
    assert commands[0]["by"].startswith("anna (")
    alerts = objects(bench.run("alerts", "--config", config, "--json").stdout)
    assert alerts == [one for one in published if one["kind"] == "alert"]
    (taken,) = (one for one in alerts if one["state"] == "acknowledged" and one["previous_state"] == "unacknowledged")
    assert taken["by"] == commands[0]["by"]
    assert taken["because"][-1] == commands[0]["sequence"]  # after what fired it
    assert taken["reason"] == f"acknowledged by {taken['by']}: bolts were tightened"
    (note,) = objects(bench.run("notes", "--config", config, "--handover", "--json").stdout)
    assert (note["text"], note["handover"]) == ("watch the drive end", True)

    again = bench.run("replay", config, "state/recordings", "--with-commands", "state/bench.db", "--json")
    assert again.returncode == 0, again.stderr
    assert told(objects(again.stdout)) == told(published)


def test_without_a_daemon_a_note_goes_to_the_last_run_and_what_needs_one_says_so(bench: Any, objects: Any) -> None:
    config = bench.config(pace=0.0, seconds=3.0)
    nothing = bench.run("notes", "add", "hello", "--config", config)
    assert nothing.returncode == 1
    assert "expected the database of a daemon that has run before" in nothing.stderr
    assert bench.run("run", config, "--json").returncode == 0
    done = bench.run("notes", "add", "belt tensioned", "--by", "ben", "--config", config)
    assert (done.returncode, done.stdout) == (0, "done; no daemon was running\n"), done.stderr
    (note,) = objects(bench.run("notes", "list", "--config", config, "--json").stdout)
    assert note["text"] == "belt tensioned"
    assert note["by"].startswith("ben (")
    again = bench.run("notes", "add", "belt tensioned", "--config", config, "--request", "odd\tid")
    assert again.returncode == 2
    nobody = bench.run("tell", "reload", "--config", config)
    assert nobody.returncode == 1
    assert "nobody answers at" in nobody.stderr


@pytest.mark.parametrize(
    ("words", "says"),
    [
        (("notes", "add", ""), "expected text of 1 to 2000 printable characters"),
        (("notes", "add", "red\x1b[31m"), "expected text of 1 to 2000 printable characters"),
        (("notes", "add", "odd \udcff"), "expected text of 1 to 2000 printable characters"),
        (("tell", "value", "temperature", "inf", "degC"), "expected one JSON object"),
        (("tell", "value", "a/b", "1.0", "degC"), "a name of 1 to 64 letters"),
    ],
)
def test_what_a_daemon_would_refuse_is_refused_without_one(bench: Any, words: tuple[str, ...], says: str) -> None:
    done = CliRunner().invoke(main, [*words, "--config", str(bench.folder / bench.config())])
    assert done.exit_code == 2
    assert says in done.stderr


def test_where_somebody_is_at_the_control_port_he_is_asked(bench: Any) -> None:
    """A daemon that was started with another database holds another lock: nothing may be written past it."""
    config = str(bench.folder / bench.config())
    with socket.create_server(("127.0.0.1", bench.control)):
        done = CliRunner().invoke(main, ["notes", "add", "hello", "--config", config])
    assert done.exit_code == 1
    assert "expected a key" in done.stderr


def test_whom_to_ask_must_be_said_and_values_must_be_numbers(bench: Any) -> None:
    nobody = bench.run("notes", "add", "hello")
    assert nobody.returncode == 2
    assert "expected one of them, which tells where the daemon is" in nobody.stderr
    hot = bench.run("tell", "value", "temperature", "hot", "degC", "--config", bench.config())
    assert hot.returncode == 2
    assert "expected a number such as 21.5, or `missing`" in hot.stderr
