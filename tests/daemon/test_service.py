"""A real ``driftwatch run`` on a simulated source: what a reload takes over, and what it refuses."""

from __future__ import annotations

import os
import signal
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from card_files import Row, free_port
from driftwatch.records import Envelope
from driftwatch.store.writer import Writer
from live_card import Daemon

BAND = """
[[mode.band]]
name = "{name}"
low = {low}
on_delay_s = 1.0
off_delay_s = 1.0
"""

TEXT = """
schema = 1
[station]
name = "bench"
[[source]]
name = "model"
kind = "simulated"
rate_hz = 2000
seed = 5
noise = 0.002
pace = 4.0
[[source.resonator]]
frequency_hz = 380.0
q = 30.0
level = 0.05
[[channel]]
name = "drive end"
[[mode]]
name = "rocking"
channel = "drive end"
search_hz = [{search_low}, 460.0]
window_s = 1.0
step_s = 0.25
{bands}
[store]
url = "sqlite:///state/rows.db"
keep_days = {keep_days}
[bus]
publish = "tcp://127.0.0.1:{port}"
control = "tcp://127.0.0.1:{control}"
[daemon]
log_level = "{log_level}"
[record]
keep_hours = 1.0
"""
"""A mode at 380 Hz."""


class Bench(Daemon):
    """The daemon of the configuration above, which is written again and again."""

    def __init__(self, folder: Path) -> None:
        super().__init__(folder / "bench \udce9.toml", dict(os.environ))  # a byte that is none of UTF-8
        self.legible = str(folder / "bench \ufffd.toml")
        self._ports = {"port": free_port(), "control": free_port()}

    def write(
        self,
        *bands: tuple[str, float],
        keep_days: int = 90,
        log_level: str = "info",
        search_low: float = 340.0,
    ) -> None:
        """Write the configuration, with bands by name and low limit."""
        told = "".join(BAND.format(name=name, low=low) for name, low in bands)
        values = {"keep_days": keep_days, "log_level": log_level, "search_low": search_low, **self._ports}
        self.config.write_text(TEXT.format(bands=told, **values), encoding="utf-8")

    def of(self, kind: str, **wanted: Any) -> list[Row]:
        """Return what was printed of a kind, with these values."""
        rows = [row for row in list(self.rows) if row["kind"] == kind]
        return [row for row in rows if all(row[name] == value for name, value in wanted.items())]

    def reload(self) -> Row:
        """Ask for a reload and return the record of it."""
        before = len(self.of("command"))
        self.process.send_signal(signal.SIGHUP)
        self.until(lambda: len(self.of("command")) > before)
        return self.of("command")[before]

    def end(self) -> None:
        """End it in good order, and hold all that it printed to be whole."""
        assert self.stop(signal.SIGTERM) == 0
        assert [row["sequence"] for row in self.rows] == list(range(1, len(self.rows) + 1))


@pytest.fixture
def daemon(tmp_path: Path) -> Bench:
    return Bench(tmp_path)


def stands(daemon: Bench, name: str) -> Row:
    """Wait until an alert stands; return its record."""
    alert = f"drive end/rocking/{name}"
    return dict(daemon.until(lambda: daemon.of("alert", alert=alert, state="unacknowledged"))[0])


def moves(daemon: Bench, name: str) -> list[tuple[str, str]]:
    """Return the changes of state of an alert so far."""
    rows = daemon.of("alert", alert=f"drive end/rocking/{name}")
    return [(row["previous_state"], row["state"]) for row in rows if row["state"] != row["previous_state"]]


def measured_without_a_hole(daemon: Bench) -> None:
    """Hold the windows that were measured to the grid of every quarter of a second, from the first to the last."""
    firsts = [row["first_sample"] for row in daemon.of("measurement")]
    assert firsts == list(range(0, 500 * len(firsts), 500))
    assert daemon.of("health") == []


GONE = {"alert": "drive end/rocking/goes", "previous_state": "unacknowledged", "state": "normal"}


def test_reloads_take_over_what_they_may_refuse_the_rest_by_its_key_and_lose_no_sample(
    daemon: Bench, measurement: Callable[..., Envelope]
) -> None:
    """One daemon, reloaded again and again: it starts only once, which is what takes long."""
    daemon.write(("stays", 400.0), ("goes", 401.0), ("moves", 402.0))
    cannot_prune(daemon, measurement(1, time_ns=0))
    with daemon:
        limits_move_and_what_is_gone_ends(daemon)
        what_is_refused_leaves_all_as_it_was(daemon)
        it_changes_how_much_is_logged_and_how_long_rows_are_kept(daemon)
        measured = len(daemon.of("measurement"))
        daemon.until(lambda: len(daemon.of("measurement")) > measured + 8)
        daemon.end()
        assert moves(daemon, "stays") == [("normal", "unacknowledged")]
        assert moves(daemon, "goes") == [("normal", "unacknowledged"), ("unacknowledged", "normal")]
        assert len(daemon.of("run")) == 2
        assert lines_with(daemon, "What is old was not removed from the store: ")  # and the run goes on
        assert daemon.of("alert", condition="no_data") == []
        measured_without_a_hole(daemon)


def cannot_prune(daemon: Bench, old: Envelope) -> None:
    """Make a store with an old record in it that cannot be removed."""
    path = daemon.config.with_name("state") / "rows.db"
    path.parent.mkdir()
    with Writer.open(path, "bench", clock=lambda: 0) as writer, writer.transaction() as connection:
        connection.exec_driver_sql(
            "CREATE TRIGGER kept BEFORE DELETE ON measurement BEGIN SELECT RAISE(ABORT, ''); END"
        )
    with Writer.open(path, "bench", clock=lambda: 0) as writer:
        writer.write([old])


def lines_with(daemon: Bench, words: str) -> list[str]:
    """Return what was said so far on standard error and holds the words."""
    return [line for line in list(daemon.errors) if words in line]


def limits_move_and_what_is_gone_ends(daemon: Bench) -> None:
    """Three bands that are all left: one gets another limit, one goes, one stays; a fourth comes."""
    before = {name: stands(daemon, name) for name in ("stays", "goes", "moves")}
    daemon.write(("moves", 350.0), ("comes", 403.0), ("stays", 400.0))
    command = daemon.reload()
    assert (command["by"], command["action"], command["target"]) == ("signal", "reload", daemon.legible)
    assert command["outcome"].startswith("done: taken over, sha256 ")
    gone = daemon.until(lambda: daemon.of("alert", **GONE))[0]
    assert gone["occurrence"] == before["goes"]["occurrence"]
    assert gone["reason"] == "no longer watched: the configuration was reloaded"
    moved = daemon.until(
        lambda: daemon.of("alert", alert="drive end/rocking/moves", previous_state="unacknowledged")  # it returns
    )[0]
    assert moved["occurrence"] == before["moves"]["occurrence"]  # the same life, by the new limit
    assert (moved["low"], moved["state"]) == (350.0, "returned_unacknowledged")
    assert stands(daemon, "comes")["sequence"] > command["sequence"]


def what_is_refused_leaves_all_as_it_was(daemon: Bench) -> None:
    """First a key that needs a restart, beside one that does not; then a file that is none; then one that is gone."""
    daemon.write(("stays", 350.0), search_low=330.0)
    outcome = daemon.reload()["outcome"]
    assert outcome.startswith("refused: ")
    assert "search_hz" in outcome
    assert "330" in outcome
    assert "340" in outcome
    assert "low" not in outcome.replace("allow", "")
    daemon.config.write_text("schema = 1\n[station\n", encoding="utf-8")
    assert daemon.reload()["outcome"].startswith("refused: ")
    daemon.config.unlink()
    reason = daemon.reload()["outcome"]
    assert reason.startswith("refused: ")
    assert "bench \\udce9.toml: got no such file" in reason


def it_changes_how_much_is_logged_and_how_long_rows_are_kept(daemon: Bench) -> None:
    bands = (("stays", 400.0), ("comes", 403.0))
    daemon.until(lambda: len(lines_with(daemon, "The configuration was not reloaded: ")) == 3)
    daemon.write(*bands, keep_days=10, log_level="error")
    assert daemon.reload()["outcome"].startswith("done: taken over")
    daemon.write(*bands, keep_days=10, log_level="error", search_low=330.0)
    refused = daemon.reload()["outcome"]
    assert refused.startswith("refused: ")
    assert "keep_days" not in refused  # ten days is what it runs on by now
    daemon.write(*bands, keep_days=10, log_level="info")
    assert daemon.reload()["outcome"].startswith("done: taken over")
    daemon.until(lambda: len(lines_with(daemon, "The configuration was reloaded from ")) == 2)
    assert len(lines_with(daemon, "was not reloaded")) == 3  # the level "error" hid the fourth
