"""Keys from the command line: granted, listed, revoked; and what is refused without one."""

from __future__ import annotations

import json
import stat
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner, Result
from driftwatch.bus.keys import ClientKey, KeyFolder
from driftwatch.cli import main
from driftwatch.records import parse_time

TEXT = """
schema = 1
[[channel]]
name = "drive end"
[[mode]]
name = "rocking"
channel = "drive end"
search_hz = [340.0, 460.0]
window_s = 1.0
[store]
url = "sqlite:///state/rows.db"
[bus]
publish = "tcp://{host}:5571"
control = "tcp://{host}:5572"
"""

Run = Callable[..., Result]


@pytest.fixture
def run(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Run:
    """Return what runs a command in a folder with two configurations: one for this computer, one for others."""
    monkeypatch.chdir(tmp_path)
    Path("near.toml").write_text(TEXT.format(host="127.0.0.1"))
    Path("far.toml").write_text(TEXT.format(host="0.0.0.0"))  # noqa: S104 - nothing is bound
    return lambda *words: CliRunner().invoke(main, list(words))


def test_a_grant_before_the_first_start_makes_all_keys_and_a_file_to_hand_over(run: Run) -> None:
    done = run("keys", "grant", "night shift", "--role", "operate", "--config", "near.toml")
    assert done.exit_code == 0
    assert done.stdout.startswith("night shift may operate. Hand over night shift.key, as a password would be")
    assert "on this computer only" in done.stderr
    key = ClientKey.read(Path("night shift.key"))
    assert (key.control, key.publish) == ("tcp://127.0.0.1:5572", "tcp://127.0.0.1:5571")
    assert key.daemon == KeyFolder(Path("state")).daemon().public
    for path, mode in ((Path("state"), 0o700), (Path("state/keys"), 0o700), (Path("night shift.key"), 0o600)):
        assert stat.S_IMODE(path.stat().st_mode) == mode


def test_the_list_names_the_users_own_key_and_every_granted_one_and_no_secret(run: Run) -> None:
    for name, role in (("night shift", "operate"), ("wall screen", "look")):
        assert run("keys", "grant", name, "--role", role, "--config", "near.toml").exit_code == 0
    rows = [json.loads(line) for line in run("keys", "list", "--json", "--config", "near.toml").stdout.splitlines()]
    assert [(row["kind"], row["role"]) for row in rows] == [("key", "operate"), ("key", "operate"), ("key", "look")]
    assert [row["name"] for row in rows][1:] == ["night shift", "wall screen"]
    assert rows[0]["granted"] is None
    assert all(parse_time(row["granted"]) > 0 for row in rows[1:])
    table = run("keys", "list", "--state", "state").stdout
    assert "wall screen" in table
    assert "with the daemon" in table
    secrets = [ClientKey.read(path).secret for path in Path().glob("*.key")]
    assert not any(secret in table or secret in json.dumps(rows) for secret in secrets)


def test_a_revoked_key_is_off_the_list_and_cannot_be_revoked_again(run: Run) -> None:
    run("keys", "grant", "night shift", "--role", "look", "--config", "near.toml")
    assert run("keys", "revoke", "Night Shift", "--config", "near.toml").stdout == "night shift is let in no more.\n"
    assert "night shift" not in run("keys", "list", "--config", "near.toml").stdout
    again = run("keys", "revoke", "night shift", "--config", "near.toml")
    assert again.exit_code == 2
    assert "no granted key is called 'night shift'" in again.stderr


@pytest.mark.parametrize(
    ("words", "says"),
    [
        (("grant", "a/b", "--role", "look", "--config", "near.toml"), "expected 1 to 64 letters"),
        (("grant", "x", "--config", "near.toml"), "Missing option '--role'"),
        (("grant", "x", "--role", "rule", "--config", "near.toml"), "'rule' is not one of 'look', 'operate'"),
        (("grant", "x", "--role", "look"), "expected --config CONFIG or --state FOLDER"),
        (("grant", "x", "--role", "look", "--state", "s", "--config", "near.toml"), "got both --config and --state"),
        (("grant", "x", "--role", "look", "--state", "s"), "it has not run yet; expected --config CONFIG"),
        (("grant", "x", "--role", "look", "--config", "near.toml", "--out", "near.toml"), "is there already"),
        (("list", "--config", "none.toml"), "none.toml"),
        (("revoke", "x", "--config", "near.toml"), "expected a place for keys"),
    ],
    ids=lambda value: " ".join(value) if isinstance(value, tuple) else "",
)
def test_what_cannot_be_done_is_refused_in_one_line_and_grants_nothing(
    run: Run, words: tuple[str, ...], says: str
) -> None:
    done = run("keys", *words)
    assert done.exit_code == 2
    assert says in done.stderr
    assert KeyFolder(Path("state")).granted() == ()
    assert not Path("s").exists()


def test_a_list_of_none_says_so(run: Run) -> None:
    done = run("keys", "list", "--config", "near.toml")
    assert (done.exit_code, done.stdout) == (0, "")
    assert "There are no keys in" in done.stderr


# ---------------------------------------------------------------------------------------------- beyond this computer


def test_endpoints_beyond_this_computer_are_refused_until_a_key_is_granted(run: Run) -> None:
    refused = run("check", "far.toml")
    assert refused.exit_code == 2
    lines = refused.stderr.splitlines()
    assert [line.split(": got")[0] for line in lines] == ["Error: bus . publish", "Error: bus . control"]
    assert all("driftwatch keys grant NAME --role look" in line for line in lines)
    problems = [json.loads(line) for line in run("check", "far.toml", "--json").stdout.splitlines()]
    assert [problem["key"] for problem in problems] == ["bus . publish", "bus . control"]
    assert not Path("state").exists()

    granted = run("keys", "grant", "wall screen", "--role", "look", "--config", "far.toml", "--host", "plant7")
    assert (granted.exit_code, granted.stderr) == (0, "")
    assert ClientKey.read(Path("wall screen.key")).publish == "tcp://plant7:5571"
    assert run("check", "far.toml").exit_code == 0

    run("keys", "revoke", "wall screen", "--config", "far.toml")
    assert run("check", "far.toml").exit_code == 2
    Path("state/keys/granted.json").chmod(0o644)
    open_ = run("check", "far.toml")
    assert open_.exit_code == 2
    assert "open to others" in open_.stderr


def test_a_run_beyond_this_computer_without_a_key_starts_nothing(bench: Any) -> None:
    bench.config()
    text = (bench.folder / "bench.toml").read_text()
    (bench.folder / "far.toml").write_text(text.replace("127.0.0.1", "0.0.0.0"))  # noqa: S104 - it is refused
    before = set(bench.files())
    done = bench.run("run", "far.toml")
    assert done.returncode == 2
    assert "expected an endpoint on this computer; without keys use a loopback address" in done.stderr
    assert "driftwatch keys grant NAME" in done.stderr
    assert set(bench.files()) == before
