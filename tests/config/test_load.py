"""A valid file loads, with every default where it was promised."""

from __future__ import annotations

import hashlib
import pickle
import subprocess
import sys
from pathlib import Path

import pytest
from driftwatch.config import Configuration, load, loads
from driftwatch.records import Method, Priority
from pydantic import ValidationError

SHORTEST = """schema = 1
[[channel]]
name = "drive end"
[[mode]]
name = "rocking"
channel = "drive end"
search_hz = [820, 980]
[[mode.band]]
name = "warning"
low = 890
"""

EVERYTHING = """
schema = 1

[station]
name = "line 3 infeed"
timezone = "UTC"
shifts = ["06:00", "14:00", "22:00"]

[[source]]
name = "card"
kind = "soundcard"
device = "measurement"
rate_hz = 48000

[[source]]
name = "bench"
kind = "simulated"
rate_hz = 8192
inputs = 2
seed = 7
pace = 0
seconds = 60
noise = 0.001
[[source.resonator]]
input = 2
frequency_hz = [[0, 900], [60.0, 880.0]]
q = 40
level = 0.1
quantity = "velocity"
impact_every_s = 5.0
impact_peak = 0.5
[[source.tone]]
frequency_hz = 50
level = 0.01

[[source]]
name = "tape"
kind = "recording"
path = "tape/run.wav"
pace = 0

[[source]]
name = "plant"
kind = "feed"

[[channel]]
name = "drive end"
source = "card"
input = 1
quantity = "acceleration"
unit = "m/s2"
scale = 98.1
role = "response"
[channel.sensor]
serial = "A 17"
calibrated = 2026-01-31
mounting = "stud"
location = "bearing 1"
direction = "+Z"
usable_hz = [1.0, 9000.0]

[[channel]]
name = "table"
source = "card"
input = 2
role = "reference"

[[regime]]
name = "running"
when = { covariate = "speed", from = 1470.0, to = 1490.0 }
settle_s = 60.0
judge = true

[[regime]]
name = "loaded"
when = { level = "drive end", from = 0.2 }

[[mode]]
name = "housing rocking"
channel = "drive end"
reference = "table"
search_hz = [820.0, 980.0]
methods = ["ambient", "ringdown", "halfpower", "driven"]
window_s = 4.0
step_s = 1.0
regimes = ["running", "loaded"]
[[mode.band]]
name = "warning"
quantity = "frequency"
limits = "absolute"
low = 890.0
high = 915.0
confidence = 0.95
on_delay_s = 10.0
off_delay_s = 30.0
deadband = 0.5
priority = "urgent"
[[mode.band]]
name = "shift"
quantity = "q"
limits = "percent"
low = -5.0
high = 5.0

[[alert]]
name = "no data"
condition = "no_data"
on_delay_s = 30.0
priority = "high"

[store]
url = "sqlite:///rows.db"
keep_days = 90

[bus]
publish = "tcp://127.0.0.1:6571"
control = "tcp://localhost:6572"
"""


def test_a_file_of_ten_lines_loads_and_every_default_is_filled_in(tmp_path: Path) -> None:
    config = loads(SHORTEST, tmp_path)
    (channel,), (mode,) = config.channel, config.mode
    (band,) = mode.band
    assert (channel.source, channel.input, channel.quantity, channel.role) == (None, 1, "acceleration", "response")
    assert (channel.scale, channel.unit) == (1.0, "FS")
    assert (mode.methods, mode.window_s, mode.step_s, mode.regimes) == ((Method.AMBIENT,), 4.0, 4.0, ())
    assert (band.quantity, band.limits, band.low, band.high) == ("frequency", "absolute", 890.0, None)
    assert (band.confidence, band.on_delay_s, band.off_delay_s, band.deadband) == (0.95, 10.0, 30.0, 0.0)
    assert band.priority is Priority.MEDIUM
    assert (config.station.name, config.station.timezone, config.station.shifts) == ("station", "UTC", ())
    assert (config.store.url, config.store.keep_days) == (f"sqlite:///{tmp_path}/driftwatch.db", 90.0)
    assert (config.bus.publish, config.bus.control) == ("tcp://127.0.0.1:5571", "tcp://127.0.0.1:5572")


def test_every_key_of_the_design_is_understood(tmp_path: Path) -> None:
    config = loads(EVERYTHING, tmp_path)
    assert [source.kind for source in config.source] == ["soundcard", "simulated", "recording", "feed"]
    assert config.regime[0].when.from_ == 1470.0
    assert config.regime[1].when.level == "drive end"
    assert config.mode[0].band[1].limits == "percent"
    assert str(config.channel[0].sensor.calibrated) == "2026-01-31"


def test_a_profile_is_corner_points_and_a_number_is_a_profile_of_one(tmp_path: Path) -> None:
    config = loads(EVERYTHING, tmp_path)
    source = config.source[1]
    assert source.kind == "simulated"
    (resonator,) = source.resonator
    assert resonator.frequency_hz == ((0.0, 900.0), (60.0, 880.0))
    assert resonator.q == ((0.0, 40.0),)
    assert resonator.impact_first_s == resonator.impact_every_s == 5.0


@pytest.mark.parametrize("text", [SHORTEST, EVERYTHING])
def test_a_loaded_configuration_written_out_loads_to_the_same(text: str, tmp_path: Path) -> None:
    config = loads(text, tmp_path)
    again = Configuration.model_validate(config.model_dump(mode="json", by_alias=True))
    assert again == config
    assert pickle.loads(pickle.dumps(config)) == config  # noqa: S301 our own bytes; processes are handed it so


@pytest.mark.parametrize(
    ("lines", "scale", "unit"),
    [
        ("", 1.0, "FS"),
        ("scale = 98.1", 98.1, "m/s2"),
        ("scale = 1.0", 1.0, "m/s2"),
        ('unit = "g"', 1.0, "g"),
        ('quantity = "pressure"\nscale = 20', 20.0, "Pa"),
        ('quantity = "voltage"\nscale = 10', 10.0, "V"),
        ('quantity = "force"\nscale = 10', 10.0, "N"),
        ('quantity = "velocity"\nscale = 10', 10.0, "m/s"),
        ('quantity = "displacement"\nscale = 10', 10.0, "m"),
    ],
)
def test_a_channel_without_scale_and_unit_is_in_full_scale_and_with_a_scale_in_si(
    lines: str, scale: float, unit: str
) -> None:
    channel = loads(SHORTEST.replace('[[channel]]\nname = "drive end"', f'[[channel]]\nname = "drive end"\n{lines}'))
    assert (channel.channel[0].scale, channel.channel[0].unit) == (scale, unit)


@pytest.mark.parametrize(
    ("search", "window_s"), [("[820, 980]", 4.0), ("[100, 108]", 4.0), ("[100, 102]", 16.0), ("[10, 10.5]", 64.0)]
)
def test_a_window_left_out_puts_at_least_32_bins_into_the_search_band(search: str, window_s: float) -> None:
    text = SHORTEST.split("[[mode.band]]")[0].replace("[820, 980]", search)
    mode = loads(text).mode[0]
    assert mode.window_s == mode.step_s == window_s
    assert window_s * mode.search_hz.width >= 32


def test_a_channel_takes_the_only_source_unnamed() -> None:
    text = SHORTEST + '[[source]]\nname = "sim"\nkind = "simulated"\nrate_hz = 8192\n'
    config = loads(text)
    assert config.channel[0].source == "sim"
    assert config.source_of(config.channel[0]) is config.source[0]


def test_paths_are_relative_to_the_file(tmp_path: Path) -> None:
    file = tmp_path / "config" / "a.toml"
    file.parent.mkdir()
    file.write_text(
        SHORTEST + '[[source]]\nname = "tape"\nkind = "recording"\npath = "run.wav"\n'
        '[store]\nurl = "sqlite:///../state/rows.db"\n'
    )
    config = load(file)
    assert config.store.url == f"sqlite:///{tmp_path}/state/rows.db"
    source = config.source[0]
    assert source.kind == "recording"
    assert source.path == str(tmp_path / "config" / "run.wav")


def test_a_loaded_file_knows_its_path_and_the_hash_of_its_bytes(tmp_path: Path) -> None:
    file = tmp_path / "a.toml"
    raw = b"\xef\xbb\xbf" + SHORTEST.replace("\n", "\r\n").encode()  # as an editor elsewhere leaves it
    file.write_bytes(raw)
    config = load(file)
    assert config.path == file
    assert config.sha256 == hashlib.sha256(raw).hexdigest()


def test_a_configuration_is_frozen() -> None:
    config = loads(SHORTEST)
    with pytest.raises(ValidationError, match="frozen"):
        config.channel[0].scale = 2.0  # type: ignore[misc]


def test_letters_of_any_alphabet_make_a_name_in_composed_form() -> None:
    config = loads(SHORTEST.replace("drive end", "Geha\u0308use 2"))
    assert config.channel[0].name == config.mode[0].channel == "Geh\u00e4use 2"


def test_reading_a_configuration_loads_nothing_heavy() -> None:
    code = (
        "import sys, driftwatch.config; print([m for m in ('numpy', 'scipy', 'sqlalchemy', 'zmq') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
