"""`check` explains a valid configuration, and names everything wrong with any other; it starts and writes nothing."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner, Result
from driftwatch.cli import main
from driftwatch.cli.check_live import queue_bytes
from driftwatch.config import SoundcardSourceConfig, loads
from driftwatch.daemon.feed import CardFeed

CONFIGS = Path(__file__).parents[2] / "config"


def check(*arguments: str | Path) -> Result:
    return CliRunner().invoke(main, ["check", *map(str, arguments)], catch_exceptions=False)


def written(tmp_path: Path, text: str) -> Path:
    file = tmp_path / "a.toml"
    file.write_text(text, encoding="utf-8")
    return file


SOUND = """schema = 1
[[channel]]
name = "a.b"
[[mode]]
name = "m"
channel = "a.b"
search_hz = [820, 980]
"""


@pytest.mark.parametrize("name", ["demo", "bearing-housing", "first-try", "resonator-in-chamber", "post-mortem"])
def test_a_ready_configuration_is_explained(name: str) -> None:
    done = check(CONFIGS / f"{name}.toml")
    assert done.exit_code == 0
    assert done.stderr == ""
    for part in (
        "is valid",
        "Sources",
        "Channels",
        "Modes",
        "tells at best",
        *(["Bands"] if name != "first-try" else []),
        "Where it goes",
        "no protective",
    ):
        assert part in done.stdout


def test_the_explanation_names_windows_bands_and_where_the_rows_go() -> None:
    text = check(CONFIGS / "demo.toml").stdout
    for part in (
        "8192 samples/s, 2 inputs",
        "98.1 m/s2",
        "340 to 480",
        "32768",
        "frequency 408 to 425 Hz",
        "0.95 sure for 3 s",
        "inside by 1 Hz for 10 s",
        "Q over 75",
        ".state/demo.db, kept 7 days",
        "tcp://127.0.0.1:5571",
    ):
        assert part in text, part


def test_no_line_of_a_table_is_wider_than_a_page_where_there_is_no_terminal() -> None:
    lines = check(CONFIGS / "bearing-housing.toml").stdout.splitlines()
    assert max(len(line.rstrip()) for line in lines if "│" in line or "─" in line) <= 120


def test_json_is_one_object_with_the_same_figures() -> None:
    done = check("--json", CONFIGS / "demo.toml")
    (line,) = done.stdout.splitlines()
    said: dict[str, Any] = json.loads(line)
    assert (done.exit_code, done.stderr) == (0, "")
    assert (said["kind"], said["schema"], said["station"]) == ("check", 1, "washing plant infeed")
    assert [(mode["channel"], mode["mode"]) for mode in said["modes"]] == [
        ("drive end", "housing rocking"),
        ("drive end", "grate bar"),
        ("tail end", "cover plate"),
    ]
    first = said["modes"][0]
    assert (first["window_s"], first["window_samples"], first["step_samples"]) == (4.0, 32768, 8192)
    assert first["bands"][0]["priority"] == "high"
    assert all(one["frequency_std_hz"] > 0 and one["q_std"] > 0 for one in first["resolutions"])
    assert len(said["config_sha256"]) == 64


def test_json_of_a_file_for_replays_has_null_for_what_the_recording_knows(tmp_path: Path) -> None:
    said = json.loads(check("--json", written(tmp_path, SOUND)).stdout)
    assert (said["sources"], said["channels"][0]["unit"]) == ([], "FS")
    assert said["modes"][0]["window_samples"] is None
    assert said["modes"][0]["latency_s"] is None


WRONG = SOUND.replace("search_hz = [820, 980]", "search_hz = [980, 820]\nwindow = 4") + "[sotre]\n"


def test_everything_wrong_is_listed_a_line_each_and_the_exit_status_is_2(tmp_path: Path) -> None:
    done = check(written(tmp_path, WRONG))
    assert (done.exit_code, done.stdout) == (2, "")
    lines = done.stderr.splitlines()
    assert len(lines) == 3
    assert all(line.startswith("Error: ") for line in lines)
    for part in ('mode[1] "m" . search_hz: got [980, 820]', "did you mean window_s?", "did you mean store?"):
        assert part in done.stderr


def test_json_of_a_wrong_file_is_one_object_a_problem(tmp_path: Path) -> None:
    done = check("--json", written(tmp_path, WRONG))
    problems = [json.loads(line) for line in done.stdout.splitlines()]
    assert done.exit_code == 2
    assert [problem["kind"] for problem in problems] == ["problem"] * 3
    assert {key for problem in problems for key in problem} == {"kind", "key", "came", "expected", "remedy"}


def test_what_is_valid_and_not_served_is_explained_with_who_will_refuse_it(tmp_path: Path) -> None:
    relative = SOUND.replace("search_hz", 'methods = ["halfpower"]\nsearch_hz')
    done = check(written(tmp_path, relative + '[[mode.band]]\nname = "shift"\nlimits = "percent"\nlow = -2.0\n'))
    assert done.exit_code == 0
    assert "frequency over -2 % of baseline" in done.stdout
    assert done.stdout.count("run and replay refuse this:") == 2
    done = check(written(tmp_path, SOUND + '[[source]]\nname = "card"\nkind = "feed"\n'))
    assert done.exit_code == 0
    assert "Worth a second look" in done.stdout
    assert 'run refuses this: source[1] "card" . kind: got "feed", not served by this version' in done.stdout


# ---------------------------------------------------------------------------------------------- live


CARD = '[[source]]\nname = "card"\nkind = "soundcard"\n'


def test_a_sound_card_is_explained_as_it_will_be_opened(tmp_path: Path) -> None:
    """Left out, two inputs are opened at least; the latency has the device's block in it."""
    file = written(tmp_path, SOUND + CARD + "block_s = 0.05\n")
    text = check(file).stdout
    for part in ("the system's default input", "48000 samples/s", "inputs 1 to 2", "or 1 if it has no more",
                 "float32", "blocks of 50 ms", "without its device nothing is started"):  # fmt: skip
        assert part in text, part
    said = json.loads(check("--json", file).stdout)
    card = {"name": "card", "kind": "soundcard", "device": None, "rate_hz": 48000, "inputs": 2, "block_s": 0.05}
    assert said["sources"] == [card | {"sample_format": "float32", "wait_for_device": False}]
    quick = json.loads(check("--json", written(tmp_path, SOUND + CARD + "block_s = 0.01\n")).stdout)
    assert said["modes"][0]["latency_s"] - quick["modes"][0]["latency_s"] == pytest.approx(0.04)
    named = 'device = "usb audio"\ninputs = 1\nsample_format = "int16"\nwait_for_device = true\n'
    text = check(written(tmp_path, SOUND + CARD + named)).stdout
    for part in ('an input with "usb audio" in its', "input 1, int16", "at the start or later, is looked for"):
        assert part in text.replace("\n", " "), part


@pytest.mark.parametrize("settings", ["", "block_s = 0.5\n", "block_s = 0.002\nrate_hz = 96000\n", "inputs = 8\n"])
@pytest.mark.parametrize("queue_s", [2.0, 20.0, 60.0])
def test_the_memory_of_the_queue_is_what_the_run_takes(settings: str, queue_s: float) -> None:
    config = loads(SOUND + CARD + settings + f"[daemon]\nqueue_s = {queue_s}\n")
    (source,) = config.source
    assert isinstance(source, SoundcardSourceConfig)
    with CardFeed(source, 1, queue_s).make_ring() as ring:
        assert queue_bytes(config, source) == ring.shape.size


def test_the_disk_that_the_recorder_needs_is_told_and_what_the_budget_does_not_hold(tmp_path: Path) -> None:
    """Two inputs of 48000 values a second, of 4 bytes each, make 1.3824e9 bytes an hour."""
    record = "[record]\nkeep_hours = 24\nmost_gb = "
    file = written(tmp_path, SOUND + CARD + "inputs = 2\n" + record + "20\n")
    said = json.loads(check("--json", file).stdout)
    assert said["recording"] == {
        "folder": str(tmp_path / "recordings"),
        "keep_hours": 24.0,
        "most_gb": 20.0,
        "gb_per_hour": pytest.approx(1.3824),
        "hours": pytest.approx(20 / 1.3824),
    }
    text = check(file).stdout
    assert "2 inputs make 1.4 GB an hour; the last 14.5 h are kept: 20 GB of at most 20" in text
    assert "most_gb = 20 holds 14.5 h of 2 inputs, less than keep_hours = 24" in text
    assert "set most_gb to 34" in text
    assert "All inputs of card are recorded raw" in text
    enough = check(written(tmp_path, SOUND + CARD + "inputs = 2\n" + record + "34\n")).stdout
    assert "the last 24 h are kept: 33.2 GB of at most 34" in enough
    assert "less than keep_hours" not in enough


def test_a_recorder_of_a_recording_or_of_nothing_is_explained_without_figures(tmp_path: Path) -> None:
    source = '[[source]]\nname = "tape"\nkind = "recording"\npath = "a.wav"\n'
    text = check(written(tmp_path, SOUND + source + "[record]\nkeep_hours = 2\n")).stdout
    assert "the last 2 h, and at most 20 GB" in text
    text = check(written(tmp_path, SOUND + source)).stdout
    assert "raw samples are not kept" in text
    assert "the source waits when they are 20 s behind" in text
    assert "While it runs" not in check(written(tmp_path, SOUND)).stdout


def test_a_recorded_microphone_is_said_with_who_allowed_it(tmp_path: Path) -> None:
    microphone = SOUND.replace('name = "a.b"', 'name = "a.b"\nquantity = "pressure"')
    allowed = '[record]\nkeep_hours = 2\npressure_allowed_by = "the works council"\n'
    assert "recorded raw, as the works council allowed" in check(written(tmp_path, microphone + CARD + allowed)).stdout


# ---------------------------------------------------------------------------------------------- the rest


@pytest.mark.parametrize("usable", ["[900, 9000]", "[10, 900]", "[900, 950]", "[10, 100]"])
def test_a_search_band_that_leaves_what_the_sensor_is_usable_for_is_remarked_at_either_end(
    tmp_path: Path, usable: str
) -> None:
    file = written(tmp_path, SOUND.replace("[[mode]]", f"[channel.sensor]\nusable_hz = {usable}\n[[mode]]"))
    low, high = json.loads(usable)
    words = f'mode "m": search_hz leaves what the sensor on "a.b" is usable for, {low} to {high} Hz'
    assert check(file).stdout.count(words) == 1
    assert sum(words in line for line in json.loads(check("--json", file).stdout)["remarks"]) == 1


@pytest.mark.parametrize("usable", ["[820, 980]", "[10, 9000]"])
def test_a_search_band_inside_what_the_sensor_is_usable_for_is_not_remarked(tmp_path: Path, usable: str) -> None:
    file = written(tmp_path, SOUND.replace("[[mode]]", f"[channel.sensor]\nusable_hz = {usable}\n[[mode]]"))
    assert "usable" not in check(file).stdout


def test_a_missing_file_is_one_line_and_exit_status_2(tmp_path: Path) -> None:
    done = check(tmp_path / "no.toml")
    assert done.exit_code == 2
    assert (
        done.stderr
        == f"Error: {tmp_path}/no.toml: got no such file; expected a configuration in TOML; check the path\n"
    )


def test_checking_writes_nothing(tmp_path: Path) -> None:
    file = written(tmp_path, SOUND)
    check(file)
    assert list(tmp_path.iterdir()) == [file]


def test_the_help_ends_with_an_example() -> None:
    text = check("--help").stdout
    assert "Example: driftwatch check config/demo.toml" in text
