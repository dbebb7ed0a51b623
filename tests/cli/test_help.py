"""The help of every command reads well, and what it gives as an example works."""

from __future__ import annotations

import shlex
import shutil
import signal
from functools import cache
from pathlib import Path
from typing import Any

import click
import numpy as np
import pytest
import soundfile
from click.testing import CliRunner
from driftwatch.cli import COMMANDS, main

CONFIG = Path(__file__).parents[2] / "config"
DAEMONS = {"run", "listen"}
"""Commands that go on until they are interrupted."""

SOUND = {"devices"}
"""Commands that need a sound card: their own tests run their examples on a virtual one."""

ASKING = {"status"}
"""Commands that need a daemon to ask."""

ACTING = {"alerts", "notes", "keys", "tell"}
"""Commands whose verbs act on a daemon."""

LOOKING = {"readings", "runs", "store"}
"""Commands that need a run to look at."""


@cache
def help_of(*command: str) -> str:
    done = CliRunner().invoke(main, [*command, "--help"], terminal_width=100)
    assert done.exit_code == 0
    return done.output


def examples(*command: str) -> list[list[str]]:
    """Return the examples in a help, as words after the program's name."""
    lines = [line.strip() for line in help_of(*command).splitlines()]
    found = [shlex.split(line.removeprefix("Example: ")) for line in lines if line.startswith("Example: ")]
    assert all(words[0] == "driftwatch" for words in found)
    return [words[1:] for words in found]


def verbs(name: str) -> list[str]:
    """Return the verbs of a command; none where it has none."""
    command = main.get_command(main.make_context("driftwatch", [], resilient_parsing=True), name)
    return list(command.commands) if isinstance(command, click.Group) else []


def all_examples(name: str) -> list[list[str]]:
    """Return the examples of a command and of its verbs, each once."""
    found = [*examples(name), *(words for verb in verbs(name) for words in examples(name, verb))]
    return [list(words) for words in dict.fromkeys(map(tuple, found))]


@pytest.fixture
def layout(bench: Any) -> Path:
    """Return a folder laid out like the repository, its port free, with the recordings that examples speak of."""
    folder: Path = bench.folder
    shutil.copytree(CONFIG, folder / "config")
    demo = folder / "config" / "demo.toml"
    ports = demo.read_text().replace("5571", str(bench.port)).replace("5572", str(bench.control))
    demo.write_text(ports)
    for name in ("before", "during", "recording"):
        samples = 0.1 * np.random.default_rng(0).standard_normal(6 * 4000)
        soundfile.write(folder / f"{name}.wav", samples.astype(np.float32), 4000, subtype="FLOAT")
    return folder


EVERY = [(), *((name,) for name in COMMANDS), *((name, verb) for name in COMMANDS for verb in verbs(name))]


@pytest.mark.parametrize("command", EVERY, ids=lambda words: " ".join(words) or "none")
def test_every_help_says_what_the_command_does_and_gives_an_example_of_it(command: tuple[str, ...]) -> None:
    text = help_of(*command)
    assert text.startswith(f"Usage: main {' '.join(command)}".rstrip())
    assert examples(*command)
    assert all(words[: len(command)] == list(command) for words in examples(*command) if command)
    assert max(map(len, text.splitlines())) <= 120


def test_without_a_command_the_program_says_where_to_begin() -> None:
    done = CliRunner().invoke(main, [])
    assert done.exit_code == 0
    assert all(f"  {name} " in done.output for name in COMMANDS)
    begin = done.output.partition("Where to begin:\n")[2].splitlines()
    assert [line.split("  ")[1] for line in begin] == [
        "driftwatch run config/demo.toml",
        "driftwatch check config/demo.toml",
        "driftwatch COMMAND --help",
    ]


def test_the_examples_of_work_that_ends_work(bench: Any, layout: Path) -> None:
    for name in ((), *((name,) for name in COMMANDS if name not in DAEMONS | ASKING | ACTING | LOOKING | SOUND)):
        for words in examples(*name):
            done = bench.run(*words)
            assert done.returncode == 0, (words, done.stderr)
            assert done.stdout


def test_the_examples_of_watching_acting_and_looking_work(
    bench: Any, layout: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    ((_, *watched),) = examples("run")
    daemon = bench.start("run", *watched)
    (_, *heard), *others = examples("listen")
    listener = bench.start("listen", *(word.replace("5571", str(bench.port)) for word in heard))
    assert "track/drive_end/" in listener.stdout.readline()
    assert all(bench.run(*words, "--count", "3").returncode == 0 for words in others if "--into" in words)
    for words in (words for name in sorted(ASKING) for words in examples(name) if "--watch" not in words):
        asked = bench.run(*words)
        assert asked.returncode in (0, 3, 4), (words, asked.stderr)
        assert asked.stdout
    acts = [words for name in sorted(ACTING) for words in all_examples(name)]
    (end,) = (words for words in acts if words[:2] == ["tell", "stop"])
    monkeypatch.chdir(bench.folder)
    for words in (*(words for words in acts if words is not end), end):
        done = CliRunner().invoke(main, words)
        assert done.exit_code == 0, (words, done.output)
        assert done.output
    listener.send_signal(signal.SIGINT)
    assert [process.wait(timeout=20) for process in (listener, daemon)] == [0, 0]
    for name in sorted(LOOKING & set(COMMANDS)):
        for words in all_examples(name):
            done = CliRunner().invoke(main, words)
            assert done.exit_code == 0, (words, done.output)
            assert done.stdout
