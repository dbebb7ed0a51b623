"""Without a daemon a command is written at the end of the newest run, by whoever gives it."""

from __future__ import annotations

import sqlite3
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path

import pytest
from driftwatch.config import Configuration, loads
from driftwatch.daemon.offline import carry_out
from driftwatch.daemon.state import StateBusyError, StateLock
from driftwatch.pipeline.station import RunHeader, Station
from driftwatch.records import NS, AlertState, Command, Envelope, Origin, Tick, TimeQuality
from driftwatch.store.errors import StoreError
from driftwatch.store.queries import Reader
from driftwatch.store.writer import Writer

START_NS = 1_772_344_800 * NS
NOW_NS = START_NS + 86_400 * NS


@dataclass(frozen=True)
class Facts:
    name: str = "card"
    rate_hz: int = 4_096
    inputs: int = 1
    start_ns: int = START_NS
    first_sample: int = 0
    length: int = 0
    time_quality: TimeQuality = TimeQuality.FREE
    sources: tuple[str, ...] = ()
    assumed: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()


def configuration(folder: Path) -> Configuration:
    return loads(f"""
schema = 1
[station]
name = "press line"
[store]
url = "sqlite:///{folder}/line.db"
[[channel]]
name = "near"
[[mode]]
name = "rocking"
channel = "near"
search_hz = [560.0, 680.0]
""")


@pytest.fixture
def config(tmp_path: Path) -> Configuration:
    """Of a daemon that has ended, in whose last run an alert stands: no sample ever came."""
    found = configuration(tmp_path)
    for number in (1, 2):
        header = RunHeader("press line", f"00000000-0000-4000-8000-00000000000{number}", Origin.LIVE, TimeQuality.FREE)
        station = Station(found, header, [Facts()])
        records = station.begin()
        for second in range(1, 40):
            records += station.feed(Tick(START_NS + second * NS))
        with Writer.open(found.store.url, "press line", clock=lambda number=number: START_NS + number) as writer:
            writer.write(records + station.finish("stopped"))
    return found


def records(config: Configuration, kind: str) -> list[Envelope]:
    with Reader.open(config.store.url) as reader:
        return list(reader.records(kind))


def test_an_alert_that_stood_at_the_end_is_acknowledged(config: Configuration) -> None:
    fired = [one for one in records(config, "alert") if one.body.state is AlertState.UNACKNOWLEDGED][-1]
    done = carry_out(config, Command(0, "r1", "ann", "acknowledge", "NO data", "cable"), utc_ns=lambda: NOW_NS)
    assert done.outcome == "done; no daemon was running"
    *_, command = records(config, "command")
    *_, alert = records(config, "alert")
    assert command.body == done
    assert (command.run, command.time_ns, command.previous) == (fired.run, NOW_NS, None)
    assert (alert.run, alert.sequence, alert.previous) == (fired.run, command.sequence + 1, fired.sequence)
    assert (alert.body.state, alert.body.previous_state) == (AlertState.ACKNOWLEDGED, AlertState.UNACKNOWLEDGED)
    assert (alert.body.occurrence, alert.body.by, alert.body.because) == (
        fired.body.occurrence,
        "ann",
        (command.sequence,),
    )
    again = carry_out(config, Command(0, "r2", "ann", "acknowledge", "no data", None))
    assert again.outcome == "nothing to acknowledge: no data does not ask for it; no daemon was running"


def test_the_numbers_of_the_run_go_on_without_a_hole(config: Configuration) -> None:
    carry_out(config, Command(0, "r1", "ann", "note", "handover", "belt tensioned"))
    carry_out(config, Command(0, "r2", "plc", "covariate", "temperature", None, 21.5, "degC"))
    carry_out(config, Command(0, "r3", "plc", "covariate", "temperature", None, 22.5, "degC"))
    path = config.store.url.removeprefix("sqlite:///")
    with closing(sqlite3.connect(path)) as database:
        header = database.execute("SELECT max(id) FROM header").fetchone()[0]
        kinds = ("run", "alert", "health", "track", "command", "note", "covariate")
        found = [row[0] for kind in kinds for row in database.execute(f"SELECT sequence FROM {kind} WHERE header = ?", (header,))]  # noqa: S608, E501  # fmt: skip
        covariates = database.execute("SELECT sequence, previous, value FROM covariate ORDER BY sequence").fetchall()
    assert sorted(found) == list(range(1, len(found) + 1))
    assert covariates[1][1] == covariates[0][0]
    (note,) = records(config, "note")
    assert (note.body.by, note.body.text, note.body.handover) == ("ann", "belt tensioned", True)


def test_while_a_daemon_runs_nothing_is_written_past_it(config: Configuration, tmp_path: Path) -> None:
    with StateLock(tmp_path, "press line"), pytest.raises(StateBusyError, match="runs on this state folder"):
        carry_out(config, Command(0, "r1", "ann", "note", None, "hello"))
    assert records(config, "command") == []


def test_where_there_is_nothing_to_add_to_nothing_is_made(tmp_path: Path) -> None:
    found = configuration(tmp_path)
    with pytest.raises(StoreError, match="expected the database of a daemon that has run before"):
        carry_out(found, Command(0, "r1", "ann", "note", None, "hello"))
    assert list(tmp_path.iterdir()) == []


def test_another_stations_run_is_left_alone(config: Configuration) -> None:
    other = config.model_copy(update={"station": config.station.model_copy(update={"name": "other"})})
    with pytest.raises(StoreError, match="does not end with a live run of the station 'other'"):
        carry_out(other, Command(0, "r1", "ann", "note", None, "hello"))


def test_a_replay_that_was_written_last_is_left_alone(config: Configuration) -> None:
    """Whoever reads on from a record would miss what is added to a run before it; a replay is no place for news."""
    header = RunHeader("press line", "00000000-0000-4000-8000-000000000003", Origin.REPLAY, TimeQuality.FILE)
    with Writer.open(config.store.url, "press line") as writer:
        writer.write(Station(config, header, [Facts()]).begin())
    with pytest.raises(StoreError, match="does not end with a live run of the station 'press line'"):
        carry_out(config, Command(0, "r1", "ann", "note", None, "hello"))


def test_an_unknown_alert_and_what_needs_a_daemon_are_refused_and_written_down(config: Configuration) -> None:
    outcomes = [
        carry_out(config, Command(0, "r1", "ann", "acknowledge", "nothing", None)).outcome,
        carry_out(config, Command(0, "r2", "ann", "stop", None, None)).outcome,
    ]
    assert outcomes[0] == "refused: no alert is called 'nothing'; no daemon was running"
    assert outcomes[1] == "refused: stop needs a daemon; no daemon was running"
    assert [one.body.outcome for one in records(config, "command")] == outcomes
