"""The house: what may lie where, how large a file may grow, and what the command's help may load."""

import json
import re
import shutil
import subprocess
import sys
from pathlib import Path

import click
import pytest

ROOT = Path(__file__).parent.parent
PACKAGE = ROOT / "driftwatch"

SLOW_TO_IMPORT = ("numpy", "scipy", "sqlalchemy", "zmq")
"""What help must not load: it would take a second before the first word."""

TOP_LEVEL = {
    "directories": {"driftwatch", "config", "tests", "tools", ".ci"},
    "files": {"README.md", "DEVELOPERS.md", "pyproject.toml", ".gitignore"},
}

ROOMS = {
    "measure", "stream", "track", "alert", "pipeline", "store", "bus", "deliver", "evidence", "survey", "report",
    "daemon", "cli", "config",
}  # fmt: skip

LONE_MODULES = {"__init__.py", "__main__.py", "py.typed", "resonance.py", "records.py"}

LARGEST_FILE = 24_000
"""Bytes of a source file: one of more has more than one subject."""


def tracked(*patterns: str) -> list[Path]:
    """Return what git tracks, relative to the repository; skips where this is no clone or git is not there."""
    if shutil.which("git") is None:
        pytest.skip("no git here to tell what belongs to the repository")
    listed = subprocess.run(["git", "ls-files", "-z", *patterns], cwd=ROOT, capture_output=True, text=True, check=False)
    if listed.returncode != 0:
        pytest.skip(f"no git clone: {listed.stderr.strip()}")
    return [Path(name) for name in listed.stdout.split("\0") if name]


def modules_after(code: str) -> set[str]:
    """Return the modules that a fresh interpreter holds after running `code`."""
    report = (
        "import atexit, json, sys; atexit.register(lambda: print(json.dumps(sorted(sys.modules)), file=sys.stderr))"
    )
    done = subprocess.run(
        [sys.executable, "-c", f"{report}\n{code}"], cwd=ROOT, capture_output=True, text=True, check=True
    )
    return set(json.loads(done.stderr.splitlines()[-1]))


# ---------------------------------------------------------------------------------------------- start-up


@pytest.mark.parametrize("arguments", [["--help"], ["-h"], ["--version"], []], ids=["help", "h", "version", "none"])
def test_help_loads_nothing_slow(arguments: list[str]) -> None:
    """`driftwatch --help`, as its entry point runs it, leaves numpy, scipy, sqlalchemy and zmq out of sys.modules."""
    entry = f"import sys; sys.argv = ['driftwatch', *{arguments!r}]; from driftwatch.cli import main; main()"
    loaded = modules_after(entry)
    assert "driftwatch.cli" in loaded
    assert not loaded & set(SLOW_TO_IMPORT)


def test_what_help_loads_can_be_seen() -> None:
    """The instrument of the test above: it does see numpy where numpy is loaded, even past an exit."""
    assert "numpy" in modules_after("import sys, numpy; sys.exit(0)")


def test_the_help_of_the_installed_command_names_every_command() -> None:
    from driftwatch.cli import COMMANDS

    shown = subprocess.run(
        [sys.executable, "-m", "driftwatch", "--help"], capture_output=True, text=True, check=True
    ).stdout
    words = {line.split()[0] for line in shown.splitlines() if line.startswith("  ") and line.split()}
    assert set(COMMANDS) <= words


def test_the_vocabulary_and_the_pole_load_no_room() -> None:
    """They lie at the bottom: importing them loads nothing else of ours, and the vocabulary no numpy either."""
    loaded = modules_after("import driftwatch.records")
    assert not loaded & set(SLOW_TO_IMPORT)
    for module in ("records", "resonance"):
        ours = {name for name in modules_after(f"import driftwatch.{module}") if name.startswith("driftwatch.")}
        assert ours == {f"driftwatch.{module}"}
    assert "scipy" not in modules_after("import driftwatch.resonance")


@pytest.mark.parametrize(
    ("role", "kept_out"),
    [("capture", "scipy"), ("recorder", "scipy"), ("tracker", "sounddevice"), ("live", "sounddevice")],
)
def test_each_process_of_a_live_run_loads_no_more_than_the_guide_says(role: str, kept_out: str) -> None:
    """`live` is the main process; the others are the modules whose `work` a child carries out."""
    assert kept_out not in modules_after(f"import driftwatch.daemon.{role}")


# ---------------------------------------------------------------------------------------------- what lies where


def test_the_top_level_holds_only_what_belongs_there() -> None:
    paths = tracked()
    assert {path.parts[0] for path in paths if len(path.parts) > 1} <= TOP_LEVEL["directories"]
    assert {path.name for path in paths if len(path.parts) == 1} <= TOP_LEVEL["files"]


def test_the_package_has_only_the_rooms_of_the_design() -> None:
    inside = [path.relative_to("driftwatch") for path in tracked("driftwatch")]
    assert {path.parts[0] for path in inside if len(path.parts) > 1} <= ROOMS
    assert {path.name for path in inside if len(path.parts) == 1} <= LONE_MODULES


def test_every_room_says_what_it_is_for() -> None:
    for path in tracked("driftwatch/*/__init__.py"):
        if len(path.parts) == 3:
            assert (ROOT / path).read_text(encoding="utf-8").startswith('"""'), path


def test_no_file_of_the_program_has_grown_past_one_subject() -> None:
    sizes = {path: (ROOT / path).stat().st_size for path in tracked("driftwatch") if (ROOT / path).exists()}
    assert sizes
    assert not {str(path): size for path, size in sizes.items() if size > LARGEST_FILE}


def test_tests_mirror_the_package() -> None:
    """A directory of tests is named for a room, or holds checks against values from outside, or what tests read."""
    directories = {path.parts[1] for path in tracked("tests") if len(path.parts) > 2}
    assert directories <= ROOMS | {"outside", "data", "tools"}


# ---------------------------------------------------------------------------------------------- what the guides say

CODE = re.compile(r"```[a-z]*\n(.*?)```|`([^`\n]+)`", re.DOTALL)
COMMAND_LINE = re.compile(r"(?:^|[\s/])driftwatch +(?P<command>[a-z]+)(?P<rest>[^\n|;&]*)")
PATH = re.compile(r"(?<![\w/.-])(?:tools|config|tests|driftwatch|\.ci)/[\w./-]*\w")


def code_in(text: str) -> list[str]:
    """Return the fenced blocks and the back-quoted words of a page."""
    return [fenced or quoted for fenced, quoted in CODE.findall(text)]


def guide(name: str) -> list[str]:
    page = ROOT / name
    assert page.exists(), f"{name} is not written yet"
    return code_in(page.read_text(encoding="utf-8"))


def unknown_in(code: str) -> list[str]:
    """Return the commands and options of `code` that do not exist."""
    from driftwatch.cli import COMMANDS, main

    context, wrong = click.Context(main), []
    for line in COMMAND_LINE.finditer(code):
        name = line["command"]
        command = main.get_command(context, name) if name in COMMANDS else None
        if command is None:
            wrong.append(name)
            continue
        verbs = command.commands.values() if isinstance(command, click.Group) else ()
        known = {word for each in (command, *verbs) for one in each.params for word in one.opts} | {"--help"}
        wrong += [f"{name} {option}" for option in re.findall(r"--[a-z-]+", line["rest"]) if option not in known]
    return wrong


@pytest.mark.parametrize("name", ["README.md", "DEVELOPERS.md"])
def test_commands_and_options_in_the_guides_exist(name: str) -> None:
    assert [wrong for code in guide(name) for wrong in unknown_in(code)] == []


@pytest.mark.parametrize("name", ["README.md", "DEVELOPERS.md"])
def test_paths_in_the_guides_exist(name: str) -> None:
    paths = {path for code in guide(name) for path in PATH.findall(code)}
    assert sorted(path for path in paths if not (ROOT / path).exists()) == []


def test_a_command_that_does_not_exist_would_be_found() -> None:
    """The instrument of the tests above."""
    page = "Type `driftwatch fly --high`, `driftwatch replay --sideways`, or\n"
    page += "```sh\n$ .venv/bin/driftwatch swim x.wav\ntools/none --fast\n```\n"
    assert [wrong for code in code_in(page) for wrong in unknown_in(code)] == ["fly", "replay --sideways", "swim"]
    assert [path for code in code_in(page) for path in PATH.findall(code)] == ["tools/none"]
