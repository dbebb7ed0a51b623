"""A daemon that publishes on every interface, for keys alone, is heard with its own user's key on its own computer."""

from __future__ import annotations

import json
import threading
from collections.abc import Iterator
from pathlib import Path

import pytest
import zmq
from click.testing import CliRunner
from driftwatch.bus.guard import Guard
from driftwatch.bus.keys import KeyFolder
from driftwatch.bus.publisher import Publisher
from driftwatch.cli import main
from driftwatch.records import Heartbeat, Origin, TimeQuality

RUN = "5f0e8f0e-1111-4222-8333-123456789abc"
BEAT = Heartbeat("line 3", RUN, Origin.LIVE, 0, TimeQuality.FREE, 75.0, 0.1, 0.0, None, 0)
EVERY = ("*", "0.0.0.0")  # noqa: S104 - guarded


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Path]:
    """Return where a configuration for each way to write every interface lies, beside a publisher that is bound so."""
    made = tmp_path_factory.mktemp("everywhere")
    keys, done = KeyFolder(made / "kept"), threading.Event()
    keys.path.parent.mkdir()
    keys.ensure("ann")
    demo = (Path(__file__).parent.parent.parent / "config" / "demo.toml").read_text()
    with (
        zmq.Context() as context,
        Guard(context, keys, lambda _text, _fault: None),
        Publisher("tcp://0.0.0.0:*", context, keys.daemon().as_bytes) as publisher,
    ):
        port = publisher.endpoint.rpartition(":")[2]
        for number, host in enumerate(EVERY):
            text = demo.replace("tcp://127.0.0.1:5571", f"tcp://{host}:{port}") + '\n[daemon]\nstate = "kept"\n'
            (made / f"{number}.toml").write_text(text)

        def beat() -> None:
            while not done.wait(0.05):
                publisher.heartbeat(BEAT)

        thread = threading.Thread(target=beat)
        thread.start()
        try:
            yield made
        finally:
            done.set()
            thread.join()


@pytest.mark.parametrize("number", range(len(EVERY)), ids=EVERY)
@pytest.mark.parametrize("command", ["status", "listen"])
def test_its_sign_of_life_comes(command: str, number: int, folder: Path) -> None:
    options = {"status": ["--wait", "30", "--store", str(folder / "none.db")], "listen": ["--count", "1"]}[command]
    done = CliRunner().invoke(main, [command, "--config", str(folder / f"{number}.toml"), "--json", *options])
    found = json.loads(done.stdout)
    assert found["run"] == RUN
    assert (found["verdict"] != "unreachable") if command == "status" else (found["kind"] == "heartbeat")


def test_without_a_key_it_says_so(folder: Path, tmp_path: Path) -> None:
    (tmp_path / "other.toml").write_bytes((folder / "0.toml").read_bytes())
    done = CliRunner().invoke(main, ["status", "--config", str(tmp_path / "other.toml")])
    assert done.exit_code == 2
    assert "operator.json" in done.stderr
    assert "expected a key" in done.stderr
