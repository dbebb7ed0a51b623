"""``driftwatch simulate``."""

from __future__ import annotations

import json
import os
import resource
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile
from click.testing import CliRunner, Result
from driftwatch.cli import main
from driftwatch.config import load
from driftwatch.config.sources import SimulatedSourceConfig
from driftwatch.stream.recording import open_recordings
from driftwatch.stream.simulated import SimulatedSource

CONFIG = """
schema = 1
[station]
name = "bench"
[[source]]
name = "model"
kind = "simulated"
rate_hz = 4000
inputs = 2
seed = 7
noise = 0.01
[[source.resonator]]
frequency_hz = [[0.0, 900.0], [20.0, 950.0]]
q = 40.0
level = 0.1
impact_every_s = 0.7
impact_peak = 0.4
[[source.tone]]
input = 2
frequency_hz = 50.0
level = 0.1
[[channel]]
name = "drive end"
input = 1
quantity = "acceleration"
[[mode]]
name = "rocking"
channel = "drive end"
search_hz = [800.0, 1000.0]
"""


def simulate(*arguments: object) -> Result:
    return CliRunner().invoke(main, ["simulate", *map(str, arguments)])


def written(path: Path) -> tuple[dict[str, Any], dict[str, Any]]:
    truth = json.loads(path.with_suffix(".truth.json").read_text())
    found = soundfile.info(path)
    return truth, {"rate_hz": found.samplerate, "inputs": found.channels, "samples": found.frames}


@pytest.fixture
def out(tmp_path: Path) -> Path:
    (tmp_path / "folder").mkdir()
    return tmp_path / "folder" / "out.wav"


@pytest.fixture
def config(tmp_path: Path) -> Path:
    path = tmp_path / "bench.toml"
    path.write_text(CONFIG)
    return path


# ---------------------------------------------------------------------------------------------- what is written


def test_the_recording_and_its_truth_agree_with_what_was_asked_for(out: Path) -> None:
    told = simulate(
        out, "--mode", "900,40", "--mode", "300,80,0.05", "--tone", "50,0.2", "--rate", 4000, "--seconds", 5, "--seed",
        3, "--impact-every", 2, "--impact-peak", 0.3, "--quantity", "velocity",
    )  # fmt: skip
    assert told.exit_code == 0, told.output
    truth, found = written(out)
    assert found == {"rate_hz": 4000, "inputs": 1, "samples": 20_000}
    assert truth.items() >= found.items()
    assert truth["seed"] == 3
    first, second = truth["resonators"]
    assert (first["frequency_hz"], first["q"], first["level"], first["quantity"]) == (900, 40, 0.1, "velocity")
    assert (second["frequency_hz"], second["q"], second["level"]) == (300, 80, 0.05)
    assert (first["impacts_s"], first["impact_peak"]) == ([2.0, 4.0], 0.3)
    assert truth["tones"] == [{"input": 1, "frequency_hz": 50, "level": 0.2}]


def test_the_samples_hold_the_resonance_where_the_truth_says(out: Path) -> None:
    """The strongest bins of 60 s lie within a half-power width of fn."""
    assert simulate(out, "--mode", "900,40", "--rate", 4000, "--quantity", "velocity").exit_code == 0
    x, rate = soundfile.read(out)
    power = np.abs(np.fft.rfft(x)) ** 2
    strongest = np.fft.rfftfreq(len(x), 1 / rate)[np.argsort(power)[-20:]]
    assert np.max(np.abs(strongest - 900)) < 900 / 40


def test_a_recording_of_a_configuration_holds_its_sources_samples_bit_for_bit(out: Path, config: Path) -> None:
    assert simulate(out, "--config", config, "--seconds", 9).exit_code == 0
    described = load(config).source[0]
    assert isinstance(described, SimulatedSourceConfig)
    direct = next(SimulatedSource(described, 0).blocks(36_000)).samples
    recorded = next(open_recordings([out], 0, "model").blocks(36_000)).samples
    assert np.array_equal(recorded, direct)
    truth, found = written(out)
    assert found == {"rate_hz": 4000, "inputs": 2, "samples": 36_000}
    assert truth["resonators"][0]["frequency_hz"] == [[0.0, 900.0], [20.0, 950.0]]
    assert truth["resonators"][0]["impacts_s"] == pytest.approx([0.7 * k for k in range(1, 13)])


def test_the_same_seed_gives_the_same_samples_and_another_does_not(tmp_path: Path) -> None:
    samples = []
    for name, seed in (("a", 0), ("b", 0), ("c", 1)):
        path = tmp_path / f"{name}.wav"
        assert simulate(path, "--mode", "900,40", "--seconds", 1, "--seed", seed).exit_code == 0
        samples.append(soundfile.read(path)[0])
    assert np.array_equal(samples[0], samples[1])
    assert not np.array_equal(samples[0], samples[2])


def test_json_prints_one_object_and_nothing_else(out: Path) -> None:
    told = simulate(out, "--mode", "900,40", "--seconds", 1, "--json", "--subtype", "pcm24")
    assert told.exit_code == 0
    assert json.loads(told.stdout) == {
        "recording": str(out),
        "truth": str(out.with_suffix(".truth.json")),
        "container": "WAV",
        "subtype": "pcm24",
        "rate_hz": 48_000,
        "inputs": 1,
        "samples": 48_000,
        "seconds": 1.0,
        "seed": 0,
        "clipped": 0,
    }
    assert told.stdout.count("\n") == 1


def test_clipping_is_counted_and_told(out: Path) -> None:
    told = simulate(out, "--tone", "50,2.0", "--seconds", 1, "--subtype", "pcm16", "--noise", 0, "--json")
    assert told.exit_code == 0
    expected = int(np.sum(np.abs(np.sin(2 * np.pi * 50 * np.arange(48_000) / 48_000)) > 1 / (2 * np.sqrt(2))))
    assert json.loads(told.stdout)["clipped"] == pytest.approx(expected, abs=200)  # 2 a half wave, by rounding
    assert "values lay beyond full scale" in told.stderr


# ---------------------------------------------------------------------------------------------- what is refused


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ([], "nothing to record"),
        (["--mode", "900"], "'900' is not FREQ,Q[,LEVEL]"),
        (["--mode", "900,40,1,1"], "is not FREQ,Q[,LEVEL]"),
        (["--mode", "900,forty"], "is not FREQ,Q[,LEVEL]"),
        (["--tone", "900"], "'900' is not FREQ,LEVEL"),
        (["--mode", "900,0.4"], "--mode number 1 Q: got 0.4; expected values over 0.5"),
        (["--mode", "900,40", "--mode", "nan,40"], "--mode number 2 FREQ: got nan"),
        (["--mode", "30000,40"], "--mode number 1 FREQ: got 30000.0; expected frequencies under half the rate"),
        (["--mode", "900,40", "--rate", "0"], "--rate: got 0; input should be greater than or equal to 1"),
        (["--mode", "900,40", "--noise", "-1"], "--noise: got -1.0"),
        (["--mode", "900,40", "--impact-every", "0"], "--mode number 1 --impact-every: got 0.0"),
        (["--mode", "900,40", "--seconds", "0"], "--seconds: got 0; expected a sample's length or more"),
        (["--mode", "900,40", "--seconds", "nan"], "--seconds: got nan"),
        (["--mode", "900,40", "--config", "a.toml", "--rate", "5"], "--rate, --mode beside --config"),
        (["--config", "missing.toml"], "missing.toml: got no such file"),
    ],
)
def test_what_cannot_be_recorded_is_refused_before_anything_is_written(
    out: Path, arguments: list[str], words: str
) -> None:
    told = simulate(out, *arguments)
    assert told.exit_code == 2
    assert words in told.stderr
    assert "PydanticUndefined" not in told.stderr
    assert not told.stdout
    assert not list(out.parent.iterdir())


def test_a_configuration_without_a_simulated_source_is_refused(out: Path, config: Path) -> None:
    text = CONFIG[: CONFIG.index("[[source]]")] + CONFIG[CONFIG.index("[[channel]]") :]
    config.write_text(text)
    told = simulate(out, "--config", config)
    assert told.exit_code == 2
    assert "0 simulated sources; expected one" in told.stderr


def test_nothing_is_replaced_without_force(out: Path) -> None:
    truth = out.with_suffix(".truth.json")
    truth.write_text("precious")
    told = simulate(out, "--mode", "900,40", "--seconds", 1)
    assert told.exit_code == 2
    assert f"{truth}: exists" in told.stderr
    assert truth.read_text() == "precious"
    assert not out.exists()
    assert simulate(out, "--mode", "900,40", "--seconds", 1, "--force").exit_code == 0
    assert json.loads(truth.read_text())["samples"] == 48_000


def test_every_fault_of_the_target_is_told_at_once(tmp_path: Path) -> None:
    told = simulate(tmp_path / "none" / "a.flac", "--mode", "900,40")
    assert told.exit_code == 2
    assert "expected one that ends in .wav" in told.stderr
    assert "expected one that exists" in told.stderr


# ---------------------------------------------------------------------------------------------- what goes wrong


def start(out: Path, *arguments: str, **more: Any) -> subprocess.Popen[str]:
    line = [sys.executable, "-m", "driftwatch", "simulate", str(out), "--mode", "900,40", *arguments]
    return subprocess.Popen(line, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, **more)


def small_files_only() -> None:
    signal.signal(signal.SIGXFSZ, signal.SIG_IGN)  # the write fails instead, as on a full disk
    resource.setrlimit(resource.RLIMIT_FSIZE, (1_000_000, 1_000_000))


def test_a_disk_that_takes_no_more_is_told_in_one_line_and_nothing_stays(out: Path) -> None:
    process = start(out, "--seconds", "60", preexec_fn=small_files_only)
    printed, told = process.communicate(timeout=60)
    assert process.returncode == 1
    assert printed == ""
    assert "was not written" in told
    assert "Traceback" not in told
    assert not list(out.parent.iterdir())


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_a_stop_in_the_midst_leaves_nothing(out: Path, number: signal.Signals) -> None:
    process = start(out, "--seconds", "20000")
    give_up = time.monotonic() + 60
    while not any(path.suffix == ".part" and path.stat().st_size > 10_000 for path in out.parent.iterdir()):
        assert time.monotonic() < give_up
        assert process.poll() is None
        time.sleep(0.05)
    os.kill(process.pid, number)
    process.communicate(timeout=60)
    assert process.returncode not in (0, -number)
    assert not list(out.parent.iterdir())


def test_the_help_ends_with_examples_that_work(out: Path) -> None:
    """Each example's line, with what it names put in a folder of the test's own and made short."""
    shown = simulate("--help").stdout
    examples = [line.split()[3:] for line in shown.splitlines() if line.strip().startswith("Example: ")]
    assert len(examples) == 3
    root = Path(__file__).parent.parent.parent
    for name, *rest in examples:
        arguments = [str(root / part) if part.endswith(".toml") else part for part in rest]
        told = simulate(out.parent / name, *arguments, "--seconds", 1)
        assert told.exit_code == 0, told.output
