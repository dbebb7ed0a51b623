"""Nothing that may record speech is recorded raw unless somebody's name stands for it."""

from __future__ import annotations

import pytest
from driftwatch.config import ConfigError, Configuration, loads
from driftwatch.config.cross import record_cautions

FILE = """
schema = 1
[[source]]
name = "card"
kind = "soundcard"
{source}
[[channel]]
name = "mic"
input = {input}
quantity = "{quantity}"
[[mode]]
name = "m"
channel = "mic"
search_hz = [820, 980]
[record]
{record}
"""


def loaded(record: str, quantity: str = "pressure", source: str = "", number: int = 1) -> Configuration:
    return loads(FILE.format(source=source, input=number, quantity=quantity, record=record))


@pytest.mark.parametrize("more", ["", 'pressure_allowed_by = "  "'])
def test_recording_pressure_without_a_name_is_refused_with_the_remedy(more: str) -> None:
    with pytest.raises(ConfigError) as caught:
        loaded(f"keep_hours = 0.5\n{more}")
    (problem,) = caught.value.problems
    assert problem.key == "record . pressure_allowed_by"
    assert problem.came == 'nothing, with keep_hours = 0.5 and the pressure of channel "mic"'
    for words in ("may record speech", "consent", "local law", "name who allowed it", "keep_hours = 0"):
        assert words in problem.remedy


@pytest.mark.parametrize(
    ("record", "quantity"),
    [
        ("", "pressure"),
        ("keep_hours = 0", "pressure"),
        ("keep_hours = 2", "acceleration"),
        ('keep_hours = 2\npressure_allowed_by = "shift lead"', "pressure"),
    ],
)
def test_what_records_no_pressure_or_is_allowed_is_accepted(record: str, quantity: str) -> None:
    assert loaded(record, quantity).record.keep_hours in (0.0, 2.0)


def test_an_unusable_number_of_hours_is_one_problem_and_no_second_one() -> None:
    for hours in ("nan", "-1", '"two"', "true"):
        with pytest.raises(ConfigError) as caught:
            loaded(f"keep_hours = {hours}")
        assert [problem.key for problem in caught.value.problems] == ["record . keep_hours"]


def test_nothing_is_cautioned_where_nothing_is_recorded_or_it_is_no_microphone() -> None:
    assert record_cautions(loaded("")) == []
    assert record_cautions(loaded("keep_hours = 2", "acceleration", "inputs = 1")) == []


def test_an_allowed_microphone_is_cautioned_with_who_allowed_it() -> None:
    (caution,) = record_cautions(loaded('keep_hours = 2\npressure_allowed_by = "shift lead"', "pressure", "inputs = 1"))
    for words in ('2 h of "mic"', "as shift lead allowed", "may record speech", "consent", "local law"):
        assert words in caution


def test_inputs_that_no_channel_names_are_cautioned_for_they_are_recorded_too() -> None:
    (caution,) = record_cautions(loaded("keep_hours = 2", "force", "inputs = 4", 2))
    assert "names too: 1, 3, 4." in caution
    (caution,) = record_cautions(loaded("keep_hours = 2", "force", "", 2))  # as many are opened as the channels need
    assert "names too: 1." in caution
    (caution,) = record_cautions(loaded("keep_hours = 2", "force", "", 1))  # and two at least
    assert "names too: 2." in caution
