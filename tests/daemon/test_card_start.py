"""A daemon on a sound card begins, changes and ends as it was asked to, or says in a line why it does not begin."""

from __future__ import annotations

import os
import shutil
import signal
import subprocess
from collections.abc import Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from card_files import (
    LIMIT_S,
    NS,
    PROGRAM,
    RATE,
    STEP_S,
    WINDOW_S,
    Floats,
    Row,
    configuration,
    ns_of,
    place_in,
    recorded,
    stored,
)
from live_card import Daemon

from soundrig import Rig

NO_PORTAUDIO = 'mount --bind /dev/null /etc/ld.so.cache && exec "$@"'
"""In a mount namespace: the system's loader then knows no library by name."""

STAND_IN = """
import ctypes.util
found = ctypes.util.find_library
ctypes.util.find_library = lambda name: None if name == "portaudio" else found(name)
"""
"""Where nothing can be hidden: the search for the library is told that there is none; all else is real."""

BUSY = """
import sys
if "driftwatch.daemon.process" in sys.orig_argv and "capture" in sys.orig_argv:
    import fcntl, os, pathlib, pty, termios
    import driftwatch.daemon.card as card
    found = card.find_input
    def find_input(*words):
        device = found(*words)
        terminal = pty.openpty()[1]
        fcntl.ioctl(terminal, termios.TIOCEXCL)  # whoever opens it now is told by the kernel that it is busy
        conf = pathlib.Path(os.environ["ALSA_CONFIG_PATH"])
        text = conf.read_text()
        plugin = text.splitlines()[0].replace("pulse", "oss")
        busy = f'pcm.rig {{ type oss device "{os.ttyname(terminal)}" }}'
        new = conf.with_suffix(".new")
        new.write_text(text.replace("pcm.rig {", "pcm.away {") + plugin + chr(10) + busy + chr(10))
        os.replace(new, conf)
        return device
    card.find_input = find_input
"""
"""Between the list and the opening another program takes the device: a device file opened exclusively."""


NO_DATA_S = 2.0
NO_DATA = f"""
[[alert]]
name = "no data"
condition = "no_data"
on_delay_s = {NO_DATA_S}
"""

BAND = """[[mode.band]]
name = "high"
low = 1600.0
on_delay_s = 1.0
"""
"""As it stands in the configuration."""

NEW_BAND = BAND.replace('"high"', '"low"').replace("low = 1600.0", "high = 1500.0")
"""Left as well, on the other side."""


# ---------------------------------------------------------------------------------------------- what lasts


@dataclass(frozen=True, slots=True)
class Run:
    """A live run that ended."""

    rows: list[Row]
    errors: list[str]
    stretches: list[tuple[int, Floats]]
    sequences: list[int]  # stored
    status: int
    left: dict[int, str]  # processes
    before: int = 0  # rows told before what the test is about
    second: subprocess.CompletedProcess[str] | None = None  # another daemon


def run_that_waits(folder: Path, wav: Path) -> Run:
    """Begin without the device, which comes when its absence has been told."""
    config = configuration(folder, source="wait_for_device = true", rest=NO_DATA)
    with Rig() as rig:
        rig.unload_sink()
        with Daemon(config, rig.env) as daemon:
            before = daemon.row(is_no_data)
            rig.load_sink()
            rig.play(wav)
            daemon.measuring()
            status = daemon.stop(signal.SIGTERM)
            return ended(daemon, status, before)


def run_that_changes(folder: Path, wav: Path) -> Run:
    """Reload once with a new band and once with what cannot be reloaded, beside another daemon that wants to run."""
    config = configuration(folder, daemon="workers = 2")
    (folder / "other").mkdir()
    other = configuration(folder / "other", daemon='state = "../state"')
    text = config.read_text()
    with Rig() as rig:
        rig.play(wav)
        with Daemon(config, rig.env) as daemon:
            daemon.measuring()
            second = run(other, rig.env)
            config.write_text(text.replace(BAND, BAND + NEW_BAND))
            daemon.process.send_signal(signal.SIGHUP)
            before = daemon.row(lambda row: row["kind"] == "command")
            daemon.row(lambda row: is_unacknowledged(row, "b/second/low"))
            config.write_text(text.replace("window_s = 2.0", "window_s = 4.0"))
            daemon.process.send_signal(signal.SIGHUP)
            daemon.row(lambda row: row["kind"] == "command", before + 1)
            daemon.measuring(daemon.reached)
            status = daemon.stop(signal.SIGTERM)
            return ended(daemon, status, before, second)


def ended(daemon: Daemon, status: int, before: int, second: subprocess.CompletedProcess[str] | None = None) -> Run:
    config = daemon.config
    return Run(daemon.rows, daemon.errors, recorded(config), stored(config), status, daemon.processes(), before, second)


def is_no_data(row: Row) -> bool:
    return row["kind"] == "alert" and row["condition"] == "no_data" and row["state"] == "unacknowledged"


def is_unacknowledged(row: Row, alert: str) -> bool:
    return row["kind"] == "alert" and (row["alert"], row["state"]) == (alert, "unacknowledged")


@pytest.fixture(scope="module", autouse=True)
def runs(pool: ThreadPoolExecutor, wav: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, Future[Run]]:
    """Let them run while the rest is tested."""
    made = {"waits": run_that_waits, "changes": run_that_changes}
    return {name: pool.submit(one, tmp_path_factory.mktemp(name), wav) for name, one in made.items()}


@pytest.fixture
def waited(runs: dict[str, Future[Run]]) -> Run:
    return runs["waits"].result()


@pytest.fixture
def changed(runs: dict[str, Future[Run]]) -> Run:
    return runs["changes"].result()


# ---------------------------------------------------------------------------------------------- refusals


@pytest.fixture(scope="module")
def server(pool: ThreadPoolExecutor) -> Iterator[Rig]:
    """A sound card for all that is refused; nothing is measured on it."""
    with Rig() as rig:
        yield rig


def run(config: Path, env: dict[str, str], *before: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [*before, *PROGRAM, "run", str(config), "--json"], env=env, capture_output=True, text=True, timeout=LIMIT_S
    )


def refused(done: subprocess.CompletedProcess[str], config: Path) -> str:
    """Return the one line that a refusal is; see to it that nothing came of it, not even a folder."""
    assert (done.returncode, done.stdout) == (2, ""), done.stderr
    (line,) = done.stderr.splitlines()
    assert [path.name for path in config.parent.iterdir() if not path.name.startswith("sitecustom")] == [config.name]
    return line


def test_a_device_that_is_not_there_is_refused_with_those_that_are(server: Rig, tmp_path: Path) -> None:
    """And leaves no state folder that is named apart; below none that is not."""
    config = configuration(tmp_path, device="probe", daemon='state = "apart"')
    line = refused(run(config, server.env), config)
    assert "no sound input is called 'probe'" in line
    assert all(f"'{name}, ALSA'" in line for name in ("rig", "rigfile", "default"))


def test_a_name_that_means_several_is_refused_with_each_of_them(server: Rig, tmp_path: Path) -> None:
    config = configuration(tmp_path, device="ri")
    line = refused(run(config, server.env), config)
    assert "'ri' means 2 sound inputs" in line
    assert "'rig, ALSA'" in line
    assert "'rigfile, ALSA'" in line


def test_more_inputs_than_there_are_are_refused_with_how_many_there_are(server: Rig, tmp_path: Path) -> None:
    config = configuration(tmp_path, source="inputs = 33", record=False)
    assert "'rig' has 32 inputs; expected at least 33" in refused(run(config, server.env), config)


def test_a_device_in_use_is_refused_as_such(rig: Rig, tmp_path: Path) -> None:
    config = configuration(tmp_path)
    (tmp_path / "sitecustomize.py").write_text(BUSY)
    lesser = ["setpriv", "--bounding-set", "-sys_admin", "--inh-caps", "-sys_admin"] if os.geteuid() == 0 else []
    done = run(config, rig.env | {"PYTHONPATH": str(tmp_path), "PYTHONDONTWRITEBYTECODE": "1"}, *lesser)
    line = refused(done, config)
    assert "sound input 'rig' is in use (" in line
    assert "expected it free; end the program that has it open" in line


def test_without_portaudio_it_is_told_how_to_install_it(server: Rig, tmp_path: Path) -> None:
    config = configuration(tmp_path)
    if can_hide():
        done = run(config, server.env, "unshare", "-rm", "sh", "-c", NO_PORTAUDIO, "sh")
    else:
        (tmp_path / "sitecustomize.py").write_text(STAND_IN)
        done = run(config, server.env | {"PYTHONPATH": str(tmp_path), "PYTHONDONTWRITEBYTECODE": "1"})
    line = refused(done, config)
    assert "the sound library cannot be loaded (PortAudio library not found)" in line
    assert "apt-get install libportaudio2" in line


def can_hide() -> bool:
    """Say whether this computer allows the mount namespace that a library is hidden in."""
    if shutil.which("unshare") is None or not Path("/etc/ld.so.cache").exists():
        return False
    probe = NO_PORTAUDIO.replace('exec "$@"', "true")
    return subprocess.run(["unshare", "-rm", "sh", "-c", probe], capture_output=True).returncode == 0


# ---------------------------------------------------------------------------------------------- a device that comes


def test_a_daemon_that_waits_says_for_what_and_runs_without_it(waited: Run) -> None:
    assert waited.rows[0]["kind"] == "run"
    (line,) = [line for line in waited.errors if line.startswith("Waiting for the device")]
    assert "'rig'" in line


def test_no_data_is_told_when_its_delay_has_passed(waited: Run) -> None:
    """On the tick at which it has, one a second of stream time."""
    alert = waited.rows[waited.before]
    assert ns_of(alert["time"]) - ns_of(waited.rows[0]["time"]) == NO_DATA_S * NS
    assert not any(row["kind"] == "measurement" for row in waited.rows[: waited.before])


def test_the_time_without_the_device_is_one_incident_from_the_start_to_the_first_sample(waited: Run) -> None:
    begin, end = [row for row in waited.rows if row["kind"] == "health"]
    assert (begin["phase"], end["phase"]) == ("begin", "end")
    assert begin["incident"] == end["incident"]
    assert (end["fault"], end["first_sample"]) == ("device", 0)
    assert end["since"] == waited.rows[0]["time"]
    ((first, _),) = waited.stretches
    assert end["lost_samples"] == first
    assert ns_of(end["time"]) == ns_of(end["since"]) + first * NS // RATE


def test_once_the_device_is_there_it_measures(waited: Run) -> None:
    assert {row["channel"] for row in waited.rows if row["kind"] == "measurement" and row["usable"]} == {"a", "b"}
    assert [row["state"] for row in waited.rows if row["kind"] == "alert" and row["condition"] == "no_data"] == [
        "unacknowledged",
        "returned_unacknowledged",
    ]


# ---------------------------------------------------------------------------------------------- what is asked of it


@pytest.fixture(params=["waits", "changes"])
def terminated(request: pytest.FixtureRequest, runs: dict[str, Future[Run]]) -> Run:
    return runs[request.param].result()


def test_sigterm_ends_it_well_with_every_sample_measured_and_every_row_stored(terminated: Run) -> None:
    assert terminated.status == 0
    assert terminated.left == {}
    numbers = [row["sequence"] for row in terminated.rows]
    assert numbers == list(range(1, len(numbers) + 1)) == terminated.sequences
    last = terminated.rows[-1]
    assert (last["kind"], last["phase"], last["reason"]) == ("run", "end", "stopped")
    first, heard = terminated.stretches[-1]
    assert first + len(heard) == last["samples"]
    windows = [row["first_sample"] + row["samples"] for row in terminated.rows if row["kind"] == "measurement"]
    assert last["samples"] - max(windows) < STEP_S * RATE  # none is left out that was filled


def test_a_second_daemon_on_a_state_folder_is_told_who_runs_there(changed: Run) -> None:
    assert changed.second is not None
    assert (changed.second.returncode, changed.second.stdout) == (2, "")
    (line,) = changed.second.stderr.splitlines()
    assert "runs on this state folder" in line
    assert "bench" in line


def test_a_reload_takes_a_new_band_over_and_loses_no_sample(changed: Run, played: Floats) -> None:
    command = changed.rows[changed.before]
    assert (command["by"], command["action"]) == ("signal", "reload")
    assert command["outcome"].startswith("done: taken over")
    assert any(is_unacknowledged(row, "b/second/low") for row in changed.rows[changed.before :])
    assert not any(is_unacknowledged(row, "b/second/low") for row in changed.rows[: changed.before])
    assert not any(row["kind"] == "health" for row in changed.rows)
    ((_, heard),) = changed.stretches
    place = place_in(played, heard[:16])
    np.testing.assert_array_equal(heard, played[place : place + len(heard)])


def test_a_reload_that_needs_a_restart_is_refused_with_the_key(changed: Run) -> None:
    refusal = [row for row in changed.rows if row["kind"] == "command"][1]
    assert refusal["outcome"].startswith("refused: ")
    assert "window_s" in refusal["outcome"]
    assert [line for line in changed.errors if "was not reloaded" in line and "window_s" in line]
    assert {row["window_s"] for row in changed.rows if row["kind"] == "measurement"} == {WINDOW_S}
