"""Bad input, through the command line: one clear line each, status 2 before anything starts and 1 later."""

from __future__ import annotations

import ctypes
import os
import signal
import sqlite3
import subprocess
import sys
from collections.abc import Callable, Iterator
from contextlib import closing
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile
from driftwatch.store.writer import Writer
from numpy.typing import NDArray

RATE = 4000

Objects = Callable[[str], list[dict[str, Any]]]


def noise(seconds: float, inputs: int = 1) -> NDArray[np.float32]:
    shape = (round(seconds * RATE), inputs)
    return (0.1 * np.random.default_rng(0).standard_normal(shape)).astype(np.float32)


def write(path: Path, samples: NDArray[np.float32], rate_hz: int = RATE, subtype: str | None = "FLOAT") -> bytes:
    soundfile.write(path, samples, rate_hz, subtype=subtype if path.suffix == ".wav" else None)
    return path.read_bytes()


@pytest.fixture
def folder(bench: Any) -> Path:
    """Return the folder, with a configuration and a good recording of 5 s in it."""
    found: Path = bench.folder
    bench.tiny()
    write(found / "good.wav", noise(5.0))
    return found


def refused(bench: Any, *arguments: str, says: tuple[str, ...], **options: Any) -> None:
    """Hold a call to what every refusal is: status 2, every phrase told, nothing printed, nothing made."""
    before = bench.files()
    done = bench.run(*arguments, **options)
    assert done.returncode == 2, done.stderr
    assert done.stdout == ""
    missing = [phrase for phrase in says if phrase not in done.stderr]
    assert not missing, done.stderr
    assert "Traceback" not in done.stderr
    assert all(line.startswith("Error: ") for line in done.stderr.splitlines())
    assert bench.files() == before


# ---------------------------------------------------------------------------------------------- recordings


def _spoil(folder: Path, tiny: str) -> None:
    """Make a recording of every bad kind."""
    (folder / "empty.wav").touch()
    (folder / "picture.wav").write_bytes(b"\x89PNG\r\n\x1a\n" + bytes(range(256)) * 4)
    (folder / "notes.wav").write_text("bearing 3 was hot\n" * 50)
    (folder / "headless.wav").write_bytes((folder / "good.wav").read_bytes()[:20])
    write(folder / "slow.wav", noise(2.0), 900)
    write(folder / "fast.wav", noise(2.0), 8000)
    write(folder / "stereo.wav", noise(2.0, 2))
    (folder / "drawer").mkdir()
    (folder / "second.toml").write_text(tiny.replace('name = "drive end"\n', 'name = "drive end"\ninput = 2\n', 1))


@pytest.mark.parametrize(
    ("arguments", "says"),
    [
        (["bench.toml", "fast.wav"], ["fast.wav: 8000 Hz; expected 4000 Hz as configured; resample it"]),
        (["tiny.toml", "good.wav", "fast.wav"], ["fast.wav: 8000 Hz; expected 4000 Hz like good.wav"]),
        (["tiny.toml", "good.wav", "stereo.wav"], ["stereo.wav: 2 inputs; expected 1 input like good.wav"]),
        (["second.toml", "good.wav"], ["good.wav: 1 input; expected at least 2 as configured; correct the channels'"]),
        (["tiny.toml", "slow.wav"], ["search_hz: got [340, 460] at 900 samples", "under half the rate, 450 Hz"]),
    ],
    ids=lambda value: "-".join(value) if value[0].endswith(".toml") else "",
)
def test_a_recording_that_does_not_fit_is_refused_before_anything_starts(
    bench: Any, folder: Path, arguments: list[str], says: list[str]
) -> None:
    _spoil(folder, bench.tiny())
    bench.config()
    refused(bench, "replay", *arguments, says=tuple(says))


def test_files_that_are_no_recordings_are_refused_together(bench: Any, folder: Path) -> None:
    _spoil(folder, bench.tiny())
    bad = ("none.wav", "empty.wav", "picture.wav", "notes.wav", "headless.wav", "drawer")
    says = (
        "none.wav: No such file or directory; expected a recording; check the path",
        "empty.wav: empty (0 bytes); expected a recording; copy it again",
        *(f"{name}: not readable as audio" for name in ("picture.wav", "notes.wav", "headless.wav")),
        "expected WAV, FLAC or the like; convert it or leave it out",
        "drawer: a directory; expected a recording; name the files in it",
        "good.wav: given twice; expected each recording once; leave one",
    )
    refused(bench, "replay", "tiny.toml", *bad, "good.wav", "good.wav", says=says)


def test_a_bad_recording_is_refused_live_as_well(bench: Any, folder: Path) -> None:
    (folder / "empty.wav").touch()
    source = '[[source]]\nname = "tape"\nkind = "recording"\npath = "{}"\n'
    (folder / "live.toml").write_text(bench.tiny() + source.format("empty.wav"))
    refused(bench, "run", "live.toml", says=("empty.wav: empty (0 bytes); expected a recording",))


@pytest.mark.parametrize("name", ["cut.wav", "cut.flac"])
def test_a_recording_cut_short_is_read_as_far_as_it_goes_and_said_so(
    bench: Any, folder: Path, objects: Objects, name: str
) -> None:
    whole = write(folder / name, noise(10.0))
    (folder / name).write_bytes(whole[: len(whole) // 2])
    done = bench.run("replay", "tiny.toml", name, "--json")
    assert done.returncode == 0, done.stderr
    assert done.stderr.startswith(f"Warning: {name} is cut short: ")
    assert "of 10.000 s are missing; it is read as far as it goes" in done.stderr
    records = objects(done.stdout)
    assert any("is cut short" in words for words in records[0]["assumed"])
    # A codec's block, 4096 samples by default, can be cut in its middle and is then lost as a whole.
    assert 0.5 * 10 * RATE - 2 * 4096 <= records[-1]["samples"] <= 0.5 * 10 * RATE
    assert records[-1]["reason"] == "the recordings ended"


def test_samples_that_are_not_numbers_spoil_their_windows_only(bench: Any, folder: Path, objects: Objects) -> None:
    samples = noise(10.0)
    samples[5 * RATE : 6 * RATE] = np.nan
    write(folder / "holed.wav", samples)
    done = bench.run("replay", "tiny.toml", "holed.wav", "--json")
    assert done.returncode == 0, done.stderr
    records = objects(done.stdout)
    told = [one for one in records if one["kind"] == "health"]
    assert [(one["fault"], one["phase"], one["first_sample"]) for one in told] == [
        ("not_finite", "begin", 5 * RATE),
        ("not_finite", "end", 5 * RATE),
    ]
    assert told[0]["incident"] == told[1]["incident"]
    assert told[1]["lost_samples"] == RATE
    measurements = [one for one in records if one["kind"] == "measurement"]
    for one in measurements:
        begin, end = one["first_sample"], one["first_sample"] + one["samples"]
        touched = begin < 6 * RATE and end > 5 * RATE
        assert ("not_finite" in one["reasons"]) == touched
        assert not (touched and one["usable"])
    assert {"not_finite" in one["reasons"] for one in measurements} == {True, False}


# ---------------------------------------------------------------------------------------------- the configuration


def test_every_error_of_a_configuration_is_told_in_one_pass(bench: Any) -> None:
    bench.config("bad.toml")
    path = bench.folder / "bad.toml"
    text = path.read_text()
    text = text.replace("[340.0, 460.0]", "[1900.0, 2100.0]").replace("low = 390.0", "low = 420.0")
    text = text.replace("on_delay_s", "on_dealy_s")
    text += '\n[[channel]]\nname = "Drive End"\ninput = 3\n'
    text += '[[mode]]\nname = "rocking"\nchannel = "drive end"\nsearch_hz = [340.0, 460.0]\nwindow_s = 0.1\n'
    text += '[[mode]]\nname = "below"\nchannel = "driven end"\nsearch_hz = [-10.0, 460.0]\n'
    path.write_text(text)
    says = (
        'mode[1] "rocking" . search_hz: got [1900, 2100] at 4000 samples a second; expected frequencies under half',
        'mode[3] "below" . search_hz: got [-10, 460]; expected two frequencies in Hz, both over 0',
        'mode[2] "rocking" . window_s: got 0.1; expected at least 0.1333 s',
        'band[1] "bolts" . high: got low = 420 and high = 410; expected low less than high; swap them',
        'band[1] "bolts" . on_dealy_s: got an unknown key; expected one of',
        "did you mean on_delay_s?",
        'channel[2] "Drive End" . name: got "Drive End" a second time',
        'mode[2] "rocking" . name: got "rocking" a second time',
        'channel[2] "Drive End" . input: got 3; expected an input from 1 to 1',
        'mode[3] "below" . channel: got "driven end"; expected the name of a channel in this file',
    )
    refused(bench, "run", "bad.toml", says=says)
    refused(bench, "replay", "bad.toml", "any.wav", says=says)


@pytest.mark.parametrize(
    ("text", "says"),
    [
        (None, ["config.toml: got no such file; expected a configuration in TOML; check the path"]),
        ("", ["schema: got nothing; expected schema = 1", "channel: got none", "mode: got none"]),
        ("schema = = 1\n", ["config.toml: got no TOML", "at line 1", "expected TOML; correct the line"]),
        ("tiny", ["source: got none; expected at least one [[source]] to run live; add one, or replay recordings"]),
    ],
    ids=["missing", "empty", "no TOML", "no source"],
)
def test_a_file_that_is_no_configuration_to_run_is_refused(bench: Any, text: str | None, says: list[str]) -> None:
    if text is not None:
        (bench.folder / "config.toml").write_text(bench.tiny() if text == "tiny" else text)
    refused(bench, "run", "config.toml", says=tuple(says))


# ---------------------------------------------------------------------------------------------- the port


@pytest.fixture
def taken(bench: Any) -> Iterator[str]:
    """Return an endpoint that another process holds."""
    code = f"import zmq; s = zmq.Context().socket(zmq.PUB); s.bind({bench.endpoint!r}); print('bound'); input()"
    with subprocess.Popen(
        [sys.executable, "-u", "-c", code], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    ) as other:
        assert other.stdout is not None
        assert other.stdout.readline() == "bound\n"
        yield bench.endpoint
        other.kill()


def test_a_port_that_another_process_holds_is_refused_before_a_database_comes_into_being(
    bench: Any, folder: Path, taken: str
) -> None:
    bench.config()
    says = (f"{taken} is taken by another process", "publish on another port with --publish or [bus] publish")
    refused(bench, "run", "bench.toml", says=says)
    refused(bench, "replay", "tiny.toml", "good.wav", "--publish", taken, says=says)


@pytest.mark.parametrize(
    ("endpoint", "says"),
    [
        ("tcp://0.0.0.0:5571", "expected an endpoint on this computer; without keys use a loopback address"),
        ("5571", "expected tcp://host:port with a port from 1 to 65535; write it as"),
    ],
    ids=["beyond loopback", "malformed"],
)
def test_an_endpoint_that_may_not_be_bound_is_refused(bench: Any, folder: Path, endpoint: str, says: str) -> None:
    refused(bench, "replay", "tiny.toml", "good.wav", "--publish", endpoint, says=(f"got '{endpoint}'", says))


# ---------------------------------------------------------------------------------------------- the store


def _stores(folder: Path) -> None:
    """Make a file of every kind that is no store."""
    (folder / "notes.db").write_text("remember the milk\n" * 100)
    (folder / "drawer.db").mkdir()
    with closing(sqlite3.connect(folder / "other.db")) as connection:
        connection.execute("CREATE TABLE orders (number, price)")
        connection.commit()


@pytest.mark.parametrize(
    ("store", "says"),
    [
        ("none/rows.db", ["none/rows.db: the database cannot be opened: No such file", "see that its folder exists"]),
        ("good.wav/rows.db", ["rows.db: the database cannot be opened: Not a directory", "name a file in a folder"]),
        ("/proc/rows.db", ["/proc/rows.db: the database cannot be opened", "or name a file in another"]),
        ("drawer.db", ["drawer.db is a folder; expected a database file; name a file in it"]),
        ("notes.db", ["notes.db is no database of driftwatch", "it was left as it is; name another file"]),
        ("other.db", ["other.db belongs to another program (it holds the tables orders", "name another file"]),
        ("postgres://host/rows", ["'postgres://host/rows' names no file", "expected a path or sqlite:///PATH"]),
    ],
    ids=lambda value: value if isinstance(value, str) else "",
)
def test_what_is_no_place_for_rows_is_refused_and_left_as_it_is(
    bench: Any, folder: Path, store: str, says: list[str]
) -> None:
    _stores(folder)
    refused(bench, "replay", "tiny.toml", "good.wav", "--store", store, says=tuple(says))


def test_the_configurations_own_store_is_refused_alike_and_no_folder_stays(bench: Any, folder: Path) -> None:
    text = (folder / bench.config()).read_text()
    for url, says in (
        ("good.wav/rows.db", "Not a directory"),
        ("none/none/rows.db", "No such file"),
        ("/proc/none/rows.db", "No such file"),  # where nobody can make a folder
    ):
        (folder / "bench.toml").write_text(text.replace("state/bench.db", url))
        refused(bench, "run", "bench.toml", says=(f"{url}: the database cannot be opened: {says}",))


def test_recordings_that_could_stand_for_several_sources_are_refused(bench: Any, folder: Path) -> None:
    """Their channels would be fed by none of them: a replay that measures nothing would look like one of silence."""
    text = (folder / "tiny.toml").read_text()
    sources = "".join(f'[[source]]\nname = "{name}"\nkind = "soundcard"\n' for name in ("left", "right"))
    both = text.replace("[[channel]]\n", f'{sources}[[channel]]\nsource = "left"\n', 1)
    other = both.replace("[[mode]]", '[[channel]]\nname = "free end"\nsource = "right"\n[[mode]]', 1)
    (folder / "two.toml").write_text(other)
    says = ('source: got channels of 2, "left", "right"; expected those of one',)
    refused(bench, "replay", "two.toml", "good.wav", says=says)
    (folder / "one.toml").write_text(both.replace('"soundcard"', '"recording"\npath = "none.wav"'))
    done = bench.run("replay", "one.toml", "good.wav", "--json")
    assert done.returncode == 0, done.stderr
    assert '"kind":"measurement"' in done.stdout


@pytest.fixture
def bound() -> dict[str, Any]:
    """Return how to start a process whom permissions bind, also where the tests run as root."""
    if os.geteuid() != 0:
        return {}
    libc = ctypes.CDLL(None)

    def give_up() -> None:
        for capability in (1, 2):  # CAP_DAC_OVERRIDE, CAP_DAC_READ_SEARCH
            if libc.prctl(24, capability, 0, 0, 0) != 0:  # PR_CAPBSET_DROP
                raise OSError("the bounding set cannot be narrowed")

    return {"preexec_fn": give_up}


def test_a_folder_that_may_not_be_written_to_is_refused(bench: Any, folder: Path, bound: dict[str, Any]) -> None:
    folder.chmod(0o555)
    says = ("the database cannot be opened: Permission denied", "change the permissions of its folder")
    refused(bench, "replay", "tiny.toml", "good.wav", says=says, **bound)


def test_a_database_that_may_only_be_read_is_refused_and_nothing_is_made_beside_it(
    bench: Any, folder: Path, bound: dict[str, Any]
) -> None:
    Writer.open(folder / "rows.db", "s").close()
    (folder / "rows.db.lock").unlink()
    (folder / "rows.db").chmod(0o444)
    says = ("rows.db: the database cannot be opened: readonly file; the database may only be read",)
    refused(bench, "replay", "tiny.toml", "good.wav", "--store", "rows.db", says=says, **bound)


def test_a_database_that_another_daemon_writes_to_is_refused(bench: Any, folder: Path) -> None:
    daemon = bench.start("run", bench.config())
    assert daemon.stderr is not None
    while "Ctrl-C ends it" not in (line := daemon.stderr.readline()):
        assert line
    says = (f"process {daemon.pid} (station 'bench') is writing to this database", "name another database with --store")
    done = bench.run("replay", "tiny.toml", "good.wav", "--store", "state/bench.db")
    assert (done.returncode, done.stdout) == (2, "")
    assert all(phrase in done.stderr for phrase in says)
    daemon.send_signal(signal.SIGTERM)
    daemon.communicate(timeout=20)
    assert daemon.returncode == 0


def test_a_database_that_another_program_has_locked_is_refused(bench: Any, folder: Path) -> None:
    Writer.open(folder / "rows.db", "s").close()
    with closing(sqlite3.connect(folder / "rows.db", isolation_level=None)) as connection:
        connection.execute("BEGIN IMMEDIATE")
        done = bench.run("replay", "tiny.toml", "good.wav", "--store", "rows.db")
    assert (done.returncode, done.stdout) == (2, "")
    assert "rows.db: the database cannot be opened: database is locked; another program holds" in done.stderr
