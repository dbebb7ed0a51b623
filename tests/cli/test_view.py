"""What a run shows a person: modes in the configuration's order, news only, nothing too wide."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import pytest
from driftwatch.cli.view import LEGEND, WIDTH, RunView, elided, folded, mode_line
from driftwatch.records import (
    NS,
    AlertState,
    Envelope,
    Fault,
    Health,
    Note,
    Origin,
    Phase,
    TimeQuality,
    Track,
    TrackStatus,
    fields_of,
)

Make = Callable[..., Envelope]
START_NS = 1_767_225_600 * NS
MODES = (("drive end", "rocking"), ("tail end", "cover"))


def _wrapped(sequence: int, body: Any) -> Envelope:
    run = "5f0e8f0e-1111-4222-8333-123456789abc"
    time_ns = START_NS + sequence * NS
    return Envelope("s", run, Origin.REPLAY, sequence, None, time_ns, TimeQuality.FILE, body)


def _track(**changes: Any) -> Track:
    values: dict[str, Any] = {field.name: None for field in fields_of(Track)}
    values |= {"channel": "drive end", "mode": "rocking", "status": TrackStatus.TRACKING}
    values |= {"frequency_hz": 900.123, "frequency_std_hz": 0.12, "q": 40.5, "q_low": 37.7, "q_high": 43.5}
    return Track(**(values | changes))


def _gap(phase: Phase, seconds: float) -> Health:
    return Health(
        channel=None,
        fault=Fault.GAP,
        phase=phase,
        incident="one",
        since_ns=START_NS,
        seconds=seconds,
        first_sample=0,
        lost_samples=0,
        value=None,
        limit=None,
        unit=None,
        detail="source card: samples are missing",
    )


def test_modes_stand_in_the_order_given_whatever_came_first(capsys: pytest.CaptureFixture[str]) -> None:
    view = RunView(MODES, every_s=5.0)
    tail = _track(channel="tail end", mode="cover")
    view.show([_wrapped(1, tail), _wrapped(2, _track())])
    legend, *lines = capsys.readouterr().out.splitlines()
    assert legend == LEGEND
    assert [line[10:29].rstrip() for line in lines] == ["drive end / rocking", "tail end / cover"]
    assert lines[0] == "00:00:02  drive end / rocking        900.12 ± 0.12 Hz  Q 40.5 (37.7 to 43.5)     tracking"
    view.show([_wrapped(6, _track())])
    assert capsys.readouterr().out == ""  # 4 s after
    view.show([_wrapped(7, _track())])
    assert len(capsys.readouterr().out.splitlines()) == 2


def test_a_mode_of_which_nothing_is_known_says_why() -> None:
    unknown = {"frequency_hz": None, "frequency_std_hz": None, "q": None}
    assert mode_line("a / b", None) == "a / b  no reading yet: no full window, no decay"
    held = _track(status=TrackStatus.HELD, reason="not_finite", **unknown)
    assert mode_line("a / b", held) == "a / b  held (not finite)"


def test_that_an_alert_can_be_told_for_a_first_time_is_no_news(alert: Make, capsys: pytest.CaptureFixture[str]) -> None:
    view = RunView(MODES, None)
    same = {"state": AlertState.NORMAL, "previous_state": AlertState.NORMAL}
    view.show([alert(1, determinate=True, reason="can tell", **same)])
    assert capsys.readouterr().out == f"{LEGEND}\n"
    view.show([alert(2, determinate=False, reason="held, unexcited", **same)])
    view.show([alert(3, determinate=True, reason="can tell", **same)])
    assert capsys.readouterr().out.splitlines() == [
        "00:00:02  CANNOT TELL  drive end/rocking/warning: held, unexcited",
        "00:00:03  drive end/rocking/warning: can tell again",
    ]


def test_alerts_are_counted_as_they_come_and_go(alert: Make, capsys: pytest.CaptureFixture[str]) -> None:
    view = RunView(MODES, None)
    view.show([alert(1, reason="frequency 880 Hz below 890 Hz", alert="one"), alert(2, reason="too low", alert="two")])
    back = {"state": AlertState.RETURNED_UNACKNOWLEDGED, "previous_state": AlertState.UNACKNOWLEDGED}
    view.show([alert(3, reason="frequency 900 Hz within 890..915 Hz", alert="one", **back)])
    _, *told = capsys.readouterr().out.splitlines()
    assert told[0] == "00:00:01  ALERT medium  one: frequency 880 Hz below 890 Hz"
    assert told[2] == "00:00:03  back inside  one: frequency 900 Hz within 890..915 Hz"
    summary = view.summary()
    assert "Alerts: 2 raised, 1 came back, 1 standing." in summary
    assert summary[-1] == "  ALERT medium  two: too low"


def test_what_a_person_does_is_told_as_such_and_counts_neither_as_raised_nor_as_back(
    alert: Make, capsys: pytest.CaptureFixture[str]
) -> None:
    view = RunView(MODES, None)
    fired, seen, back = AlertState.UNACKNOWLEDGED, AlertState.ACKNOWLEDGED, AlertState.RETURNED_UNACKNOWLEDGED
    normal = AlertState.NORMAL
    words = "acknowledged by ann: belt slips"
    view.show(
        [
            alert(1, alert="one", previous_state=normal, state=fired, reason="too low"),
            alert(2, alert="one", previous_state=fired, state=seen, by="ann", reason=words),
            alert(3, alert="two", previous_state=normal, state=fired, reason="too low"),
            alert(4, alert="two", previous_state=fired, state=back, reason="inside"),
            alert(5, alert="two", previous_state=back, state=normal, by="ann", reason=words),
        ]
    )
    _, *told = capsys.readouterr().out.splitlines()
    assert told[1].endswith("  one: acknowledged by ann: belt slips")
    assert told[4].endswith("  two: acknowledged by ann: belt slips")
    assert view.summary()[-2:] == ["Alerts: 2 raised, 1 came back, 1 standing.", "  ALERT medium  one: too low"]


def test_a_note_is_a_line_with_who_and_for_whom(capsys: pytest.CaptureFixture[str]) -> None:
    view = RunView(MODES, None)
    view.show(
        [_wrapped(1, Note("ann", "belt tensioned", handover=False)), _wrapped(2, Note("ben", "hot", handover=True))]
    )
    _, *told = capsys.readouterr().out.splitlines()
    assert [line[10:] for line in told] == ["note by ann: belt tensioned", "note by ben for the next shift: hot"]


def test_a_gap_is_told_and_counted(capsys: pytest.CaptureFixture[str]) -> None:
    view = RunView(MODES, None)
    view.show([_wrapped(1, _gap(Phase.BEGIN, 0.0)), _wrapped(31, _gap(Phase.END, 30.0))])
    assert capsys.readouterr().out.splitlines()[1:] == [
        "00:00:01  FAULT  the input: gap: source card: samples are missing",
        "00:00:31  fault over  the input: gap, after 30 s",
    ]
    assert view.summary()[0].endswith(": 30.0 s from 2026-01-01T00:00:01.000Z on, 30 s of it missing.")


def test_nothing_is_wider_than_the_width_whatever_the_names(alert: Make, capsys: pytest.CaptureFixture[str]) -> None:
    long = "x" * 30 + " " + "y" * 33
    view = RunView([(long, long)], every_s=1.0)
    body = _track(channel=long, mode=long, status=TrackStatus.HELD, reason="not_converged", frequency_std_hz=1e-6)
    view.show([alert(1, alert=f"{long}/{long}/{long}", reason="frequency 880.123 Hz below 890 Hz " * 5)])
    view.show([_wrapped(2, body)])
    lines = [*capsys.readouterr().out.splitlines(), *view.summary()[0].splitlines()]
    assert lines[0] == LEGEND
    assert max(map(len, lines)) <= WIDTH
    assert all(len(line) <= WIDTH for text in view.summary() for line in text.splitlines())
    assert "…" in lines[-3]


def test_a_value_keeps_its_unit_on_its_line() -> None:
    text = "x" * (WIDTH - 6) + " 408 Hz"
    assert folded(text, "  ").splitlines() == ["x" * (WIDTH - 6), "  408 Hz"]


def test_names_that_would_be_cut_to_the_same_stay_whole() -> None:
    alike = [f"drive end / rib {number} of the long housing" for number in (10, 11)]
    assert elided([*alike, "a" * 40, "b"]) == [*alike, "a" * 16 + "…" + "a" * 17, "b"]


@pytest.mark.parametrize("fault", [Fault.GAP, Fault.OVERFLOW, Fault.SLOW_CONSUMER, Fault.DEVICE])
def test_missing_time_is_counted_whatever_its_cause(fault: Fault) -> None:
    view = RunView(MODES, None)
    view.show([_wrapped(31, replace(_gap(Phase.END, 30.0), fault=fault))])
    assert view.summary()[0].endswith(", 30 s of it missing.")
