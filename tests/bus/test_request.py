"""What may be asked of a daemon, and that everything else is refused in words."""

from __future__ import annotations

import json
from typing import Any

import pytest
from driftwatch.bus.keys import Role
from driftwatch.bus.request import FIELDS, LARGEST_REQUEST, LOOKING, Request, RequestError, may, parse_request
from driftwatch.records import Action
from hypothesis import given
from hypothesis import strategies as st

GOOD: dict[str, dict[str, Any]] = {
    "status": {},
    "since": {"run": "5f0e8f0e-1111-4222-8333-123456789abc", "sequence": 7},
    "acknowledge": {"target": "drive end/rocking/low", "reason": "seen"},
    "note": {"target": "handover", "reason": "belt tensioned\nat noon"},
    "covariate": {"target": "oil", "value": 3.5, "unit": "K"},
    "reload": {"reason": "new bands"},
    "stop": {},
}


def raw(**fields: Any) -> bytes:
    return json.dumps({"request": "r1", **fields}).encode()


@pytest.mark.parametrize("action", FIELDS)
def test_every_action_is_understood_with_its_fields(action: str) -> None:
    expected = Request("r1", action, "Ann", **GOOD[action])
    assert parse_request(raw(action=action, by="Ann", **GOOD[action])) == expected
    assert parse_request(raw(**dict.fromkeys(("by", "x")), action=action, **GOOD[action])).by is None


def test_what_changes_something_is_what_the_vocabulary_names() -> None:
    assert set(FIELDS) - LOOKING == set(Action)


@pytest.mark.parametrize("action", FIELDS)
def test_a_key_to_look_may_do_nothing_that_changes_anything(action: str) -> None:
    assert may(Role.OPERATE, action)
    assert may(Role.LOOK, action) is (action in ("status", "since"))


def test_a_value_may_be_known_to_be_missing() -> None:
    assert parse_request(raw(action="covariate", target="oil", value=None, unit="")).value is None


@pytest.mark.parametrize(
    ("message", "says"),
    [
        (b"", "expected one JSON object"),
        (b"\xff\xfe", "expected one JSON object in UTF-8"),
        (b"[]", "expected one JSON object"),
        (b"[" * LARGEST_REQUEST, "expected one JSON object"),
        (b'{"a":' * 3000, "expected one JSON object"),
        (b" " * (LARGEST_REQUEST + 1), f"expected at most {LARGEST_REQUEST}"),
        (b'{"request": "r1", "request": "r2", "action": "stop"}', "a field came twice"),
        (b'{"request": "r1", "action": "covariate", "target": "x", "unit": "K", "value": NaN}', "NaN is no JSON"),
        (b'{"request": "r1", "action": "covariate", "target": "x", "unit": "K", "value": 1e999}', "a finite number"),
        (b'{"request": "r1", "action": "since", "sequence": 1' + b"0" * 5000 + b"}", "expected"),
        (b"{}", "request: got nothing; expected an id of 1 to 64"),
        (b'{"request": 5}', "request: got 5; expected an id"),
        (b'{"request": ""}', "request: got ''; expected an id"),
        (b'{"request": "a\\nb"}', "expected an id of 1 to 64 printable"),
        (b'{"request": "\\ud800"}', "expected an id of 1 to 64 printable"),
        (json.dumps({"request": "x" * 65}).encode(), "expected an id of 1 to 64"),
        (raw(), "action: got nothing; expected one of status, since"),
        (raw(action=["stop"]), "action: got a list; expected one of"),
        (raw(action="dance"), "action: got 'dance'; expected one of"),
        (raw(action="stop", when="now"), "a field: got 'when'; expected only request, action, by, reason with stop"),
        (raw(action="note", reason="x", value=1.0), "value: got 'value'; expected only"),
        (raw(action="acknowledge"), "target: got nothing; expected the name of an alert"),
        (raw(action="acknowledge", target="x" * 201), "target: got 'xxx"),
        (raw(action="note"), "reason: got nothing; expected the text"),
        (raw(action="note", reason=" \n"), "reason: got"),
        (raw(action="note", reason="x" * 2001), "reason: got"),
        (raw(action="note", reason="\x1b[2J"), "reason: got"),
        (raw(action="note", reason="x", target="me"), "target: got 'me'; expected handover"),
        (raw(action="covariate", target="a/b", unit="K"), "target: got 'a/b'; expected a name"),
        (raw(action="covariate", target="oil", value=1.0), "unit: got nothing"),
        (raw(action="covariate", target="oil", value=True, unit="K"), "value: got True; expected a finite number"),
        (raw(action="covariate", target="oil", value="1", unit="K"), "value: got '1'"),
        (raw(action="covariate", target="oil", value=10**400, unit="K"), "value: got 1000"),
        (raw(action="covariate", target="oil", value=1.0, unit="K" * 33), "unit: got"),
        (raw(action="stop", by="x" * 65), "by: got"),
        (raw(action="stop", by="\u202e"), "by: got"),
        (raw(action="since", run="last"), "run: got 'last'; expected the UUID"),
        (raw(action="since", sequence=-1), "sequence: got -1"),
        (raw(action="since", sequence=1.5), "sequence: got 1.5"),
    ],
    ids=lambda value: repr(value)[:40],
)
def test_what_is_no_request_is_refused_with_what_came_and_what_was_expected(message: bytes, says: str) -> None:
    with pytest.raises(RequestError) as refused:
        parse_request(message)
    assert says in str(refused.value)
    assert len(str(refused.value)) < 600
    assert str(refused.value).isprintable()


@pytest.mark.parametrize("field", ["request", "action", "target", "value", "run", "x"])
def test_nesting_of_any_depth_is_refused_as_such(field: str) -> None:
    """Also where it is just not too deep to be read, and would be to be shown."""
    for depth in range(1, LARGEST_REQUEST // 2 - 100, 37):
        message = b'{"request": "r", "action": "covariate", "%s": %s%s}' % (field.encode(), b"[" * depth, b"]" * depth)
        with pytest.raises(RequestError):
            parse_request(message)


def test_a_refusal_knows_the_id_where_that_could_be_read() -> None:
    with pytest.raises(RequestError) as refused:
        parse_request(raw(action="dance"))
    assert refused.value.request == "r1"


_JSON = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(), inner, max_size=3),
    max_leaves=5,
)
_NAMES = st.sampled_from(["request", "action", "by", "target", "reason", "value", "unit", "run", "sequence", "x"])
_ALMOST = st.dictionaries(_NAMES, st.sampled_from([*FIELDS, "handover", "x"]) | _JSON)


@given(st.binary(max_size=200) | _JSON.map(json.dumps).map(str.encode) | _ALMOST.map(json.dumps).map(str.encode))
def test_whatever_comes_is_a_request_or_refused(message: bytes) -> None:
    try:
        request = parse_request(message)
    except RequestError as error:
        assert "expected" in str(error)
    else:
        assert request.action in FIELDS
        assert 1 <= len(request.request) <= 64
