"""``run`` as a real process: what is printed, stored and published is the same, and it ends in good order."""

from __future__ import annotations

import json
import re
import shlex
import signal
import subprocess
import threading
import time
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest
import zmq
from click.testing import CliRunner
from driftwatch.bus.wire import encode_json, is_repeated
from driftwatch.cli import main
from driftwatch.records import KINDS
from driftwatch.store.queries import Reader

Objects = Callable[[str], list[dict[str, Any]]]
Message = tuple[str, dict[str, Any]]

OF_THE_RUN = ("run", "origin", "time_quality", "sources", "assumed")
"""What differs between a run and the replay of what it was fed: who it was, and what is known of its samples."""


def _stored(path: Path) -> list[dict[str, Any]]:
    """Return every record of the last run in a database as the wire carries it, in order."""
    with Reader.open(path) as reader:
        run = reader.find_run("last")
        found = [envelope for kind in KINDS for envelope in reader.records(kind) if envelope.run == run]
    return [json.loads(encode_json(one)) for one in sorted(found, key=lambda one: one.sequence)]


def _figures(records: list[dict[str, Any]], *more: str) -> list[dict[str, Any]]:
    """Return records without what tells one run from another."""
    return [{key: value for key, value in one.items() if key not in (*OF_THE_RUN, *more)} for one in records]


def _is_whole(records: list[dict[str, Any]]) -> None:
    """Hold a run's records to their numbers: no holes, and begin and end where they belong."""
    assert [one["sequence"] for one in records] == list(range(1, len(records) + 1))
    assert [(one["phase"], one["sequence"]) for one in records if one["kind"] == "run"] == [
        ("begin", 1),
        ("end", len(records)),
    ]
    assert len({one["run"] for one in records}) == 1


@contextmanager
def _listening(endpoint: str) -> Iterator[list[Message]]:
    """Give a list that fills with what a subscriber hears; whole once the context is left."""
    heard: list[Message] = []
    done = threading.Event()

    def listen() -> None:
        with zmq.Context() as context, context.socket(zmq.SUB) as subscriber:
            subscriber.setsockopt(zmq.LINGER, 0)
            subscriber.setsockopt(zmq.RECONNECT_IVL, 10)
            subscriber.setsockopt(zmq.SUBSCRIBE, b"")
            subscriber.connect(endpoint)
            while subscriber.poll(200) or not done.is_set():
                if subscriber.poll(0):
                    topic, raw = subscriber.recv_multipart()
                    message = json.loads(raw)
                    if not is_repeated(message):
                        heard.append((topic.decode(), message))

    thread = threading.Thread(target=listen)
    thread.start()
    try:
        yield heard
    finally:
        done.set()
        thread.join()


def _until_told(process: subprocess.Popen[str], words: str) -> str:
    """Read standard output until a line holds the words; return all that was read."""
    assert process.stdout is not None
    read = ""
    while words not in read:
        line = process.stdout.readline()
        assert line, read
        read += line
    return read


def _ended(process: subprocess.Popen[str], read: str = "") -> tuple[str, str]:
    """Return all of a process's standard output, of which some was read before, and its standard error."""
    assert process.stdout is not None
    read += process.stdout.read()
    return read, process.communicate(timeout=20)[1]


def _are_tied(messages: Iterable[Message]) -> None:
    """Hold messages to their topic: each says which one came before it there."""
    last: dict[str, int] = {}
    for topic, message in messages:
        assert message["previous"] == last.get(topic, message["previous"])
        last[topic] = message["sequence"]


# ---------------------------------------------------------------------------------------------- one stream of records


def test_what_is_printed_is_what_is_stored_and_what_the_bus_carries_until_a_signal_ends_it(
    bench: Any, objects: Objects
) -> None:
    """How soon it ends is for the bench; that SIGTERM ends it as SIGINT does is held by `daemon/test_service`."""
    began = time.monotonic()
    with _listening(bench.endpoint) as heard:
        process = bench.start("run", bench.config(pace=4.0), "--json")
        read = _until_told(process, '"state":"unacknowledged"')
        time.sleep(1.3)  # until it is in a heartbeat
        process.send_signal(signal.SIGINT)
        out, err = _ended(process, read)
    assert process.returncode == 0, err
    assert "Traceback" not in err
    printed = objects(out)
    _is_whole(printed)
    assert printed == _stored(bench.folder / "state" / "bench.db")
    assert printed[-1]["reason"] == "stopped"
    assert {one["origin"] for one in printed} == {"simulated"}
    fired = [one for one in printed if one["kind"] == "alert" and one["state"] == "unacknowledged"]
    assert [one["alert"] for one in fired] == ["drive end/rocking/bolts"]
    told = [(topic, message) for topic, message in heard if topic != "heartbeat" and not message.get("repeated")]
    carried = [message for _, message in told]
    assert len(carried) > 0.5 * len(printed)  # a subscriber that joins late misses the first
    assert carried == printed[-len(carried) :]
    topics = {topic for topic, _ in heard}
    assert topics >= {"measurement/drive_end/rocking", "track/drive_end/rocking", "alert/drive_end/rocking/bolts"}
    _are_tied(told)
    _are_heartbeats([message for topic, message in heard if topic == "heartbeat"], time.monotonic() - began)


def _are_heartbeats(beats: list[dict[str, Any]], seconds: float) -> None:
    """Hold the heartbeats of a run of so many seconds to their fields; that one comes a second is for `test_live`."""
    assert len(beats) >= 3
    for beat in beats:
        assert beat.keys() == {
            *("kind", "schema", "station", "run", "origin", "time", "time_quality", "uptime_s"),
            *("sample_age_s", "queue_fill", "worst_alert", "sequence", "unsaved", "unsaved_s"),
        }
        assert (beat["kind"], beat["station"], beat["origin"]) == ("heartbeat", "bench", "simulated")
        assert 0.0 <= beat["queue_fill"] <= 1.0
    ups = [beat["uptime_s"] for beat in beats]
    assert 0.0 <= ups[0] <= ups[-1] <= seconds
    sequences = [beat["sequence"] for beat in beats]
    assert sequences == sorted(sequences)
    assert [beats[0]["worst_alert"], beats[-1]["worst_alert"]] == [None, "high"]


# ---------------------------------------------------------------------------------------------- the end


def test_the_view_is_for_people_and_its_summary_names_commands_that_work(
    bench: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    config = bench.config("a bench.toml", pace=10.0)  # a name that a shell must have quoted
    process = bench.start("run", config)
    read = _until_told(process, "ALERT")
    process.send_signal(signal.SIGINT)
    out, err = _ended(process, read)
    assert process.returncode == 0
    _is_for_people(out)
    assert err.startswith("Watching 1 mode of bench.\nRows go to ")
    told = out.partition("What next:\n")[2].splitlines()
    named = [shlex.split(line[line.index("driftwatch") :])[1:] for line in told if re.match(r"  \S", line)]
    assert [command[0] for command in named] == ["readings", "runs", "check", "replay"]
    monkeypatch.chdir(bench.folder)
    _done("simulate", "short.wav", "--config", config, "--seconds", "3")
    for command in named:
        assert _done(*("short.wav" if word == "RECORDING" else word for word in command))
    assert "drive end" in _done(*named[0])


def _is_for_people(out: str) -> None:
    lines = out.splitlines()
    assert lines[0] == "Times are UTC, frequencies ± standard uncertainty, Q with its 95 % interval."
    assert max(map(len, lines)) <= 110
    assert "\x1b" not in out  # colours only on a terminal
    assert "can tell" not in out  # the first time is no news
    mode = re.compile(r"\d\d:\d\d:\d\d  drive end / rocking +\d+\.\d+ ± \d+\.\d+ Hz  Q \d+.* to .*\)  +tracking")
    assert any(mode.fullmatch(line) for line in lines)
    assert any(re.fullmatch(r"\d\d:\d\d:\d\d  ALERT high  drive end/rocking/bolts: frequency .*", one) for one in lines)
    assert "Alerts: 1 raised, 0 came back, 1 standing." in lines
    assert "driftwatch advises; it is no protective system." in out


def _done(*arguments: object) -> str:
    """Return what a command prints, which needs no process of its own."""
    done = CliRunner().invoke(main, list(map(str, arguments)))
    assert done.exit_code == 0, done.output
    return done.stdout


def test_a_reader_that_has_had_enough_ends_a_run_quietly_and_the_next_goes_on_in_the_same_store(bench: Any) -> None:
    for options in (["--json"], []):
        process = bench.start("run", bench.config(pace=10.0), *options)
        _until_told(process, "" if options else "tracking")
        assert process.stdout is not None
        process.stdout.readline()
        process.stdout.close()
        assert process.wait(timeout=20) == 0
        assert process.stderr is not None
        assert len(process.stderr.read().splitlines()) == 2  # what it said at its begin
        _is_whole(_stored(bench.folder / "state" / "bench.db"))
    with Reader.open(bench.folder / "state" / "bench.db") as reader:
        assert [run.end is not None for run in reader.runs()] == [True, True]


# ---------------------------------------------------------------------------------------------- the same again


def test_a_replay_of_the_recording_that_a_run_read_equals_it_record_by_record(
    bench: Any, objects: Objects, monkeypatch: pytest.MonkeyPatch
) -> None:
    config = bench.config()
    monkeypatch.chdir(bench.folder)
    _done("simulate", "tape.wav", "--config", config, "--seconds", "4.3")
    text = (bench.folder / config).read_text()
    begin, end = text.index("[[source]]"), text.index("[[channel]]")
    source = f'[[source]]\nname = "tape"\nkind = "recording"\npath = "{bench.folder}/tape.wav"\n'
    (bench.folder / "tape.toml").write_text(text[:begin] + source + text[end:])
    began = time.monotonic()
    live = bench.run("run", "tape.toml", "--json")
    assert time.monotonic() - began > 4.3  # at real pace
    assert live.returncode == 0, live.stderr
    records = objects(live.stdout)
    replayed = objects(_done("replay", "tape.toml", bench.folder / "tape.wav", "--json"))
    _is_whole(records)
    assert len([one for one in records if one["kind"] == "measurement"]) == 10  # (4.3 - 2) / 0.25, and one
    assert records[-1].pop("reason") == "the source ended"
    assert replayed[-1].pop("reason") == "the recordings ended"
    assert [{**one, "run": None} for one in records] == [{**one, "run": None} for one in replayed]


def test_a_recording_of_what_a_run_was_fed_replays_to_the_same_records(
    bench: Any, objects: Objects, monkeypatch: pytest.MonkeyPatch
) -> None:
    config = bench.config(pace=0.0, seconds=12.0)
    monkeypatch.chdir(bench.folder)
    live = bench.run("run", config, "--json")
    assert live.returncode == 0, live.stderr
    records = objects(live.stdout)
    _done("simulate", "fed.wav", "--config", config)
    replayed = objects(_done("replay", config, "fed.wav", "--start", records[0]["time"], "--json"))
    assert _figures(replayed[:-1]) == _figures(records[:-1])
    assert _figures(replayed[-1:], "reason") == _figures(records[-1:], "reason")
    assert {one["kind"] for one in records} == {"run", "measurement", "track", "alert"}
    assert {one["origin"] for one in replayed} == {"replay"}


# ---------------------------------------------------------------------------------------------- one at a time


def test_a_second_run_on_the_same_port_or_database_is_refused_in_one_line(bench: Any) -> None:
    first = bench.start("run", bench.config(), "--json")
    read = _until_told(first, '"kind":"run"')
    for options, says in (
        ([], f"tcp://127.0.0.1:{bench.port} is taken by another process"),
        (["--publish", "tcp://127.0.0.1:*"], f"process {first.pid} (station 'bench') is writing to this database"),
    ):
        second = bench.run("run", "bench.toml", *options)
        assert (second.returncode, second.stdout) == (2, "")
        assert says in second.stderr
        assert len(second.stderr.splitlines()) == 1
    first.send_signal(signal.SIGINT)
    out, _ = _ended(first, read)
    assert first.returncode == 0
    _is_whole([json.loads(line) for line in out.splitlines()])
