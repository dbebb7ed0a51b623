"""What is valid and not served yet is refused before anything starts, and what a recording contradicts as well."""

from __future__ import annotations

import pytest
from driftwatch.config import Configuration, check_rate, is_simulated, loads, rate_of, unserved

BASE = """schema = 1
[[source]]
name = "s"
kind = "simulated"
rate_hz = 8192
inputs = 2
[[channel]]
name = "a"
[[channel]]
name = "t"
input = 2
role = "reference"
[[mode]]
name = "m"
channel = "a"
search_hz = [820, 980]
[[mode.band]]
name = "w"
low = 890
"""


def found(config: Configuration, *, live: bool = True) -> list[tuple[str, str]]:
    return [(problem.key, problem.came) for problem in unserved(config, live=live)]


def test_what_is_served_has_no_problem() -> None:
    named = '[[alert]]\nname = "n"\ncondition = "no_data"\n[[alert]]\nname = "l"\ncondition = "lost"\n'
    config = loads(BASE + named)
    assert unserved(config) == unserved(config, live=False) == []


UNSERVED = [
    ("search_hz", 'methods = ["ambient", "halfpower"]\nsearch_hz', 'mode[1] "m" . methods', '"halfpower"'),
    ("search_hz", 'methods = ["driven"]\nreference = "t"\nsearch_hz', 'mode[1] "m" . methods', '"driven"'),
    ("low = 890", 'limits = "percent"\nlow = -2', 'mode[1] "m" . band[1] "w" . limits', '"percent"'),
    ("low = 890", 'limits = "ppm"\nlow = -2', 'mode[1] "m" . band[1] "w" . limits', '"ppm"'),
    ("low = 890", 'limits = "sigma"\nlow = -2', 'mode[1] "m" . band[1] "w" . limits', '"sigma"'),
    (
        "[[mode]]",
        '[[regime]]\nname = "r"\nwhen = { covariate = "speed", to = 9 }\n[[mode]]',
        'regime[1] "r"',
        "a regime",
    ),
    ("[[mode]]", '[[alert]]\nname = "n"\ncondition = "rate"\n[[mode]]', 'alert[1] "n" . condition', '"rate"'),
    (
        "[[mode]]",
        '[[alert]]\nname = "n"\ncondition = "lost"\n[[alert]]\nname = "n2"\ncondition = "lost"\n[[mode]]',
        'alert[2] "n2" . condition',
        '"lost" a second time',
    ),
]


@pytest.mark.parametrize("live", [True, False])
@pytest.mark.parametrize(("old", "new", "key", "word"), UNSERVED, ids=[row[3] for row in UNSERVED])
def test_what_is_not_served_yet_is_named_live_and_in_a_replay(
    old: str, new: str, key: str, word: str, live: bool
) -> None:
    config = loads(BASE.replace(old, new, 1))
    assert found(config, live=live) == [(key, f"{word}, not served by this version")]


def of_kind(kind: str) -> Configuration:
    return loads(
        BASE.replace('kind = "simulated"\nrate_hz = 8192\ninputs = 2', f'kind = "{kind}"').replace(
            "input = 2", "input = 1"
        )
    )


def test_a_kind_of_source_that_is_not_served_is_refused_live_and_ignored_by_a_replay() -> None:
    config = of_kind("feed")
    assert found(config) == [('source[1] "s" . kind', '"feed", not served by this version')]
    assert found(config, live=False) == []


def test_a_sound_card_is_served() -> None:
    assert found(of_kind("soundcard")) == []


def test_running_live_needs_one_source_and_a_replay_none() -> None:
    source, rest = BASE.split("[[channel]]", 1)
    none = loads("schema = 1\n[[channel]]" + rest)
    assert found(none) == [("source", "none")]
    assert found(none, live=False) == []
    second = source.replace("schema = 1\n", "").replace('"s"', '"s2"')
    two = loads(BASE.replace("[[channel]]", '[[channel]]\nsource = "s"') + second)
    assert found(two) == [("source", "2, more than one not served by this version")]
    assert found(two, live=False) == []


def test_a_recordings_rate_and_inputs_are_checked_against_every_mode_and_channel() -> None:
    config = loads(BASE)
    assert check_rate(config, 8192, 2) == []
    assert check_rate(config, 1961, 2) == []
    too_slow = check_rate(config, 1960, 1)
    assert [(problem.key, problem.came, problem.expected) for problem in too_slow] == [
        ('channel[2] "t" . input', "2", "an input from 1 to 1"),
        ('mode[1] "m" . search_hz', "[820, 980] at 1960 samples a second", "frequencies under half the rate, 980 Hz"),
    ]


def test_the_rate_of_a_channel_is_its_sources_where_the_file_knows_it() -> None:
    config = loads(BASE)
    assert rate_of(config, config.channel[0]) == 8192
    tape = loads(BASE.replace('kind = "simulated"\nrate_hz = 8192\ninputs = 2', 'kind = "recording"\npath = "a.wav"'))
    assert rate_of(tape, tape.channel[0]) is None
    assert (is_simulated(config), is_simulated(tape)) == (True, False)
