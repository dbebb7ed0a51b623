"""Everything wrong with a file is found in one pass, each with its key, what came, what was expected and the remedy."""

from __future__ import annotations

from pathlib import Path

import pytest
from driftwatch.config import ConfigError, Problem, load, loads

GOOD = {
    "": "schema = 1\n",
    "station": "[station]\n",
    "source": '[[source]]\nname = "sim"\nkind = "simulated"\nrate_hz = 8192\n',
    "resonator": "[[source.resonator]]\nfrequency_hz = 900\nq = 40\n",
    "tone": "[[source.tone]]\nfrequency_hz = 50\nlevel = 0.1\n",
    "channel": '[[channel]]\nname = "a"\n',
    "sensor": "[channel.sensor]\n",
    "regime": '[[regime]]\nname = "running"\nwhen = { covariate = "speed", from = 1.0 }\n',
    "mode": '[[mode]]\nname = "m"\nchannel = "a"\nsearch_hz = [820, 980]\n',
    "band": '[[mode.band]]\nname = "w"\nlow = 890\nhigh = 915\n',
    "alert": '[[alert]]\nname = "n"\ncondition = "no_data"\n',
    "store": "[store]\n",
    "bus": "[bus]\n",
}


def document(table: str, line: str) -> str:
    """Return a good file with one line put into a table, in place of the line with the same key."""
    key = line.split("=")[0].strip()
    texts = dict(GOOD)
    kept = [old for old in texts[table].splitlines() if old.split("=")[0].strip() != key]
    texts[table] = "\n".join([*kept, line]) + "\n"
    return "".join(texts.values())


def problems_of(text: str) -> tuple[Problem, ...]:
    with pytest.raises(ConfigError) as caught:
        loads(text)
    assert str(caught.value) == "\n".join(str(problem) for problem in caught.value.problems)
    return caught.value.problems


def test_the_good_file_of_these_tests_is_good() -> None:
    loads("".join(GOOD.values()))


M, B, S, R, C = 'mode[1] "m"', 'mode[1] "m" . band[1] "w"', 'source[1] "sim"', "resonator[1]", 'channel[1] "a"'
LIMITS = "expected low less than high"

ONE_WRONG_VALUE = [
    # table, line, key, parts of the message
    ("", "schema = 2", "schema", ["got 2", "expected 1"]),
    ("", "schema = true", "schema", ["got true", "expected 1"]),
    ("", 'schema = "1"', "schema", ['got "1"', "expected 1"]),
    ("station", 'name = ""', "station . name", ['got ""', "1 to 64 letters, digits, spaces, . or -"]),
    ("station", f'name = "{"x" * 65}"', "station . name", ["1 to 64 letters"]),
    ("station", 'name = "a_b"', "station . name", ['got "a_b"', "choose another name"]),
    ("station", 'name = "a/b"', "station . name", ['got "a/b"']),
    ("station", 'name = " a"', "station . name", ["not beginning or ending with a space"]),
    ("station", "name = 3", "station . name", ["got 3", "text in quotes", "put it in quotes"]),
    ("station", 'timezone = "Mars/Olympus"', "station . timezone", ['"Mars/Olympus"', "time zone database"]),
    ("station", 'timezone = "../etc/passwd"', "station . timezone", ["time zone database"]),
    ("station", 'timezone = ""', "station . timezone", ["text that is not empty"]),
    ("station", 'shifts = ["24:00"]', "station . shifts", ['["24:00"]', "00:00 to 23:59", "HH:MM"]),
    ("station", 'shifts = ["6:00"]', "station . shifts", ["HH:MM"]),
    ("station", 'shifts = ["14:00", "06:00"]', "station . shifts", ["rising"]),
    ("station", 'shifts = "06:00"', "station . shifts", ["an array"]),
    ("source", 'kind = "sonar"', f"{S} . kind", ['"sonar"', "soundcard, recording, simulated, feed"]),
    ("source", "kind = 3", f"{S} . kind", ["got 3", "soundcard, recording, simulated, feed"]),
    ("source", "rate_hz = 8192.5", f"{S} . rate_hz", ["got 8192.5", "a whole number"]),
    ("source", "rate_hz = -1", f"{S} . rate_hz", ["got -1", "at least 1"]),
    ("source", "inputs = 0", f"{S} . inputs", ["got 0", "at least 1"]),
    ("source", "seed = -1", f"{S} . seed", ["got -1", "at least 0"]),
    ("source", "pace = -1", f"{S} . pace", ["got -1", "at least 0"]),
    ("source", "seconds = 0", f"{S} . seconds", ["got 0", "over 0"]),
    ("source", "noise = inf", f"{S} . noise", ["got inf", "a finite number", "nan and inf"]),
    ("resonator", "q = 0.5", f"{S} . {R} . q", ["got 0.5", "over 0.5", "zeta"]),
    ("resonator", "q = []", f"{S} . {R} . q", ["got []", "corner points"]),
    ("resonator", "q = [[0, 40], [0, 30]]", f"{S} . {R} . q", ["[[0, 40], [0, 30]]", "order of their seconds"]),
    ("resonator", "q = [[-1, 40]]", f"{S} . {R} . q", ["rising seconds from 0"]),
    ("resonator", "q = [[0, 40, 1]]", f"{S} . {R} . q", ["corner points"]),
    ("resonator", "q = nan", f"{S} . {R} . q", ["got nan", "a number"]),
    ("resonator", "frequency_hz = 0", f"{S} . {R} . frequency_hz", ["values over 0"]),
    (
        "resonator",
        "frequency_hz = [[0, 900], [9, 4096]]",
        f"{S} . {R} . frequency_hz",
        ["under half the rate, 4096 Hz"],
    ),
    ("resonator", "level = -0.1", f"{S} . {R} . level", ["0 or more", "rms"]),
    ("resonator", "input = 2", f"{S} . {R} . input", ["got 2", "from 1 to 1", "raise the source's inputs"]),
    ("resonator", "impact_peak = 1", f"{S} . {R} . impact_peak", ["impact_every_s or impact_first_s"]),
    ("resonator", "impact_every_s = 0", f"{S} . {R} . impact_every_s", ["over 0"]),
    ("resonator", 'quantity = "jerk"', f"{S} . {R} . quantity", ['"jerk"', "acceleration"]),
    ("tone", "frequency_hz = 5000", f"{S} . tone[1] . frequency_hz", ["under half the rate"]),
    ("channel", "input = 0", f"{C} . input", ["at least 1"]),
    ("channel", "input = true", f"{C} . input", ["got true", "a whole number"]),
    ("channel", "input = 2", f"{C} . input", ["got 2", "an input from 1 to 1"]),
    ("channel", 'source = "card"', f"{C} . source", ['"card"', 'name of a source in this file: "sim"']),
    ("channel", 'quantity = "jerk"', f"{C} . quantity", ['"jerk"', "acceleration"]),
    ("channel", "scale = 0", f"{C} . scale", ["over 0"]),
    ("channel", "scale = -98.1", f"{C} . scale", ["got -98.1", "over 0"]),
    ("channel", 'scale = "98.1"', f"{C} . scale", ['"98.1"', "a number", "without quotes"]),
    ("channel", 'unit = ""', f"{C} . unit", ["not empty"]),
    ("channel", f'unit = "{"m" * 17}"', f"{C} . unit", ["at most 16 characters"]),
    ("channel", 'role = "witness"', f"{C} . role", ['"witness"', "'response' or 'reference'"]),
    ("sensor", "usable_hz = [9000, 1]", f"{C} . sensor . usable_hz", ["[9000, 1]", "lower one first"]),
    ("sensor", 'calibrated = "spring"', f"{C} . sensor . calibrated", ['"spring"', "a date", "2026-03-01"]),
    ("sensor", "calibrated = 06:00:00", f"{C} . sensor . calibrated", ["a date"]),
    ("regime", "when = {}", 'regime[1] "running" . when . to', ["neither limit", "from, to or both"]),
    ("regime", "when = { from = 1.0 }", 'regime[1] "running" . when', ["neither", "either covariate or level"]),
    (
        "regime",
        'when = { covariate = "speed", level = "a", from = 1.0 }',
        'regime[1] "running" . when',
        ["both", "either covariate or level"],
    ),
    (
        "regime",
        'when = { covariate = "speed", from = 2.0, to = 1.0 }',
        'regime[1] "running" . when . to',
        ["from = 2 and to = 1", "from less than to"],
    ),
    ("regime", 'when = { level = "b", from = 1 }', 'regime[1] "running" . when . level', ['"b"', "name of a channel"]),
    ("regime", "settle_s = -1", 'regime[1] "running" . settle_s', ["at least 0"]),
    ("regime", "judge = 1", 'regime[1] "running" . judge', ["got 1", "true or false"]),
    ("mode", 'channel = "b"', f"{M} . channel", ['"b"', 'name of a channel in this file: "a"']),
    ("mode", "search_hz = [980, 820]", f"{M} . search_hz", ["[980, 820]", "lower one first", "[lowest, highest]"]),
    ("mode", "search_hz = [820]", f"{M} . search_hz", ["two frequencies"]),
    ("mode", "search_hz = []", f"{M} . search_hz", ["two frequencies"]),
    ("mode", "search_hz = [0, 980]", f"{M} . search_hz", ["over 0"]),
    ("mode", "search_hz = [-820, 980]", f"{M} . search_hz", ["over 0"]),
    ("mode", "search_hz = [nan, 980]", f"{M} . search_hz", ["[nan, 980]"]),
    ("mode", "search_hz = [820, inf]", f"{M} . search_hz", ["[820, inf]"]),
    ("mode", 'search_hz = "820-980"', f"{M} . search_hz", ['"820-980"', "two frequencies"]),
    ("mode", "search_hz = [820, 4096]", f"{M} . search_hz", ["8192 samples a second", "under half the rate, 4096 Hz"]),
    ("mode", "methods = []", f"{M} . methods", ["an empty array", "at least one of ambient, ringdown"]),
    ("mode", 'methods = ["ambient", "ambient"]', f"{M} . methods", ["each of them once"]),
    ("mode", 'methods = ["magic"]', f"{M} . methods[1]", ['"magic"', "'ambient', 'ringdown'"]),
    ("mode", 'methods = ["driven"]', f"{M} . methods", ["a reference channel beside driven"]),
    ("mode", 'regimes = ["soaking"]', f"{M} . regimes", ['"soaking"', 'name of a regime in this file: "running"']),
    ("mode", "window_s = 0", f"{M} . window_s", ["over 0"]),
    ("mode", "window_s = nan", f"{M} . window_s", ["got nan", "a finite number"]),
    ("mode", "window_s = 90000", f"{M} . window_s", ["at most 86400"]),
    ("mode", "window_s = 0.05", f"{M} . window_s", ["got 0.05", "at least 0.1 s", "16 bins", "lengthen the window"]),
    ("mode", "step_s = 5", f"{M} . step_s", ["got 5", "at most window_s, 4", "never looked at"]),
    ("mode", "step_s = 0", f"{M} . step_s", ["over 0"]),
    ("mode", "step_s = 0.001", f"{M} . step_s", ["at least 0.04 s", "nothing new"]),
    ("band", "low = 915", f"{B} . high", ["low = 915 and high = 915", LIMITS]),
    ("band", "low = 916", f"{B} . high", ["low = 916 and high = 915", LIMITS]),
    ("band", "high = 880", f"{B} . high", ["low = 890 and high = 880", LIMITS]),
    ("band", "low = -1", f"{B} . low", ["got -1", "over 0", "absolute"]),
    ("band", 'quantity = "amplitude"', f"{B} . quantity", ['"amplitude"', "'frequency' or 'q'"]),
    ("band", 'limits = "per mille"', f"{B} . limits", ['"per mille"', "'absolute', 'percent', 'ppm' or 'sigma'"]),
    ("band", "confidence = 0.5", f"{B} . confidence", ["over 0.5"]),
    ("band", "confidence = 1", f"{B} . confidence", ["under 1"]),
    ("band", "on_delay_s = -1", f"{B} . on_delay_s", ["at least 0"]),
    ("band", "off_delay_s = nan", f"{B} . off_delay_s", ["finite"]),
    ("band", "deadband = -1", f"{B} . deadband", ["at least 0"]),
    ("band", "deadband = 12.5", f"{B} . deadband", ["got 12.5", "less than half the band's width, 12.5"]),
    ("band", 'priority = "top"', f"{B} . priority", ['"top"', "'low', 'medium', 'high' or 'urgent'"]),
    ("band", 'name = "Lost"', 'mode[1] "m" . band[1] "Lost" . name', ["another name", "lost mode"]),
    ("alert", 'condition = "band"', 'alert[1] "n" . condition', ['"band"', "no band", "[[mode.band]]"]),
    ("alert", 'condition = "gloom"', 'alert[1] "n" . condition', ['"gloom"', "'no_data'"]),
    ("store", 'url = "postgres://x/y"', "store . url", ['"postgres://x/y"', "sqlite:/// and the path of a file"]),
    ("store", 'url = "rows.db"', "store . url", ["sqlite:///driftwatch.db"]),
    ("store", 'url = "sqlite:///"', "store . url", ["the path of a file"]),
    ("store", 'url = "sqlite:///:memory:"', "store . url", ["the path of a file"]),
    ("store", "keep_days = 0", "store . keep_days", ["over 0"]),
    ("bus", 'publish = "127.0.0.1:5571"', "bus . publish", ["tcp://host:port"]),
    ("bus", 'publish = "tcp://127.0.0.1"', "bus . publish", ["tcp://host:port"]),
    ("bus", 'publish = "tcp://127.0.0.1:0"', "bus . publish", ["from 1 to 65535"]),
    ("bus", 'publish = "tcp://127.0.0.1:65536"', "bus . publish", ["from 1 to 65535"]),
    ("bus", 'control = "tcp://127.0.0.1:5571"', "bus . control", ["another endpoint than publish"]),
]


@pytest.mark.parametrize(
    ("table", "line", "key", "parts"), ONE_WRONG_VALUE, ids=[row[1][:40] for row in ONE_WRONG_VALUE]
)
def test_one_wrong_value_is_one_problem_that_says_where_what_and_why(
    table: str, line: str, key: str, parts: list[str]
) -> None:
    (problem,) = problems_of(document(table, line))
    assert problem.key == key
    assert problem.remedy
    text = str(problem)
    assert "\n" not in text
    assert [part for part in parts if part not in text] == []


UNKNOWN = [
    ("", "statoin = 1", "statoin", "did you mean station?"),
    ("station", 'time_zone = "UTC"', "station . time_zone", "did you mean timezone?"),
    ("source", "rate = 1", f"{S} . rate", "did you mean rate_hz?"),
    ("source", 'device = "x"', f"{S} . device", "device belongs into [[source]] of kind soundcard"),
    ("resonator", "frequency = 1", f"{S} . {R} . frequency", "did you mean frequency_hz?"),
    ("channel", "inputs = 1", f"{C} . inputs", "did you mean input?"),
    ("sensor", 'mount = "glue"', f"{C} . sensor . mount", "did you mean mounting?"),
    ("mode", "windows_s = 4", f"{M} . windows_s", "did you mean window_s?"),
    ("mode", "Window_S = 4", f"{M} . Window_S", "did you mean window_s?"),
    ("mode", "deadband = 4", f"{M} . deadband", "deadband belongs into [[mode.band]]"),
    ("mode", "keep_days = 4", f"{M} . keep_days", "keep_days belongs into [store]"),
    ("mode", "xyzzy = 4", f"{M} . xyzzy", "take it out"),
    ("band", "hi = 4", f"{B} . hi", "did you mean high?"),
    ("regime", "when = { covariate = 'speed', form = 1, to = 2 }", 'regime[1] "running" . when . form', "from?"),
    ("regime", "when = { covariate = 'speed', from_ = 1, to = 2 }", 'regime[1] "running" . when . from_', "from?"),
    ("bus", "publisher = 1", "bus . publisher", "did you mean publish?"),
]


@pytest.mark.parametrize(("table", "line", "key", "remedy"), UNKNOWN, ids=[row[1] for row in UNKNOWN])
def test_an_unknown_key_is_refused_and_the_nearest_known_one_named(
    table: str, line: str, key: str, remedy: str
) -> None:
    (problem,) = problems_of(document(table, line))
    assert (problem.key, problem.came) == (key, "an unknown key")
    assert problem.remedy.endswith(remedy)


MISSING = [
    ("", "schema", "schema", "schema = 1"),
    ("source", "kind", f"{S} . kind", "one of soundcard, recording, simulated, feed"),
    ("source", "rate_hz", f"{S} . rate_hz", "no default"),
    ("resonator", "q", f"{S} . {R} . q", "no default"),
    ("tone", "level", f"{S} . tone[1] . level", "no default"),
    ("mode", "channel", f"{M} . channel", "no default"),
    ("mode", "search_hz", f"{M} . search_hz", "no default"),
    ("alert", "condition", 'alert[1] "n" . condition', "no default"),
]


@pytest.mark.parametrize(("table", "key", "where", "expected"), MISSING, ids=[row[1] for row in MISSING])
def test_a_missing_key_is_named(table: str, key: str, where: str, expected: str) -> None:
    text = document(table, f"{key} = 0").replace(f"\n{key} = 0\n", "\n", 1).removeprefix(f"{key} = 0\n")
    (problem,) = problems_of(text)
    assert (problem.key, problem.came, problem.remedy) == (where, "nothing", f"add {key}")
    assert expected in problem.expected


def test_a_band_without_limits_is_refused() -> None:
    (problem,) = problems_of("".join(GOOD.values()).replace("low = 890\nhigh = 915\n", ""))
    assert (problem.key, problem.came) == (f"{B} . high", "neither limit")


def test_a_band_that_the_search_band_never_meets_is_refused() -> None:
    (problem,) = problems_of("".join(GOOD.values()).replace("low = 890\nhigh = 915", "low = 980"))
    assert problem.key == f"{B} . low"
    assert "overlaps search_hz, 820 to 980 Hz" in problem.expected


def test_relative_limits_may_be_negative() -> None:
    loads("".join(GOOD.values()).replace("low = 890\nhigh = 915", 'limits = "percent"\nlow = -2\nhigh = -1'))


def test_a_single_table_where_an_array_belongs_is_told_the_heading() -> None:
    (problem,) = problems_of(GOOD[""] + GOOD["mode"] + '[channel]\nname = "a"\n')
    assert (problem.key, problem.came, problem.remedy) == ("channel", "a table", "write the heading as [[channel]]")


@pytest.mark.parametrize("array", ["channel", "mode"])
def test_a_file_without_channel_or_mode_is_refused_empty_or_left_out(array: str) -> None:
    texts = {**GOOD, array: "", "sensor": "", "band": "", "regime": ""}
    for top in ("", f"{array} = []\n"):
        text = texts[""] + top + "".join(text for table, text in texts.items() if table)
        assert (array, "none") in {(problem.key, problem.came) for problem in problems_of(text)}


SECOND = [
    ("source", 'name = "SIM"\nkind = "soundcard"', 'source[2] "SIM" . name', 'source[1] "sim"'),
    ("channel", 'name = "A"', 'channel[2] "A" . name', 'channel[1] "a"'),
    ("regime", 'name = "Running"\nwhen = { level = "a", from = 1 }', 'regime[2] "Running" . name', "regime[1]"),
    ("mode", 'name = "M"\nchannel = "a"\nsearch_hz = [1, 20]', 'mode[2] "M" . name', 'mode[1] "m"'),
    ("alert", 'name = "N"\ncondition = "lost"', 'alert[2] "N" . name', 'alert[1] "n"'),
    ("mode.band", 'name = "W"\nhigh = 900', 'mode[1] "m" . band[2] "W" . name', B),
]


@pytest.mark.parametrize(("array", "lines", "key", "earlier"), SECOND, ids=[row[0] for row in SECOND])
def test_a_name_used_twice_is_refused_without_regard_to_case(array: str, lines: str, key: str, earlier: str) -> None:
    text = "".join(GOOD.values()).replace('name = "a"', 'name = "a"\nsource = "sim"')
    text += f"[[{array}]]\n{lines}\n" + ('source = "sim"\n' if array == "channel" else "")
    (problem,) = problems_of(text)
    assert problem.key == key
    assert earlier in problem.expected


def test_names_that_look_equal_are_equal_however_their_accents_are_written() -> None:
    joined, apart = "driv\N{LATIN SMALL LETTER E WITH ACUTE}", "drive\N{COMBINING ACUTE ACCENT}"
    text = 'schema = 1\n[[channel]]\nname = "{}"\n[[mode]]\nname = "m"\nchannel = "{}"\nsearch_hz = [8.0, 16.0]\n'
    assert loads(text.format(joined, apart)).mode[0].channel == joined
    with pytest.raises(ConfigError) as caught:
        loads(text.format(joined, joined) + f'[[channel]]\nname = "{apart}"\n')
    (problem,) = caught.value.problems
    assert "a second time" in problem.came


def test_the_same_mode_name_on_two_channels_is_allowed() -> None:
    loads(
        "".join(GOOD.values()) + '[[channel]]\nname = "b"\n[[mode]]\nname = "m"\nchannel = "b"\nsearch_hz = [1, 20]\n'
    )


def test_two_sources_ask_the_channel_for_one() -> None:
    (problem,) = problems_of("".join(GOOD.values()) + '[[source]]\nname = "card"\nkind = "soundcard"\n')
    assert (problem.key, problem.came, problem.expected) == (f"{C} . source", "nothing", 'one of "sim", "card"')


def test_a_reference_must_exist_and_have_the_role() -> None:
    lines = 'methods = ["driven"]\nreference = "a"'
    (problem,) = problems_of("".join(GOOD.values()).replace("search_hz", f"{lines}\nsearch_hz"))
    assert problem.key == f"{M} . reference"
    assert problem.expected == "a channel whose role is reference"
    (problem,) = problems_of("".join(GOOD.values()).replace("search_hz", f'{lines[:-1]}b"\nsearch_hz'))
    assert 'name of a channel in this file: "a"' in problem.expected


def test_a_reference_without_driven_is_refused() -> None:
    text = "".join(GOOD.values()) + '[[channel]]\nname = "t"\nrole = "reference"\n'
    (problem,) = problems_of(text.replace("search_hz", 'reference = "t"\nsearch_hz'))
    assert problem.expected == "driven among the methods of a mode with a reference"


def test_everything_wrong_is_found_in_one_pass_also_across_tables_that_are_wrong_themselves() -> None:
    text = """
[station]
nmae = "x"
[[source]]
name = "s"
kind = "simulated"
rate_hz = 8192
pase = 1
[[channel]]
name = "a"
input = 3
colour = "red"
[[channel]]
name = "A"
scale = nan
[[mode]]
name = "m"
channel = "b"
search_hz = [1, 20]
windw_s = 4
[[mode.band]]
name = "w"
low = 9
high = 8
prioriti = "low"
[[mode]]
name = "n"
channel = "a"
search_hz = [1, 5000]
step_s = "1"
"""
    keys = [problem.key for problem in problems_of(text)]
    assert sorted(keys) == sorted(
        [
            "schema",
            "station . nmae",
            'source[1] "s" . pase',
            'channel[1] "a" . input',
            'channel[1] "a" . colour',
            'channel[2] "A" . name',
            'channel[2] "A" . scale',
            'mode[1] "m" . channel',
            'mode[1] "m" . windw_s',
            'mode[1] "m" . band[1] "w" . high',
            'mode[1] "m" . band[1] "w" . prioriti',
            'mode[2] "n" . search_hz',
            'mode[2] "n" . step_s',
        ]
    )


def test_syntax_errors_have_line_and_column(tmp_path: Path) -> None:
    file = tmp_path / "a.toml"
    file.write_text('schema = 1\n[station]\nname = "x\n')
    with pytest.raises(ConfigError, match=r"a\.toml: got no TOML: .*\(at line 3, column 10\); expected TOML"):
        load(file)


def test_a_missing_file_a_directory_and_a_file_in_another_encoding_are_named(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match=r"no\.toml: got no such file; expected a configuration in TOML; check"):
        load(tmp_path / "no.toml")
    with pytest.raises(ConfigError, match="got a directory"):
        load(tmp_path)
    file = tmp_path / "a.toml"
    file.write_bytes(b'schema = 1\n[station]\nname = "Geh\xe4use"\n')
    with pytest.raises(ConfigError, match="got byte 0xe4 in line 3; expected text in UTF-8"):
        load(file)


def test_a_name_that_no_file_can_have_is_a_problem_too() -> None:
    with pytest.raises(ConfigError, match="got an error on reading"):
        load("a\0b.toml")
