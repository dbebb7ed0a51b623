"""Endpoints beyond this computer are for those who have a key."""

from __future__ import annotations

import pytest
from driftwatch.config import is_loopback, loads, unguarded

TEXT = """
schema = 1
[[channel]]
name = "drive end"
[[mode]]
name = "rocking"
channel = "drive end"
search_hz = [340.0, 460.0]
window_s = 1.0
[bus]
publish = "{publish}"
control = "{control}"
"""
HERE, CONTROL = "tcp://127.0.0.1:5571", "tcp://127.0.0.1:5572"
BEYOND = ["tcp://0.0.0.0:5573", "tcp://*:5573", "tcp://192.168.1.5:5573", "tcp://plant.example:5573", "tcp://[::]:5573"]


@pytest.mark.parametrize("endpoint", BEYOND)
def test_an_endpoint_beyond_loopback_is_a_problem_until_a_key_is_granted(endpoint: str) -> None:
    for key, text in (
        ("publish", TEXT.format(publish=endpoint, control=CONTROL)),
        ("control", TEXT.format(publish=HERE, control=endpoint)),
    ):
        (problem,) = unguarded(loads(text), granted=False)
        assert problem.key == f"bus . {key}"
        assert endpoint in problem.came
        assert "an endpoint on this computer" in problem.expected
        assert "driftwatch keys grant NAME" in problem.remedy
        assert unguarded(loads(text), granted=True) == []


def test_both_endpoints_are_told_at_once() -> None:
    text = TEXT.format(publish="tcp://0.0.0.0:5571", control="tcp://0.0.0.0:5572")
    assert [problem.key for problem in unguarded(loads(text), granted=False)] == ["bus . publish", "bus . control"]


@pytest.mark.parametrize("host", ["127.0.0.1", "127.8.8.8", "localhost", "LocalHost", "[::1]"])
def test_loopback_needs_no_key(host: str) -> None:
    assert is_loopback(f"tcp://{host}:5571")
    text = TEXT.format(publish=f"tcp://{host}:5571", control=f"tcp://{host}:5572")
    assert unguarded(loads(text), granted=False) == []


@pytest.mark.parametrize("endpoint", BEYOND)
def test_what_others_may_reach_is_no_loopback(endpoint: str) -> None:
    assert not is_loopback(endpoint)
