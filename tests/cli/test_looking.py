"""The commands that look into a store print what is there, as on the bus or as a table, and nothing else."""

from __future__ import annotations

import json
import re
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from click.testing import CliRunner, Result
from driftwatch.bus.wire import encode
from driftwatch.cli import looking, main
from driftwatch.records import Envelope, Method, Phase, Track, TrackStatus, fields_of
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]


@pytest.fixture(autouse=True)
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Work in an empty folder."""
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.fixture
def stored(folder: Path, measurement: Make, alert: Make, run_record: Make) -> list[Envelope]:
    """Write a small run to the default database and return its records."""
    track = {field.name: None for field in fields_of(Track)} | {
        "channel": "drive end",
        "mode": "rocking",
        "status": TrackStatus.HELD,
        "reason": "unexcited",
        "frequency_hz": 900.1234,
        "frequency_std_hz": 0.0123,
    }
    template = measurement(5)
    header = {field.name: getattr(template, field.name) for field in fields_of(Envelope)}
    records = [
        run_record(1),
        measurement(2),
        measurement(3, mode="bending", method=Method.RINGDOWN, usable=False, reasons=("short",)),
        alert(4),
        Envelope(**header, body=Track(**track)),
        run_record(6, phase=Phase.END, reason="end of the recordings"),
    ]
    with Writer.open("driftwatch.db", "line 3") as writer:
        writer.write(records)
    return records


def _call(*arguments: str) -> Result:
    return CliRunner().invoke(main, arguments)


def _objects(result: Result) -> list[dict[str, object]]:
    assert result.exit_code == 0, result.output
    return [json.loads(line) for line in result.stdout.splitlines()]


def test_json_is_the_encoding_of_the_wire_and_nothing_else(stored: list[Envelope]) -> None:
    assert _objects(_call("readings", "--json")) == [encode(stored[1]), encode(stored[2])]
    assert _objects(_call("readings", "--tracks", "--json")) == [encode(stored[4])]


@pytest.mark.parametrize(
    ("options", "sequences"),
    [
        (["--mode", "bending"], [3]),
        (["--method", "ambient"], [2]),
        (["--channel", "nowhere"], []),
        (["--since", "2026-01-01T00:00:03Z"], [3]),
        (["--until", "2026-01-01T01:00:03+01:00"], [2]),
        (["--limit", "1"], [3]),
        (["--run", "5f0e"], [2, 3]),
        (["--run", "last"], [2, 3]),
        (["--store", "driftwatch.db"], [2, 3]),
        (["--store", "sqlite:///driftwatch.db"], [2, 3]),
    ],
    ids=str,
)
def test_options_narrow_what_is_printed(stored: list[Envelope], options: list[str], sequences: list[int]) -> None:
    assert [found["sequence"] for found in _objects(_call("readings", "--json", *options))] == sequences


def test_a_table_shows_figures_with_their_uncertainty(stored: list[Envelope]) -> None:
    lines = _call("readings").stdout.splitlines()
    assert lines[0].split() == ["time", "channel", "mode", "method", "frequency", "/", "Hz", "Q", "(95", "%)", "status"]
    assert "2026-01-01T00:00:02.000Z  drive end  rocking  ambient" in lines[1]
    assert "900.13 ± 0.12" in lines[1]
    assert "40.5 (37.7 to 43.5)" in lines[1]
    assert lines[1].endswith("usable")
    assert lines[2].endswith("not usable, short")
    (line,) = _call("readings", "--tracks").stdout.splitlines()[1:]
    assert "900.123 ± 0.012" in line
    assert line.endswith("held, unexcited")


def test_the_store_of_a_configuration_is_found_relative_to_it(stored: list[Envelope], folder: Path) -> None:
    config = folder / "elsewhere" / "line.toml"
    config.parent.mkdir()
    config.write_text(
        'schema = 1\n[station]\nname = "s"\n[store]\nurl = "sqlite:///../driftwatch.db"\n'
        '[[channel]]\nname = "a"\nquantity = "acceleration"\nunit = "m/s2"\n'
        '[[mode]]\nname = "b"\nchannel = "a"\nsearch_hz = [800.0, 1000.0]\nwindow_s = 4.0\n'
    )
    assert len(_objects(_call("readings", "--json", "--config", str(config)))) == 2


def test_runs_tell_origin_length_counts_standing_alerts_and_end(stored: list[Envelope]) -> None:
    (found,) = _objects(_call("runs", "--json"))
    assert found["run"] == stored[0].run
    assert found["counts"] == {"measurement": 2, "track": 1, "alert": 1, "run": 2}
    assert found["reason"] == "end of the recordings"
    assert [one["alert"] for one in found["standing"]] == ["drive end/rocking/warning"]  # type: ignore[attr-defined]
    head, line = _call("runs").stdout.splitlines()
    assert head.startswith("run ")
    for part in (
        stored[0].run[:8],
        "replay",
        "5 s",
        "drive end/rocking/warning unacknowledged",
        "end of the recordings",
    ):
        assert part in line


@pytest.mark.parametrize(
    ("arguments", "told"),
    [
        (["readings"], "no driftwatch.db in the current folder (other databases here: other.db); expected --store"),
        (["readings", "--store", "none.db"], "does not exist; expected a database that `run` or `replay` has written"),
        (["runs", "--store", "other.db"], "is no database of driftwatch"),
        (["runs", "--store", "postgresql://host/x"], "expected a path or sqlite:///PATH"),
        (["runs", "--config", "none.toml"], "no such file"),
        (["runs", "--config", "a", "--store", "b"], "expected one of them"),
        (["readings", "--since", "noon"], "is not a time; expected RFC 3339"),
        (["readings", "--tracks", "--method", "ambient"], "a track point joins all methods"),
        (["readings", "--limit", "0"], "0 is not in the range"),
    ],
    ids=str,
)
def test_a_wrong_command_line_ends_with_2_and_says_what_to_do(folder: Path, arguments: list[str], told: str) -> None:
    (folder / "other.db").write_text("no database" * 100)
    result = _call(*arguments)
    assert result.exit_code == 2
    assert result.stdout == ""
    assert told in result.stderr
    assert "Traceback" not in result.stderr


def test_a_run_that_is_not_there_is_told_with_those_that_are(stored: list[Envelope]) -> None:
    result = _call("readings", "--run", "77")
    assert result.exit_code == 2
    assert f"no run begins with '77'; expected the begin of one of: {stored[0].run}" in result.stderr


def test_a_database_that_breaks_under_way_ends_with_1(stored: list[Envelope], measurement: Make, folder: Path) -> None:
    with Writer.open("driftwatch.db", "line 3") as writer:
        writer.write([measurement(sequence) for sequence in range(10, 5000)])
    raw = bytearray((folder / "driftwatch.db").read_bytes())
    raw[len(raw) // 2 :] = bytes(len(raw) - len(raw) // 2)
    (folder / "driftwatch.db").write_bytes(raw)
    result = _call("readings", "--json")
    assert result.exit_code == 1
    assert "the database is damaged" in result.stderr


def test_an_answer_that_is_empty_says_so_on_stderr_only(stored: list[Envelope]) -> None:
    result = _call("readings", "--mode", "nothing")
    assert (result.exit_code, result.stdout) == (0, "")
    assert "`driftwatch runs` shows what there is" in result.stderr


def test_output_cut_off_by_the_reader_ends_quietly(stored: list[Envelope], measurement: Make, folder: Path) -> None:
    with Writer.open("driftwatch.db", "line 3") as writer:
        writer.write([measurement(sequence) for sequence in range(10, 3000)])
    program = [sys.executable, "-c", "from driftwatch.cli import main; main()", "readings", "--json"]
    with subprocess.Popen(program, stdout=subprocess.PIPE, stderr=subprocess.PIPE, cwd=folder) as process:
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.readline()
        process.stdout.close()
        told = process.stderr.read()
    assert (process.returncode, told) == (0, b"")


@pytest.mark.parametrize("name", ["readings", "runs", "listen"])
def test_help_ends_its_text_with_an_example(name: str) -> None:
    result = _call(name, "--help")
    assert result.exit_code == 0
    assert f"Example: driftwatch {name}" in result.stdout


@pytest.mark.parametrize("command", ["readings", "runs"])
def test_a_table_on_a_narrow_terminal_keeps_every_figure(
    stored: list[Envelope], command: str, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setenv("COLUMNS", "80")
    monkeypatch.setattr(looking.sys.stdout, "isatty", lambda: True)
    with pytest.raises(SystemExit):
        main([command])
    shown = re.sub(r"\x1b\[\d*m", "", capsys.readouterr().out)  # without bold
    assert "…" not in shown
    assert f"2026-01-01T00:00:0{'2' if command == 'readings' else '1'}.000Z" in shown
    assert max(map(len, shown.splitlines())) <= 80
