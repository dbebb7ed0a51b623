"""README and guide stay true: what they show is played, what they list is compared with the program."""

from __future__ import annotations

import contextlib
import io
import itertools
import re
import struct
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest
from driftwatch.alert.machine import ROWS
from driftwatch.cli import COMMANDS, main
from driftwatch.config import (
    AlertConfig,
    BandConfig,
    BusConfig,
    ChannelConfig,
    Configuration,
    ModeConfig,
    RecordingSourceConfig,
    SoundcardSourceConfig,
    StationConfig,
    StoreConfig,
    load,
    loads,
    unserved,
)
from driftwatch.config.models import DaemonConfig, RecordConfig
from driftwatch.pipeline.gaps import WORDS
from driftwatch.records import REASONS, AlertState, Method, TrackStatus
from pydantic import BaseModel

from benchmarks.__main__ import NAMES
from pictures.shown import Block, blocks, disagreement, disagreements, prepared, steps

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")
GUIDE = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")

LARGEST_PICTURE = 200_000
"""Bytes: a page must open quickly."""

CAUTIONS = (
    "driftwatch advises; it is no protective system and no substitute for one. Where a failing machine or test "
    "article can hurt someone, a qualified person decides, under the local codes, and trips and guards work without "
    "this program. Isolate and lock out a machine before fixing a sensor to it. A microphone may record speech: get "
    "consent and follow local law."
)


def flat(text: str) -> str:
    return " ".join(text.split())


def section(page: str, heading: str) -> str:
    """Return what stands under a heading of the second level."""
    return page.split(f"\n## {heading}\n")[1].split("\n## ")[0]


def first_column(text: str) -> list[str]:
    """Return the words in back quotes in the first cells of a text's tables."""
    cells = [line.split("|")[1] for line in text.splitlines() if line.startswith("| ") and not line.startswith("| ---")]
    return [word for cell in cells for word in re.findall(r"`([^`]+)`", cell)]


# ---------------------------------------------------------------------------------------------- the readme's begin


def test_the_readme_opens_with_one_paragraph_then_picture_commands_and_cautions() -> None:
    parts = [part for part in README.split("\n\n") if part.strip()]
    assert parts[0] == "# driftwatch"
    assert parts[1][0].isalpha()
    assert parts[2].startswith("![")
    places = [README.index(mark) for mark in (parts[2], "\ntools/start ", "\ntools/test ", "**Cautions.**", "\n## ")]
    assert places == sorted(places)


def test_the_cautions_stand_whole() -> None:
    assert CAUTIONS in flat(README)


def test_tools_start_runs_the_demo_that_the_readme_explains() -> None:
    assert "driftwatch run config/demo.toml" in (ROOT / "tools" / "start").read_text(encoding="utf-8")


# ---------------------------------------------------------------------------------------------- what is shown


def test_what_the_readme_shows_is_printed_and_what_its_blocks_say_runs(tmp_path: Path) -> None:
    """Every command line of the README, in one folder and in order, prints what is shown, up to its numbers."""
    assert sum(len(steps(block.body)) for block in blocks(README) if block.language == "console") >= 5
    prepared(tmp_path)
    assert list(disagreements(README, tmp_path)) == []


def python_blocks() -> list[tuple[Block, Block]]:
    """Return each Python block with the block of its output behind it."""
    every = [*blocks(README), *blocks(GUIDE)]
    return [(code, output) for code, output in itertools.pairwise(every) if code.language == "python"]


def test_the_library_example_runs_and_prints_what_is_shown() -> None:
    examples = python_blocks()
    assert examples
    for code, output in examples:
        printed = io.StringIO()
        with contextlib.redirect_stdout(printed):
            exec(compile(code.body, "example", "exec"), {})  # noqa: S102 - our own page
        assert disagreement(output.body.splitlines(), printed.getvalue().splitlines()) is None


def test_the_library_example_shows_the_truth_it_simulates() -> None:
    """900 Hz and Q 40 from 15 windows: the shown means lie within 5 standard errors (false alarm 6e-7 each)."""
    ((_, output),) = python_blocks()
    found = re.search(r"(\d+) windows, fn = ([\d.]+) Hz, Q = ([\d.]+)\n.*?± ([\d.]+)%", output.body)
    assert found is not None
    windows, frequency_hz, q, percent = (float(text) for text in found.groups())
    std_hz = 900.0 * 1e-3  # of one window, somewhat over the bound of 8e-4
    assert abs(frequency_hz - 900.0) < 5 * std_hz / windows**0.5
    assert abs(q / 40.0 - 1.0) < 5 * percent / 100 / windows**0.5


def test_the_shortest_configuration_has_ten_lines_and_serves_a_replay() -> None:
    (short,) = [block for block in blocks(README) if block.file == "own.toml"]
    assert len(short.body.splitlines()) == 10
    assert unserved(loads(short.body), live=False) == []


@pytest.mark.parametrize(
    ("shown", "printed", "agrees"),
    [
        ("at 12.5 Hz", "at 13.25 Hz", True),
        ("at 12.5 Hz", "at\n 13.25 Hz", True),
        ("at 12.5 Hz", "at 13.25 s", False),
        ("at 12.5 Hz", "at 13.25 Hz\nand more", False),
        ("at 12.5 Hz\nand more", "at 13.25 Hz", False),
        ("...\nend", "begin\nend", True),
        ("begin\n...", "begin\nend", True),
        ("...\nmiddle\n...", "begin\nmiddle\nend", True),
        ("...\nmiddle\n...", "begin\nend", False),
        ("begin\n...\nend", "begin\nend\nmore", False),
        ("run 0b5e481b-8f7e-4acf-bfdb-ae823b0bddce", "run 7b481b5e-8f7e-4acf-bfdb-ae823b0bddce", True),
    ],
)
def test_what_disagrees_in_kind_would_be_found(shown: str, printed: str, agrees: bool) -> None:
    """The instrument of the tests above."""
    assert (disagreement(shown.splitlines(), printed.splitlines()) is None) is agrees


def test_a_command_that_prints_something_else_would_be_found(tmp_path: Path) -> None:
    page = "```console\n$ echo one\none\n$ echo two\nthree\n```\n"
    assert [wrong.splitlines()[0] for wrong in disagreements(page, tmp_path)] == ["$ echo two"]


# ---------------------------------------------------------------------------------------------- pictures


def pictures() -> list[tuple[str, Path]]:
    """Return the text alternative and the file of each picture in the guides."""
    return [(text, ROOT / path) for text, path in re.findall(r"!\[([^\]]*)\]\(([^)]+)\)", README + GUIDE)]


def test_every_picture_is_there_has_words_and_is_small() -> None:
    assert pictures()
    for words, path in pictures():
        assert len(words) > 20
        assert path.read_bytes().startswith(b"\x89PNG")
        assert path.stat().st_size < LARGEST_PICTURE


def test_every_picture_kept_is_shown() -> None:
    assert {path for _, path in pictures()} == set((ROOT / "tools" / "pictures").glob("*.png"))


def size_of(picture: Path) -> tuple[int, int]:
    """Return width and height of a PNG, from its header."""
    width, height = struct.unpack(">II", picture.read_bytes()[16:24])
    return width, height


def test_the_script_remakes_the_picture(tmp_path: Path) -> None:
    pytest.importorskip("matplotlib")
    script = ROOT / "tools" / "pictures" / "make.py"
    subprocess.run([sys.executable, script, "--to", tmp_path], check=True, capture_output=True)
    assert size_of(tmp_path / "demo.png") == size_of(ROOT / "tools" / "pictures" / "demo.png")
    assert (tmp_path / "demo.png").stat().st_size < LARGEST_PICTURE


def test_the_demo_is_as_the_caption_says() -> None:
    config = load(ROOT / "config" / "demo.toml")
    document = config.model_dump(mode="json")
    housing, bar, plate = document["source"][0]["resonator"]
    assert (housing["frequency_hz"], housing["q"]) == ([[15.0, 415.0], [40.0, 400.0]], [[0.0, 35.0]])
    assert (bar["frequency_hz"], bar["q"]) == ([[0.0, 2350.0]], [[0.0, 60.0]])
    assert plate["q"] == [[20.0, 110.0], [28.0, 40.0]]
    bands = {band.name: band.low for mode in config.mode for band in mode.band}
    assert (bands["bolts"], bands["seal"]) == (408.0, 75.0)
    assert {mode.window_s for mode in config.mode} == {4.0}
    assert all(band.on_delay_s == 3.0 and band.confidence == 0.95 for mode in config.mode for band in mode.band)


# ---------------------------------------------------------------------------------------------- what is listed


def test_the_readme_explains_every_reason_and_every_status() -> None:
    figures = section(README, "How to read a figure")
    assert sorted(first_column(figures)) == sorted([*REASONS, *TrackStatus])


def test_the_readme_explains_the_states_that_an_alert_can_reach_and_no_other() -> None:
    reached = {AlertState.NORMAL, *ROWS.values()}
    assert set(first_column(section(README, "Alerts"))) == reached


def test_the_readme_explains_every_cause_of_a_gap_and_no_other() -> None:
    assert sorted(first_column(section(README, "When samples go missing"))) == sorted(WORDS)


def test_the_readme_names_what_can_be_set_of_a_sound_card_and_the_defaults() -> None:
    (row,) = [line for line in README.splitlines() if line.startswith("| `[[source]]` |")]
    (named,) = re.findall(r"of a sound card \(([^)]*)\)", row)
    assert set(re.findall(r"`(\w+)`", named)) == set(SoundcardSourceConfig.model_fields) - {"name", "kind"}
    card = SoundcardSourceConfig(name="card")
    assert f"`{card.sample_format}`, {card.block_s:g} s" in row
    assert f"(`block_s`,\n{card.block_s * 1000:g} ms" in README


def test_the_tables_of_a_sensor_in_the_readme_fit_into_the_file_for_a_first_try() -> None:
    """What the README shows in place of source and channel leaves a configuration that runs and checks its sensor."""
    (shown,) = [
        block.body for block in blocks(README) if 'device = "measurement"' in block.body and "toml" in block.language
    ]
    text = (ROOT / "config" / "first-try.toml").read_text(encoding="utf-8")
    config = loads(text[: text.index("[[source]]")] + shown + text[text.index("[[mode]]") :])
    (source,) = config.source
    assert isinstance(source, SoundcardSourceConfig)
    assert (source.device, config.channel[0].input, unserved(config)) == ("measurement", 2, [])


TABLES: dict[str, tuple[type[BaseModel], set[str]]] = {
    "[station]": (StationConfig, set()),
    "[[source]]": (RecordingSourceConfig, set()),
    "[[channel]]": (ChannelConfig, {"role"}),
    "[[mode]]": (ModeConfig, {"reference", "regimes", "band"}),
    "[[mode.band]]": (BandConfig, {"limits"}),
    "[[alert]]": (AlertConfig, set()),
    "[store]": (StoreConfig, set()),
    "[bus]": (BusConfig, set()),
    "[daemon]": (DaemonConfig, set()),
    "[record]": (RecordConfig, set()),
}
"""Each table of the README with its model, and the keys that stand for what is not served or for the next table."""


@pytest.mark.parametrize("table", TABLES)
def test_the_readme_names_the_keys_of_a_table(table: str) -> None:
    model, unnamed = TABLES[table]
    (row,) = [line for line in README.splitlines() if line.startswith(f"| `{table}` |")]
    keys = set(re.findall(r"`(\w+)`", re.sub(r"\([^)]*\)", "", row.split("|")[2])))
    known = set(model.model_fields)
    assert keys == known - unnamed - ({"sensor"} if table == "[[channel]]" else set())
    assert unnamed <= known


def test_the_readme_names_every_table() -> None:
    tables = {"[regime]"} | {f"[{name}]" for name in Configuration.model_fields if name != "schema_"}
    named = {name.strip("[]") for name in first_column(section(README, "Configuration")) if name.startswith("[")}
    assert {name.strip("[]") for name in tables} - {"regime"} <= named


SOURCE = '[[source]]\nname = "s"\nkind = "simulated"\nrate_hz = 8000\n'
FOLLOWED = '[[channel]]\nname = "a"\n[[mode]]\nname = "m"\nchannel = "a"\nsearch_hz = [800, 900]\n'
SERVED = f"schema = 1\n{SOURCE}{FOLLOWED}"

UNSERVED = {
    "feeds": SERVED.replace("simulated", "feed"),
    "One source": SERVED.replace(
        "[[channel]]", '[[source]]\nname = "r"\nkind = "simulated"\nrate_hz = 8000\n[[channel]]\nsource = "s"'
    ),
    "No regimes": f'{SERVED}[[regime]]\nname = "r"\nwhen = {{ covariate = "speed", from = 1.0 }}\n',
    "percent": f'{SERVED}[[mode.band]]\nname = "p"\nlimits = "percent"\nlow = -1.0\n',
    "ppm": f'{SERVED}[[mode.band]]\nname = "p"\nlimits = "ppm"\nlow = -1.0\n',
    "standard deviations": f'{SERVED}[[mode.band]]\nname = "p"\nlimits = "sigma"\nlow = -1.0\n',
}
"""Words of the README, and a configuration that asks for what they say is not done."""


@pytest.mark.parametrize("words", UNSERVED)
def test_what_the_readme_says_is_not_done_is_refused(words: str) -> None:
    """Should this version learn to do it, the README must be corrected."""
    assert words in flat(section(README, "What this version does not do yet").replace("**", ""))
    assert unserved(loads(SERVED)) == []
    assert len(unserved(loads(UNSERVED[words]))) == 1


def test_the_readme_names_the_methods_that_are_served_and_those_that_are_not() -> None:
    alone = [method for method in Method if method is not Method.DRIVEN]  # which needs a reference as well
    served = {method for method in alone if not unserved(loads(f'{SERVED}methods = ["{method}"]\n'))}
    assert served == {Method.AMBIENT, Method.RINGDOWN}
    assert "**Two methods**, `ambient` and `ringdown`." in README


def test_what_takes_json_is_named() -> None:
    context = main.make_context("driftwatch", [], resilient_parsing=True)
    takes = set()
    for name in COMMANDS:
        command = main.get_command(context, name)
        assert command is not None
        takes |= {name} if any("--json" in parameter.opts for parameter in command.params) else set()
    (line,) = re.findall(r"\* \*\*Standard output\.\*\*(.*?) take `--json`", flat(README))
    assert set(re.findall(r"`(\w+)`", line)) == takes


# ---------------------------------------------------------------------------------------------- the guide


def test_the_house_in_the_guide_is_the_house() -> None:
    (drawn,) = [block.body for block in blocks(GUIDE) if block.body.startswith("driftwatch/\n")]
    inside = set(re.findall(r"^  ([\w.]+)", drawn, re.MULTILINE))
    package = ROOT / "driftwatch"
    rooms = {path.parent.name for path in package.glob("*/__init__.py")}
    assert inside == rooms | {"resonance.py", "records.py"}
    for folder in re.findall(r"^(\w+)/", drawn, re.MULTILINE):
        assert (ROOT / folder).is_dir()


def test_the_arrows_in_the_guide_are_those_of_the_import_contract() -> None:
    settings = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    layers = settings["tool"]["importlinter"]["contracts"][0]["layers"]
    arrows = " > ".join(layer.replace("driftwatch.", "").replace(" | ", ", ") for layer in layers)
    assert flat(arrows) in flat(GUIDE)


def test_names_that_the_guide_places_in_a_file_stand_there() -> None:
    """Wherever the guide says `NAME` in, of, beside or with `driftwatch/....py`, the file holds the name."""
    placed = re.findall(r"`_?(\w+)`(?:, if [^`]*)? (?:in|of) `(driftwatch/[\w/]+\.py)`", flat(GUIDE))
    placed += [(name, path) for name, path in re.findall(r"`(\w+)` \(`(driftwatch/[\w/]+\.py)`\)", flat(GUIDE))]
    assert len(placed) >= 12
    missing = [(name, path) for name, path in placed if name not in (ROOT / path).read_text(encoding="utf-8")]
    assert missing == []


def test_the_guide_explains_every_bench() -> None:
    assert sorted(first_column(section(GUIDE, "How figures are checked"))) == sorted(NAMES)


def test_every_source_of_a_method_stands_in_its_module() -> None:
    table = section(GUIDE, "Where the methods come from")
    for line in table.splitlines():
        found = re.match(r"\| [^|]+ \| `([^`]+)` \| ([^|]+) \|", line)
        if found:
            text = (ROOT / found[1]).read_text(encoding="utf-8")
            for author in re.findall(r"[A-Z][a-z]+(?=[ ,&;]| [0-9])", found[2].split(",")[0]):
                assert author in text, (found[1], author)
