"""How a listener finds its way to a daemon, and when it needs its key to hear it."""

from __future__ import annotations

import time
from pathlib import Path

import click
import pytest
from driftwatch.bus.errors import AskError, NoKeyError
from driftwatch.bus.keys import ClientKey, Role, new_pair
from driftwatch.cli.listen_asking import AGAIN_S, StoredSince, Way, way_to

HERE, THERE = "tcp://127.0.0.1:5571", "tcp://plant.example:5571"


def _key(folder: Path, publish: str | None, control: str | None = "tcp://127.0.0.1:1") -> Path:
    pair, daemon = new_pair(), new_pair()
    path = folder / "anna.key"
    ClientKey("anna", Role.LOOK, pair.public, pair.secret, daemon.public, control, publish).write(path)
    return path


@pytest.mark.parametrize(
    ("endpoint", "known", "heard_at", "guarded"),
    [
        (None, HERE, HERE, False),
        (None, THERE, THERE, True),
        (HERE, THERE, HERE, True),  # by a tunnel
        (THERE, None, THERE, True),
        (THERE, HERE, THERE, True),
    ],
)
def test_beyond_this_computer_the_key_is_needed_to_hear(
    endpoint: str | None, known: str | None, heard_at: str, guarded: bool, tmp_path: Path
) -> None:
    path = _key(tmp_path, known)
    assert way_to(endpoint, None, path) == Way(heard_at, None, path, guarded)


def test_a_key_that_tells_no_endpoint_needs_one(tmp_path: Path) -> None:
    with pytest.raises(click.UsageError, match="does not tell where the daemon publishes"):
        way_to(None, None, _key(tmp_path, None))


def test_a_configuration_tells_both_endpoints_and_its_own_users_key(tmp_path: Path) -> None:
    demo = Path(__file__).parent.parent.parent / "config" / "demo.toml"
    (tmp_path / "own.toml").write_bytes(demo.read_bytes() + b"\n[daemon]\nstate = 'kept'\n")
    way = way_to(None, str(tmp_path / "own.toml"), None)
    assert way.key == tmp_path / "kept" / "keys" / "operator.json"
    assert (way.endpoint, way.control, way.guarded) == (HERE, "tcp://127.0.0.1:5572", False)


def test_after_a_failure_it_waits_before_it_asks_again(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The key is not there yet, as before the first start of a daemon; then it is, but tells no port."""
    with StoredSince(Way(HERE, None, tmp_path / "anna.key")) as since:
        with pytest.raises(NoKeyError) as first:
            since(None)
        _key(tmp_path, HERE, control=None)
        with pytest.raises(NoKeyError) as again:
            since(None)
        assert again.value is first.value
        monkeypatch.setattr(time, "monotonic", lambda now=time.monotonic: now() + 1.01 * AGAIN_S)
        with pytest.raises(AskError, match="has not run yet"):
            since(None)
