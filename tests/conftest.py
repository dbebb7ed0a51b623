"""What tests of several rooms share: records of every kind, with any values that they may hold."""

from __future__ import annotations

import signal
from collections.abc import Callable
from enum import StrEnum
from typing import Any

import pytest
from driftwatch.records import (
    KINDS,
    NS,
    Alert,
    AlertState,
    Condition,
    Envelope,
    FieldInfo,
    Measurement,
    Method,
    Origin,
    Phase,
    Priority,
    Run,
    TimeQuality,
    fields_of,
)
from hypothesis import HealthCheck, settings
from hypothesis import strategies as st

pytest_plugins = ["soundrig.fixtures"]

# Tests run side by side, some at the lowest priority: how long an example takes says nothing.
settings.register_profile("busy", deadline=None, suppress_health_check=[HealthCheck.too_slow])
settings.load_profile("busy")

# A shell starts what runs in its background with interrupts ignored, and a program started by a test inherits that.
for _number in (signal.SIGINT, signal.SIGHUP, signal.SIGQUIT):
    if signal.getsignal(_number) is signal.SIG_IGN:
        signal.signal(_number, signal.default_int_handler if _number is signal.SIGINT else signal.SIG_DFL)

_TEXT = st.text(st.characters(exclude_categories=["Cs"]), max_size=20)
_INTEGERS = st.integers(-(2**63), 2**63 - 1)
_TIMES = st.integers(-(2**62), 2**62)  # the years 1823 to 2116
_SIMPLE: dict[type, st.SearchStrategy[Any]] = {
    str: _TEXT,
    int: _INTEGERS,
    bool: st.booleans(),
    float: st.floats(allow_nan=False, allow_infinity=False),
}


def _values(field: FieldInfo) -> st.SearchStrategy[Any]:
    if field.is_time:
        found: st.SearchStrategy[Any] = _TIMES
    elif field.type is tuple:
        assert field.item is not None
        found = st.lists(_SIMPLE[field.item], max_size=3).map(tuple)
    elif issubclass(field.type, StrEnum):
        found = st.sampled_from(field.type)
    else:
        found = _SIMPLE[field.type]
    return st.none() | found if field.optional else found


def _envelopes(cls: Any) -> st.SearchStrategy[Envelope]:
    body = st.builds(cls, **{field.name: _values(field) for field in fields_of(cls)})
    header = {field.name: _values(field) for field in fields_of(Envelope)}
    return st.builds(Envelope, body=body, **header)


ANY_ENVELOPE = st.one_of([_envelopes(cls) for cls in KINDS.values()])


@pytest.fixture(scope="session")
def any_envelope() -> st.SearchStrategy[Envelope]:
    """Return a strategy for envelopes of every kind, with any finite values."""
    return ANY_ENVELOPE


RUN = "5f0e8f0e-1111-4222-8333-123456789abc"
START_NS = 1_767_225_600 * NS  # 2026-01-01T00:00:00Z


def _envelope(sequence: int, body: Callable[[dict[str, Any]], Any], changes: dict[str, Any]) -> Envelope:
    header = {
        "station": "line 3",
        "run": RUN,
        "origin": Origin.REPLAY,
        "previous": sequence - 1 or None,
        "time_ns": START_NS + sequence * NS,
        "time_quality": TimeQuality.FILE,
    }
    header.update({name: changes.pop(name) for name in list(changes) if name in header})
    return Envelope(sequence=sequence, body=body(changes), **header)


def _measurement(sequence: int, **changes: Any) -> Envelope:
    values: dict[str, Any] = {
        "channel": "drive end",
        "mode": "rocking",
        "method": Method.AMBIENT,
        "regime": None,
        "window_s": 4.0,
        "first_sample": 48_000 * sequence,
        "samples": 192_000,
        "frequency_hz": 900.1234 + sequence / 997,
        "frequency_std_hz": 0.1234,
        "q": 40.5,
        "q_std": 1.5,
        "q_low": 37.7,
        "q_high": 43.5,
        "frequency_q_correlation": 0.01,
        "level": 0.125,
        "level_unit": "m/s2",
        "snr_db": 20.5,
        "fit_p": 0.5,
        "usable": True,
        "reasons": (),
    }
    return _envelope(sequence, lambda changed: Measurement(**(values | changed)), changes)


def _alert(sequence: int, **changes: Any) -> Envelope:
    values: dict[str, Any] = {field.name: None for field in fields_of(Alert)}
    values |= {
        "alert": "drive end/rocking/warning",
        "occurrence": "0c9e8f0e-1111-4222-8333-123456789abc",
        "condition": Condition.BAND,
        "channel": "drive end",
        "mode": "rocking",
        "determinate": True,
        "since_ns": START_NS,
        "state": AlertState.UNACKNOWLEDGED,
        "previous_state": AlertState.NORMAL,
        "priority": Priority.MEDIUM,
        "because": (1,),
        "evidence": (),
    }
    return _envelope(sequence, lambda changed: Alert(**(values | changed)), changes)


def _run_record(sequence: int, **changes: Any) -> Envelope:
    values: dict[str, Any] = {
        "phase": Phase.BEGIN,
        "config_sha256": "0" * 64,
        "version": "0.1.0",
        "sources": ("a.wav",),
        "assumed": (),
        "samples": 0,
        "reason": None,
    }
    return _envelope(sequence, lambda changed: Run(**(values | changed)), changes)


@pytest.fixture(scope="session")
def measurement() -> Callable[..., Envelope]:
    """Return a maker of plausible measurements: its sequence, then any field of header or body to change."""
    return _measurement


@pytest.fixture(scope="session")
def alert() -> Callable[..., Envelope]:
    """Return a maker of alert records, like `measurement`."""
    return _alert


@pytest.fixture(scope="session")
def run_record() -> Callable[..., Envelope]:
    """Return a maker of the records of a run's begin and end, like `measurement`."""
    return _run_record
