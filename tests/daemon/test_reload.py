"""A reload takes over bands, alerts, keep_days and log_level, and refuses every other difference by its key."""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterator
from typing import Any

import pytest
from driftwatch.config import Configuration, loads
from driftwatch.config.keys import Loc, place
from driftwatch.config.values import Span
from driftwatch.daemon.reload import REMEDY, reload_plan
from driftwatch.records import Condition, Method, Priority
from hypothesis import given
from hypothesis import strategies as st
from pydantic import BaseModel

FULL = """schema = 1
[station]
name = "line 3"
shifts = ["06:00", "14:00"]
[[source]]
name = "card"
kind = "soundcard"
device = "measurement"
[[source]]
name = "tape"
kind = "recording"
path = "run.wav"
[[source]]
name = "made"
kind = "simulated"
rate_hz = 8000
[[source.resonator]]
frequency_hz = [[0.0, 410.0], [30.0, 400.0]]
q = 40.0
[[source.resonator]]
frequency_hz = 900.0
q = 60.0
[[source.tone]]
frequency_hz = 50.0
level = 0.1
[[source]]
name = "plant"
kind = "feed"
[[channel]]
name = "drive end"
source = "card"
scale = 98.1
[channel.sensor]
serial = "A 17"
calibrated = 2026-01-31
usable_hz = [1.0, 9000.0]
[[channel]]
name = "table"
source = "card"
input = 2
role = "reference"
[[regime]]
name = "running"
when = { covariate = "speed", from = 1470.0, to = 1490.0 }
[[mode]]
name = "rocking"
channel = "drive end"
reference = "table"
search_hz = [820.0, 980.0]
methods = ["ambient", "driven"]
regimes = ["running"]
[[mode.band]]
name = "warning"
low = 890.0
high = 915.0
[[mode.band]]
name = "damping"
quantity = "q"
low = 30.0
[[mode]]
name = "rocking"
channel = "table"
search_hz = [820.0, 980.0]
[[alert]]
name = "no data"
condition = "no_data"
[store]
keep_days = 90.0
[record]
keep_hours = 24.0
"""
CONFIG = loads(FULL)

LITERALS = {"quantity": "velocity", "role": "response", "sample_format": "int32", "log_level": "debug", "limits": "ppm"}
UNSET = {
    "rate_hz": 8001,
    "inputs": 3,
    "seconds": 60.0,
    "low": 1.5,
    "high": 1.5,
    "calibrated": dt.date(2026, 1, 1),
    "usable_hz": Span(1.0, 2.0),
}
"""Values for keys that are left out above and are no text."""

RELOADED = ("band", "alert", "log_level", "keep_days")
"""Keys that mark what a reload takes over, in this test's own words."""


def leaves(model: BaseModel, loc: Loc = ()) -> Iterator[tuple[Loc, Any]]:
    """Yield every place of a configuration that holds a value, and the value."""
    for name, field in type(model).model_fields.items():
        value, here = getattr(model, name), (*loc, field.alias or name)
        if isinstance(value, BaseModel):
            yield from leaves(value, here)
        elif isinstance(value, tuple) and value and all(isinstance(item, BaseModel) for item in value):
            for index, item in enumerate(value):
                yield from leaves(item, (*here, index))
        else:
            yield here, value


def other(key: str, value: Any) -> Any:
    """Return another value of the same type."""
    if key in LITERALS:
        return LITERALS[key] if value != LITERALS[key] else "reference" if key == "role" else "acceleration"
    if value is None:
        return UNSET.get(key, 1.5 if key.endswith("_s") else "new")
    match value:
        case Condition() | Priority():
            return next(word for word in type(value) if word is not value)
        case bool():
            return not value
        case int() | float():
            return value + 1
        case dt.date():
            return value + dt.timedelta(days=1)
        case Span():
            return Span(value.low, value.high + 1.0)
        case str():
            return value + "x"
        case tuple() if key == "methods":
            return (Method.RINGDOWN, *value)
        case tuple() if key in ("shifts", "regimes"):
            return (*value, "23:00")
        case tuple() if value and isinstance(value[0], tuple):
            return (*value[:-1], (value[-1][0], value[-1][1] + 1.0))
    return None  # an empty array of tables: nothing of a type that could be another


def changed(model: Any, loc: Loc, value: Any) -> Any:
    """Return a configuration with another value at a place."""
    step, *rest = loc
    if isinstance(step, int):
        return (*model[:step], changed(model[step], tuple(rest), value), *model[step + 1 :])
    name = next(name for name, field in type(model).model_fields.items() if step in (field.alias, name))
    inner = changed(getattr(model, name), tuple(rest), value) if rest else value
    return model.model_copy(update={name: inner})


LEAVES = [
    (loc, value, other(str(loc[-1]), value))
    for loc, value in leaves(CONFIG)
    if loc[-1] not in ("kind", "schema") and other(str(loc[-1]), value) is not None
]
REFUSED = [leaf for leaf in LEAVES if not set(RELOADED) & set(leaf[0])]
ALLOWED = [leaf for leaf in LEAVES if set(RELOADED) & set(leaf[0])]


def said(leaf: tuple[Loc, Any, Any]) -> str:
    return ".".join(map(str, leaf[0]))


def keys(lines: list[str]) -> list[str]:
    return [line.split(": got ")[0] for line in lines]


def test_the_leaves_that_are_tried_are_many() -> None:
    """The instrument of the tests below; a new key of the configuration is found by itself."""
    assert len(REFUSED) > 90
    assert len(ALLOWED) > 20
    assert {loc[0] for loc, _, _ in REFUSED} == set(Configuration.model_fields) - {"schema_", "alert"}


@pytest.mark.parametrize("leaf", REFUSED, ids=said)
def test_any_other_single_change_is_refused_in_one_line_with_its_key(leaf: tuple[Loc, Any, Any]) -> None:
    loc, _, value = leaf
    new = changed(CONFIG, loc, value)
    (line,) = reload_plan(CONFIG, new)
    assert line.startswith(f"{place(new.model_dump(mode='json', by_alias=True), loc)}: got ")
    assert line.split(": got ")[0].endswith(str(loc[-1]))
    assert ", as it runs; " in line
    assert line.endswith(REMEDY)


@pytest.mark.parametrize("leaf", ALLOWED, ids=said)
def test_any_change_of_bands_alerts_keep_days_and_log_level_is_taken_over(leaf: tuple[Loc, Any, Any]) -> None:
    loc, _, value = leaf
    new = changed(CONFIG, loc, value)
    assert new != CONFIG
    assert reload_plan(CONFIG, new) == []


@given(picked=st.sets(st.integers(0, len(LEAVES) - 1), max_size=12))
def test_of_many_changes_at_once_each_that_needs_a_restart_is_named_and_no_other(picked: set[int]) -> None:
    new = CONFIG
    for number in picked:
        new = changed(new, LEAVES[number][0], LEAVES[number][2])
    document = new.model_dump(mode="json", by_alias=True)
    expected = [place(document, LEAVES[number][0]) for number in picked if LEAVES[number] in REFUSED]
    assert sorted(keys(reload_plan(CONFIG, new))) == sorted(expected)


@given(
    bands=st.permutations(['name = "a"\nlow = 890.0\n', 'name = "b"\nhigh = 930.0\n', 'name = "c"\nlow = 850.0\n']),
    count=st.integers(0, 3),
)
def test_bands_may_come_go_and_stand_in_any_order(bands: list[str], count: int) -> None:
    begin = 'schema = 1\n[[channel]]\nname = "a"\n[[mode]]\nname = "m"\nchannel = "a"\nsearch_hz = [820, 980]\n'
    old = loads(begin + '[[mode.band]]\nname = "b"\nhigh = 930.0\n[[mode.band]]\nname = "a"\nlow = 890.0\n')
    assert reload_plan(old, loads(begin + "".join(f"[[mode.band]]\n{band}" for band in bands[:count]))) == []


# ---------------------------------------------------------------------------------------------- what a person changes


def plan(old: str, new: str, text: str = FULL) -> list[str]:
    assert old in text
    return reload_plan(loads(text), loads(text.replace(old, new, 1)))


def test_the_same_file_is_no_change_nor_is_a_default_written_out_or_a_comment() -> None:
    assert plan("schema = 1", "schema = 1") == []
    assert plan('kind = "soundcard"', 'kind = "soundcard"  # in the cabinet\nrate_hz = 48000') == []


def test_the_line_has_the_key_the_new_value_the_running_one_and_the_remedy() -> None:
    assert plan('device = "measurement"', 'device = "other"') == [
        'source[1] "card" . device: got "other"; expected "measurement", as it runs; '
        "put it back, or restart the daemon to change it"
    ]
    assert plan('device = "measurement"', "") == [
        f'source[1] "card" . device: got nothing; expected "measurement", as it runs; {REMEDY}'
    ]


ADDED = '[[mode]]\nname = "shell"\nchannel = "drive end"\nsearch_hz = [2900.0, 3400.0]\n'


def test_a_mode_more_is_one_line_and_those_behind_it_are_not_blamed() -> None:
    new = FULL.replace("[[mode]]", f"{ADDED}[[mode]]", 1)
    assert reload_plan(loads(FULL), loads(new)) == [
        f'mode[1] "shell": got a table; expected nothing, as it runs; {REMEDY}'
    ]
    assert reload_plan(loads(new), loads(FULL)) == [
        f'mode[1] "shell": got nothing; expected a table, as it runs; {REMEDY}'
    ]


def test_a_mode_found_again_elsewhere_is_compared_with_itself() -> None:
    new = FULL.replace("[[mode]]", f"{ADDED}[[mode]]", 1).replace("window_s", "")
    later = new.replace('channel = "table"\nsearch_hz = [820.0', 'channel = "table"\nsearch_hz = [800.0')
    assert keys(reload_plan(loads(FULL), loads(later))) == ['mode[1] "shell"', 'mode[3] "rocking" . search_hz']


def test_another_kind_of_source_is_one_line() -> None:
    lines = plan('kind = "soundcard"\ndevice = "measurement"', 'kind = "simulated"\nrate_hz = 48000\ninputs = 2')
    assert lines == [f'source[1] "card" . kind: got "simulated"; expected "soundcard", as it runs; {REMEDY}']


def test_another_order_of_modes_is_one_line_since_records_come_in_that_order() -> None:
    two = FULL.split("[[mode]]")[0] + ADDED + ADDED.replace("shell", "lid")
    swapped = FULL.split("[[mode]]")[0] + ADDED.replace("shell", "lid") + ADDED
    assert reload_plan(loads(two), loads(swapped)) == [
        f'mode: got the order "lid", "shell"; expected "shell", "lid", as it runs; {REMEDY}'
    ]


def test_nothing_of_a_name_breaks_the_line() -> None:
    (line,) = plan('serial = "A 17"', 'serial = "A\\n18"')
    assert "\n" not in line
