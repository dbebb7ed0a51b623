"""Listening prints what the bus carries, and tells silence and holes on stderr."""

from __future__ import annotations

import json
import select
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
import zmq
from click.testing import CliRunner
from driftwatch.bus.publisher import Publisher
from driftwatch.bus.schema import schema
from driftwatch.bus.wire import encode
from driftwatch.cli import listen, main
from driftwatch.cli.figures import in_words
from driftwatch.cli.listen_asking import Way
from driftwatch.records import Envelope, Heartbeat, Origin, TimeQuality
from hypothesis import given, settings
from hypothesis import strategies as st

Make = Callable[..., Envelope]
RUN = "5f0e8f0e-1111-4222-8333-123456789abc"


def _beat(sequence: int) -> Heartbeat:
    return Heartbeat("line 3", RUN, Origin.REPLAY, 0, TimeQuality.FILE, 75.0, 0.1, 0.0, None, sequence)


@pytest.fixture
def publisher() -> Iterator[Publisher]:
    with Publisher("tcp://127.0.0.1:*") as opened:
        yield opened


def _start(*arguments: str) -> subprocess.Popen[str]:
    code = "from driftwatch.cli import main; main()"
    return subprocess.Popen(
        [sys.executable, "-c", code, "listen", *arguments], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )


def _until_it_hears(process: subprocess.Popen[str], send: Callable[[], None]) -> str:
    """Send again and again until the first line is printed, and return that."""
    assert process.stdout is not None
    while not select.select([process.stdout], [], [], 0.05)[0]:
        send()
    return process.stdout.readline()


def test_the_last_value_comes_first_and_then_json_lines_are_the_objects_as_they_came(
    publisher: Publisher, measurement: Make, alert: Make
) -> None:
    publisher.publish([measurement(1)])
    with _start(publisher.endpoint, "--topic", "measurement/drive_end/rocking", "--count", "3", "--json") as process:
        first = _until_it_hears(process, publisher.serve)
        publisher.publish([measurement(2), alert(3), measurement(4, previous=2)])
        out, told = process.communicate(timeout=20)
    assert json.loads(first) == encode(measurement(1)) | {"repeated": True}
    assert [json.loads(line) for line in out.splitlines()] == [
        encode(measurement(2)),
        encode(measurement(4, previous=2)),
    ]
    assert process.returncode == 0
    assert told == ""


def test_a_hole_is_told_by_the_numbers(publisher: Publisher, measurement: Make) -> None:
    with _start(publisher.endpoint, "--json") as process:
        _until_it_hears(process, lambda: publisher.heartbeat(_beat(0)))
        publisher.publish([measurement(1), measurement(4)])
        publisher.heartbeat(_beat(6))
        publisher.publish([measurement(7)])
        assert process.stdout is not None
        while json.loads(process.stdout.readline())["sequence"] != 7:
            pass
        process.send_signal(signal.SIGINT)
        _, told = process.communicate(timeout=20)
    assert process.returncode == 0
    holes = [line for line in told.splitlines() if "Hole" in line]
    assert holes == [
        "Hole: missed records after sequence 1 and before 4",
        "Hole: missed records after sequence 4 and before 7",
    ]


def test_people_get_a_line_each(publisher: Publisher, measurement: Make, alert: Make) -> None:
    with _start(publisher.endpoint, "--topic", "measurement", "--topic", "alert") as process:
        publisher.publish([measurement(1)])
        first = _until_it_hears(process, publisher.serve)
        publisher.publish([alert(2)])
        assert process.stdout is not None
        line = process.stdout.readline()
        while "alert" not in line:
            line = process.stdout.readline()
        process.send_signal(signal.SIGINT)
        process.communicate(timeout=20)
    assert first.startswith(
        "2026-01-01T00:00:01.000Z  measurement/drive_end/rocking  ambient  900.12 ± 0.12 Hz  Q 40.5"
    )
    assert first.endswith("(last value)\n")
    assert "alert/drive_end/rocking/warning  normal -> unacknowledged  medium" in line


def test_silence_is_told_once_with_what_may_be_wrong(
    publisher: Publisher, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr(listen, "QUIET_S", 0.05)
    messages = listen._messages(Way(publisher.endpoint), ())
    done = threading.Event()

    def speak() -> None:
        while not done.wait(0.5):  # ten times the silence allowed
            publisher.heartbeat(_beat(1))

    thread = threading.Thread(target=speak)
    thread.start()
    next(messages)
    done.set()
    thread.join()
    messages.close()  # type: ignore[attr-defined]
    told = capsys.readouterr()
    assert told.out == ""
    assert told.err.count(f"Nothing came from {publisher.endpoint} for 0.05 s, not even a heartbeat") == 1


def test_an_endpoint_that_is_none_ends_with_2() -> None:
    with _start("nowhere") as process:
        _, told = process.communicate(timeout=20)
    assert process.returncode == 2
    assert "expected tcp://HOST:PORT, such as tcp://127.0.0.1:5571" in told
    assert "Traceback" not in told


@pytest.mark.parametrize(
    ("arguments", "told"),
    [
        (["--into", "a.jsonl"], "without a way to ask for what was missed; expected --config CONFIG or --key FILE"),
        (["--into", "a.jsonl", "--json", "--config", "demo.toml"], "got --into with --json; expected one of them"),
        (["--config", "demo.toml", "--key", "a.json"], "got both --config and --key; expected one of them"),
        (["--key", "a.json"], "a.json"),
        (["--config", "b.toml"], "b.toml"),
    ],
)
def test_what_cannot_be_listened_to_so_ends_with_2_and_makes_no_file(
    arguments: list[str], told: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    demo = Path(__file__).parent.parent.parent / "config" / "demo.toml"
    (tmp_path / "demo.toml").write_bytes(demo.read_bytes())
    monkeypatch.chdir(tmp_path)
    done = CliRunner().invoke(main, ["listen", *arguments])
    assert (done.exit_code, done.stdout) == (2, "")
    assert told in " ".join(done.stderr.split())
    assert [path.name for path in tmp_path.iterdir()] == ["demo.toml"]


def test_a_file_that_holds_something_else_is_refused_and_left_alone(tmp_path: Path) -> None:
    (tmp_path / "notes.txt").write_text("my notes\n")
    demo = Path(__file__).parent.parent.parent / "config" / "demo.toml"
    done = CliRunner().invoke(main, ["listen", "--config", str(demo), "--into", str(tmp_path / "notes.txt")])
    assert done.exit_code == 2
    assert "ends with b'my notes" in done.stderr
    assert (tmp_path / "notes.txt").read_text() == "my notes\n"


def test_the_schema_is_printed_as_json() -> None:
    done = CliRunner().invoke(main, ["listen", "--schema"])
    assert (done.exit_code, json.loads(done.stdout)) == (0, schema())


@pytest.mark.parametrize("name", ["readings", "runs", "listen"])
def test_the_help_of_a_command_that_looks_loads_nothing_slow(name: str) -> None:
    code = "import sys; from driftwatch.cli import main; main([sys.argv[1], '--help'], standalone_mode=False); "
    code += "print(sorted({'numpy', 'scipy', 'sqlalchemy', 'zmq', 'pydantic', 'rich'} & set(sys.modules)))"
    done = subprocess.run([sys.executable, "-c", code, name], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "[]"


@given(data=st.data())
@settings(deadline=None)
def test_a_message_of_every_kind_has_its_words(any_envelope: st.SearchStrategy[Envelope], data: Any) -> None:
    assert in_words(encode(data.draw(any_envelope)))


def test_another_programs_messages_end_with_1_and_say_what_was_expected() -> None:
    with zmq.Context() as context, context.socket(zmq.PUB) as socket:
        socket.setsockopt(zmq.LINGER, 0)
        port = socket.bind_to_random_port("tcp://127.0.0.1")
        with _start(f"tcp://127.0.0.1:{port}") as process:
            while process.poll() is None:
                socket.send(b"hello")
                time.sleep(0.05)
            _, told = process.communicate(timeout=20)
    assert process.returncode == 1
    assert "sent b'hello', which is no record; expected a daemon of driftwatch" in told
    assert "Traceback" not in told
