"""Whatever stands in a file, reading it ends in a configuration or in its problems, never in another exception."""

from __future__ import annotations

import datetime as dt
from typing import Any

from driftwatch.config import ConfigError, Configuration, from_document, loads, unserved
from hypothesis import example, given, settings
from hypothesis import strategies as st

KEYS = """
schema station source channel regime mode alert store bus name timezone shifts kind device rate_hz path pace
inputs seed seconds noise resonator tone input frequency_hz q level quantity impact_every_s impact_first_s
impact_peak unit scale role sensor usable_hz calibrated when covariate from to settle_s judge reference
search_hz methods window_s step_s regimes band limits low high confidence on_delay_s off_delay_s deadband
priority condition url keep_days publish control xyzzy
""".split()  # noqa: SIM905 a list of words reads better so
WORDS = """
simulated recording soundcard feed a b acceleration frequency ambient driven absolute response reference UTC 06:00
{came} sqlite:///x.db tcp://127.0.0.1:1 tcp://[::1]:1 no_data medium %s
""".split()  # noqa: SIM905 the same

scalars = st.one_of(
    st.sampled_from(WORDS),
    st.text(max_size=5),
    st.sampled_from(["\0", "a\nb"]),
    st.booleans(),
    st.integers(),
    st.sampled_from([0, 1, 2, -1, 10**400, -(10**4200)]),
    st.floats(),
    st.dates(),
    st.times(),
    st.datetimes(timezones=st.sampled_from([None, dt.UTC])),
)
values = st.recursive(
    scalars,
    lambda inner: st.one_of(
        st.lists(inner, max_size=3), st.dictionaries(st.sampled_from(KEYS) | st.text(max_size=3), inner, max_size=6)
    ),
    max_leaves=30,
)
tables = st.dictionaries(st.sampled_from(KEYS), values, max_size=8)

GOOD_CHANNEL = {"name": "a"}
GOOD_MODE = {"name": "m", "channel": "a", "search_hz": [80.0, 120.0]}
GOOD_SOURCE = {"name": "s", "kind": "simulated", "rate_hz": 1000}
GOOD_BAND = {"name": "w", "low": 90.0}


def spoiled(good: dict[str, Any]) -> st.SearchStrategy[dict[str, Any]]:
    """Tables that are nearly good: most reach the checks behind the types."""
    return tables.map(lambda more: {**good, **more}) | st.just(good)


documents = st.fixed_dictionaries(
    {"schema": st.just(1) | values},
    optional={
        "station": spoiled({}),
        "source": st.lists(spoiled(GOOD_SOURCE), max_size=2) | values,
        "channel": st.lists(spoiled(GOOD_CHANNEL), max_size=2) | values,
        "regime": st.lists(spoiled({"name": "r", "when": {"level": "a", "from": 1.0}}), max_size=2) | values,
        "mode": st.lists(
            st.tuples(spoiled(GOOD_MODE), st.lists(spoiled(GOOD_BAND), max_size=2)).map(
                lambda pair: {"band": pair[1], **pair[0]}
            ),
            max_size=2,
        )
        | values,
        "alert": st.lists(spoiled({"name": "n", "condition": "no_data"}), max_size=2) | values,
        "store": spoiled({}) | values,
        "bus": spoiled({}) | values,
        "xyzzy": values,
    },
)


def loaded(document: dict[str, Any]) -> Configuration | None:
    try:
        return from_document(document)
    except ConfigError as error:
        assert error.problems
        assert all(part for problem in error.problems for part in (problem.came, problem.expected, problem.remedy))
        assert not any("\n" in str(problem) for problem in error.problems)
        return None


@settings(max_examples=400, deadline=None)
@given(documents | tables)
@example({"schema": 1, "source": [{"kind": ["simulated"]}], "mode": {"band": 1}})
@example({"schema": 1, "source": {"kind": "simulated", "resonator": [{"q": 10**400}]}})
@example({"schema": 1, "mode": [{"name": "m", "search_hz": [1e-320, 2e-320]}]})
@example({"schema": 1, "mode": [{"name": "m", "search_hz": [1, 1.0000000000000002]}]})
@example({"schema": 1, "channel": [{"quantity": 3, "scale": 2.0}]})
@example({"schema": 1, "channel": [{"name": "\n", "input": 0}]})
def test_any_document_loads_or_says_what_is_wrong(document: dict[str, Any]) -> None:
    config = loaded(document)
    if config is not None:
        again = Configuration.model_validate(config.model_dump(mode="json", by_alias=True))
        assert again == config
        assert all(problem.remedy for problem in unserved(config))


@settings(max_examples=200, deadline=None)
@given(st.text())
@example("schema = 1\nx = " + "[" * 5000)
@example("x = " + "9" * 5000)
@example("'''")
@example("schema = 0x" + "f" * 9000)
@example("schema = 1\nstation = 0x" + "f" * 9000)
def test_any_text_loads_or_says_what_is_wrong(text: str) -> None:
    try:
        loads(text)
    except ConfigError as error:
        assert error.problems


@settings(max_examples=200, deadline=None)
@given(
    low=st.floats(1.0, 400.0),
    width=st.floats(0.5, 90.0),
    window_s=st.floats(40.0, 4000.0),
    share=st.floats(0.011, 1.0),
    scale=st.floats(1e-6, 1e6),
    confidence=st.floats(0.501, 0.999),
    name=st.text(alphabet="abcXYZ0189.-", min_size=1, max_size=64),
)
def test_a_good_document_loads_and_keeps_its_values(
    low: float, width: float, window_s: float, share: float, scale: float, confidence: float, name: str
) -> None:
    band = {"name": name, "low": low, "high": low + width / 2, "deadband": width / 8, "confidence": confidence}
    mode = {"name": name, "channel": name, "search_hz": [low, low + width], "window_s": window_s}
    document = {
        "schema": 1,
        "source": [{**GOOD_SOURCE, "name": name}],
        "channel": [{"name": name, "scale": scale}],
        "mode": [{**mode, "step_s": window_s * share, "band": [band]}],
    }
    config = from_document(document)
    assert config.channel[0].scale == scale
    assert config.channel[0].source == name
    assert tuple(config.mode[0].search_hz) == (low, low + width)
    assert (config.mode[0].window_s, config.mode[0].step_s) == (window_s, window_s * share)
    assert config.mode[0].band[0].confidence == confidence
