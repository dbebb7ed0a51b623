"""How things stand on a terminal: worst first, whole at any size, told in words, and the terminal given back."""

from __future__ import annotations

import fcntl
import os
import pty
import re
import struct
import subprocess
import sys
import termios
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import pytest
from driftwatch.cli.board import Board, Verdict
from driftwatch.cli.live_view import chosen_view, screen_of
from driftwatch.cli.rows import drift_text
from driftwatch.cli.view import RunView
from driftwatch.records import (
    NS,
    AlertState,
    Envelope,
    Fault,
    Health,
    Heartbeat,
    Origin,
    Phase,
    Priority,
    TimeQuality,
    Track,
    TrackStatus,
    fields_of,
)

Make = Callable[..., Envelope]
START_NS = 1_767_225_600 * NS
RUN = "5f0e8f0e-1111-4222-8333-123456789abc"
NORMAL = {"state": AlertState.NORMAL, "previous_state": AlertState.NORMAL}


def wrapped(sequence: int, body: Any) -> Envelope:
    return Envelope("line 3", RUN, Origin.LIVE, sequence, None, START_NS + sequence * NS, TimeQuality.FREE, body)


def a_track(**changes: Any) -> Track:
    values: dict[str, Any] = {field.name: None for field in fields_of(Track)}
    values |= {"channel": "drive end", "mode": "rocking", "status": TrackStatus.TRACKING}
    values |= {"frequency_hz": 900.123, "frequency_std_hz": 0.12, "q": 40.5, "q_low": 37.7, "q_high": 43.5}
    values |= {"drift_per_day": 1e-4, "drift_std_per_day": 2e-5, "last_measurement_ns": START_NS}
    return Track(**(values | changes))


def a_fault(**changes: Any) -> Health:
    values: dict[str, Any] = {field.name: None for field in fields_of(Health)}
    values |= {"fault": Fault.OVERFLOW, "phase": Phase.BEGIN, "incident": "one", "since_ns": START_NS}
    return Health(**(values | {"seconds": 0.0, "lost_samples": 480} | changes))


def a_beat(**changes: Any) -> Heartbeat:
    values: dict[str, Any] = {"station": "line 3", "run": RUN, "origin": Origin.LIVE, "time_ns": START_NS + 60 * NS}
    values |= {"time_quality": TimeQuality.FREE, "uptime_s": 60.0, "sample_age_s": 0.1, "queue_fill": 0.02}
    return Heartbeat(**(values | {"worst_alert": None, "sequence": 0} | changes))


def lines_of(board: Board, width: int = 110, height: int = 1000) -> list[str]:
    return [line for entry in screen_of(board, width, height) for line in entry.lines]


@pytest.fixture
def troubled(alert: Make, run_record: Make) -> Board:
    """Return a board on which everything is that can be shown."""
    board = Board([("drive end", "rocking"), ("tail end", "cover"), ("tail end", "grate"), ("tail end", "bar")])
    board.take(
        [
            run_record(0),
            wrapped(1, a_track()),
            wrapped(2, a_track(channel="tail end", mode="cover", status=TrackStatus.LOST, reason="no_mode")),
            wrapped(3, a_track(channel="tail end", mode="grate", status=TrackStatus.HELD, reason="unexcited")),
            alert(4, alert="a/b/medium", reason="frequency 880 Hz below 890 Hz"),
            alert(5, alert="a/b/urgent", priority=Priority.URGENT, reason="too low"),
            alert(6, alert="a/b/old", since_ns=START_NS - NS, reason="older"),
            alert(7, alert="tail end/grate/crack", determinate=False, reason="cannot tell: held, unexcited", **NORMAL),
            wrapped(8, a_fault(detail="the device lost samples")),
        ]
    )
    board.beat(a_beat(sample_age_s=12.0))
    return board


def test_what_is_worst_stands_first(troubled: Board) -> None:
    told = lines_of(troubled)
    begins = [re.match(r"ALERT \w+  \S+|\S+( TELL)?", line) for line in told if not line.startswith(" ")]
    assert [begin[0] for begin in begins if begin] == [
        "ALERT",  # the verdict
        "running",  # not measuring: samples do not advance
        "ALERT urgent  a/b/urgent:",
        "ALERT medium  a/b/old:",
        "ALERT medium  a/b/medium:",
        "CANNOT TELL",
        "CANNOT TELL",
        "FAULT",
        "lost,",
        "held,",
        "no",
        "tracking",
    ]
    assert told[0] == ("ALERT  line 3: 3 alerts stand, 1 alert cannot be told, 1 fault open, 1 of 4 modes tracked")
    assert any("samples do not advance: the last came 12 s ago" in line for line in told)
    assert any("FAULT  the input: overflow: the device lost samples; since 2026-01-01T00:00:00" in one for one in told)


def test_a_row_shows_figures_with_their_uncertainties_status_and_age() -> None:
    board = Board()
    board.take([wrapped(1, a_track())])
    board.beat(a_beat())
    assert lines_of(board, 160)[-1] == (
        "tracking  drive end / rocking  900.12 ± 0.12 Hz  Q 40.5 (37.7 to 43.5)  drift 0.090 ± 0.018 Hz/d  "
        "seen 1 min 0 s ago"
    )
    assert "up 1 min 0 s; last sample 0.1 s ago; queue 2 % full; run 5f0e8f0e, live" in " ".join(lines_of(board))


@pytest.mark.parametrize(
    ("per_day", "std", "text"),
    [
        (0.001, 0.0002, "0.90 ± 0.18 Hz/d"),
        (-0.24, 0.024, "-9.00 ± 0.90 Hz/h"),
        (1.0, 100.0, "not known yet"),
        (1000.0, 100.0, "37500 ± 3750 Hz/h"),
        (None, None, "-"),
    ],
)
def test_a_drift_is_told_by_the_day_or_by_the_hour_or_not_yet(
    per_day: float | None, std: float | None, text: str
) -> None:
    assert drift_text(a_track(frequency_hz=900.0, drift_per_day=per_day, drift_std_per_day=std)) == text


@pytest.mark.parametrize("width", [40, 60, 80, 100, 160])
@pytest.mark.parametrize("height", [8, 24, 60])
def test_nothing_is_larger_than_the_terminal_and_what_is_not_shown_is_counted(
    troubled: Board, width: int, height: int
) -> None:
    """Count by hand: 4 modes and 24 more, of which as many are shown, whole, as there is room for."""
    names = [f"rib {number} of the long housing" for number in range(24)]
    troubled.take(wrapped(9, a_track(mode=name)) for name in names)
    told = lines_of(troubled, width, height)
    assert len(told) <= height
    assert max(map(len, told)) <= width
    text, _, rest = " ".join(line.strip() for line in told).partition("not shown, no room: ")
    hidden = re.search(r"(\d+) tracked modes?$", rest)
    shown = len(re.findall(r"\brib \d+|drive end / rocking", text))
    assert shown + (int(hidden[1]) if hidden else 0) == 25
    assert told[0].startswith("ALERT")


def test_names_that_differ_only_in_the_middle_stay_different_at_60_columns() -> None:
    board = Board()
    board.take(wrapped(1, a_track(mode=f"rib {number} of the long housing of it")) for number in range(12))
    told = lines_of(board, 60)
    assert len({line for line in told if "rib " in line}) == 12


def test_silence_makes_a_tracked_mode_one_that_cannot_be_told() -> None:
    board = Board([("drive end", "rocking")], {("drive end", "rocking"): 30.0})
    board.take([wrapped(1, a_track())])
    board.beat(a_beat(time_ns=START_NS + 31 * NS))
    assert board.verdict is Verdict.QUIET
    board.beat(a_beat(time_ns=START_NS + 32 * NS))
    assert board.verdict is Verdict.CANNOT_TELL
    assert lines_of(board)[-2].startswith("silent for 31 s, was tracking  drive end / rocking")


@pytest.mark.parametrize(
    ("change", "verdict"),
    [
        ([], Verdict.QUIET),
        ([a_track(mode="other", status=TrackStatus.SEARCHING)], Verdict.CANNOT_TELL),
        ([a_track(status=TrackStatus.HELD)], Verdict.CANNOT_TELL),
        ([a_fault()], Verdict.CANNOT_TELL),
        ([a_fault(), a_fault(phase=Phase.END)], Verdict.QUIET),
    ],
)
def test_a_verdict_is_quiet_only_if_everything_is_tracked_and_no_fault_is_open(
    change: list[Any], verdict: Verdict
) -> None:
    board = Board()
    board.take(wrapped(number, body) for number, body in enumerate([a_track(), *change], 1))
    board.beat(a_beat())
    assert board.verdict is verdict


def test_an_alert_stands_until_it_is_normal_or_put_aside(alert: Make) -> None:
    board = Board()
    board.take([wrapped(1, a_track())])
    for state, verdict in (
        (AlertState.UNACKNOWLEDGED, Verdict.ALERT),
        (AlertState.RETURNED_UNACKNOWLEDGED, Verdict.ALERT),
        (AlertState.SHELVED, Verdict.QUIET),
        (AlertState.ACKNOWLEDGED, Verdict.ALERT),
        (AlertState.NORMAL, Verdict.QUIET),
    ):
        board.take([alert(2, state=state, previous_state=AlertState.LATCHED_ACKNOWLEDGED)])
        assert board.verdict is verdict


def test_an_alert_that_cannot_be_told_any_more_still_says_what_was_judged(alert: Make) -> None:
    board = Board()
    standing = {"state": AlertState.UNACKNOWLEDGED, "previous_state": AlertState.UNACKNOWLEDGED}
    figures = {"quantity": "frequency", "low": 890.0, "unit": "Hz"}
    board.take([alert(1, determinate=False, reason="cannot tell: held, no_mode", **figures, **standing)])
    assert "limits 890.. Hz, cannot tell now: held, no mode; since 2026-01-01T00:00:00.000Z" in lines_of(board, 200)[2]


def test_where_there_is_no_terminal_the_view_is_lines(capsys: pytest.CaptureFixture[str]) -> None:
    view = chosen_view([("drive end", "rocking")], 5.0)
    assert type(view) is RunView
    view.status("waiting for the device")
    view.status("waiting for the device")
    view.beat(a_beat())
    view.close()
    assert capsys.readouterr() == ("", "waiting for the device\n")


# ---------------------------------------------------------------------------------------------- a real terminal

SCRIPT = """
import sys
from driftwatch.cli.live_view import LiveView, chosen_view
sys.path.insert(0, {folder!r})
import test_live_view as t
view = chosen_view([("drive end", "rocking"), ("tail end", "cover")], 5.0)
assert type(view) is LiveView
view.show([t.wrapped(1, t.a_track())])
view.show([t.wrapped(2, t.a_fault(detail="the device lost samples"))])
view.beat(t.a_beat())
sys.stderr.write("a warning of somebody else\\n")
view.status("waiting for the device")
input()
view.beat(t.a_beat(uptime_s=61.0))
view.close()
print("\\n".join(view.summary()))
"""


def _read_until(terminal: int, words: str, read: str = "") -> str:
    while words not in read:
        try:
            came = os.read(terminal, 65_536)
        except OSError:  # how Linux tells the end of a terminal
            came = b""
        assert came, read
        read += came.decode()
    return read


def test_a_terminal_shows_the_board_below_the_news_follows_its_size_and_is_given_back() -> None:
    terminal, inside = pty.openpty()
    fcntl.ioctl(inside, termios.TIOCSWINSZ, struct.pack("HHHH", 30, 100, 0, 0))
    kept = {key: value for key, value in os.environ.items() if key not in ("COLUMNS", "LINES", "NO_COLOR")}
    process = subprocess.Popen(
        [sys.executable, "-c", SCRIPT.format(folder=os.path.dirname(__file__))],  # noqa: PTH120 - text for a script
        stdin=inside,
        stdout=inside,
        stderr=inside,
        env={**kept, "TERM": "xterm-256color", "OMP_NUM_THREADS": "1"},
    )
    try:
        os.close(inside)
        read = _read_until(terminal, "waiting for the device")
        assert "\x1b[?25l" in read  # the cursor is out of the way
        assert "00:00:02  FAULT  the input: overflow: the device lost samples" in read
        assert "CANNOT TELL  line 3: no alert stands, 1 fault open, 1 of 2 modes tracked" in read
        assert "a warning of somebody else" in read
        assert "\u2500" * 100 in read
        fcntl.ioctl(terminal, termios.TIOCSWINSZ, struct.pack("HHHH", 30, 60, 0, 0))
        os.write(terminal, b"\n")
        rest = _read_until(terminal, "Alerts: 0 raised", read)[len(read) :]
        assert "\x1b[2J" in rest  # a new width: the screen is drawn anew
        assert "\u2500" * 60 in rest
        assert "\u2500" * 61 not in rest
        assert "00:00:02  FAULT" in rest  # the news is told again
        assert rest.index("\x1b[?25h") < rest.index("Alerts: 0 raised")
        assert process.wait(timeout=20) == 0
    finally:
        process.kill()
        process.wait()
        os.close(terminal)


def test_a_board_forgets_the_incident_that_ended_and_keeps_the_others() -> None:
    board = Board()
    board.take([wrapped(1, a_fault()), wrapped(2, a_fault(incident="two"))])
    board.take([wrapped(3, replace(a_fault(), phase=Phase.END))])
    assert [fault.incident for fault in board.faults] == ["two"]


GONE = """
import os, sys
sys.path.insert(0, {folder!r})
import test_live_view as t
from driftwatch.cli.live_view import LiveView
view = LiveView([("drive end", "rocking")])
view.show([t.wrapped(1, t.a_track())])
view.beat(t.a_beat())
os.close(int(sys.argv[1]))  # nobody holds the other end any more
view.beat(t.a_beat())
view.status("still here")
try:
    view.show([t.wrapped(2, t.a_fault())])
except OSError:
    os.write(2, b"told\\n")  # not by sys.stderr, for which the view stands in
    os._exit(0)
"""


def test_a_terminal_that_is_gone_stops_no_heartbeat_and_is_told_by_the_next_records() -> None:
    terminal, inside = pty.openpty()
    script = GONE.format(folder=os.path.dirname(__file__))  # noqa: PTH120 - text for a script
    process = subprocess.Popen(
        [sys.executable, "-c", script, str(terminal)],
        stdout=inside,
        stderr=subprocess.PIPE,
        pass_fds=[terminal],
        env={**os.environ, "TERM": "xterm-256color", "OMP_NUM_THREADS": "1"},
    )
    os.close(inside)
    os.close(terminal)
    try:
        assert process.communicate(timeout=30)[1].decode().endswith("told\n")
        assert process.returncode == 0
    finally:
        process.kill()
        process.wait()
