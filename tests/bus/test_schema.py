"""The schema that is printed fits what is sent, and nothing else."""

from __future__ import annotations

import copy
import json
from typing import Any

import pytest
from driftwatch.bus.schema import PROMISE, schema
from driftwatch.bus.wire import as_repeated, encode_heartbeat, encode_json
from driftwatch.records import KINDS, Envelope, Heartbeat, Origin, Priority, TimeQuality
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from jsonschema import Draft202012Validator

SCHEMA = schema()
VALID = Draft202012Validator(SCHEMA)
BEAT = Heartbeat("line 3", "run", Origin.LIVE, 12, TimeQuality.FREE, 1.5, None, 0.25, Priority.HIGH, 7)


def _closed() -> Draft202012Validator:
    """Return a stricter schema, which allows no member that is not named."""
    closed = copy.deepcopy(SCHEMA)
    for definition in closed["$defs"].values():
        definition["additionalProperties"] = False
    return Draft202012Validator(closed)


CLOSED = _closed()


def test_the_schema_is_one_of_2020_12_with_a_definition_for_each_kind() -> None:
    Draft202012Validator.check_schema(SCHEMA)
    assert set(SCHEMA["$defs"]) == {*KINDS, "heartbeat"}
    assert json.loads(json.dumps(SCHEMA, allow_nan=False)) == SCHEMA


@given(data=st.data())
@settings(deadline=None, suppress_health_check=[HealthCheck.too_slow], max_examples=200)
def test_every_record_fits_and_names_no_member_that_is_not_described(
    any_envelope: st.SearchStrategy[Envelope], data: Any
) -> None:
    line = encode_json(data.draw(any_envelope))
    for one in (line, as_repeated(line)):
        CLOSED.validate(json.loads(one))


def test_a_heartbeat_fits() -> None:
    CLOSED.validate(json.loads(encode_heartbeat(BEAT)))


def test_a_figure_that_is_not_finite_fits(measurement: Any) -> None:
    line = encode_json(measurement(1, window_s=float("nan"), q=float("inf")))
    assert b'"window_s":null' in line
    VALID.validate(json.loads(line))


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("kind", "thing"),
        ("schema", 2),
        ("sequence", "1"),
        ("time", "2026-01-01 00:00:00"),
        ("time_quality", "good"),
        ("method", "guess"),
        ("usable", None),
        ("reasons", "no_mode"),
        ("frequency_hz", "900"),
        ("repeated", False),
    ],
)
def test_what_would_break_the_promise_does_not_fit(measurement: Any, name: str, value: Any) -> None:
    message = json.loads(encode_json(measurement(1)))
    VALID.validate(message)
    assert not VALID.is_valid(message | {name: value})


def test_no_member_may_be_left_out_and_others_may_come(measurement: Any) -> None:
    message = json.loads(encode_json(measurement(1)))
    for name in message:
        assert not VALID.is_valid({key: value for key, value in message.items() if key != name}), name
    VALID.validate(message | {"a_member_of_tomorrow": 1})
    VALID.validate(message | {"reasons": ["a_word_of_tomorrow"]})


def test_the_promise_stands_in_the_schema_and_fields_have_their_meaning() -> None:
    assert PROMISE in SCHEMA["description"]
    assert SCHEMA["$defs"]["track"]["properties"]["drift_per_day"]["description"] == "d ln fn / dt, 1/day."
    for kind, body in KINDS.items():
        assert SCHEMA["$defs"][kind]["description"] == (body.__doc__ or "").partition("\n")[0]
    described = SCHEMA["$defs"]["measurement"]["properties"]
    assert described["window_s"]["description"] == "Length of what was used, seconds."
    assert "no_mode: no resonance stands out of the floor" in described["reasons"]["description"]
