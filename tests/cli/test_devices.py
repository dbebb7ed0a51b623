"""``driftwatch devices`` on a virtual sound card, started as a person starts it."""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile
from driftwatch.stream.sound_inputs import SoundInput, find_input, words_for

from soundrig import Rig

RATE = 48_000
PROGRAM = [sys.executable, "-m", "driftwatch", "devices"]


def devices(rig: Rig, *words: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run([*PROGRAM, *words], env=rig.env, capture_output=True, text=True, timeout=60)


@pytest.fixture
def play(tmp_path: Path) -> Callable[..., None]:
    """Return what plays a minute of columns on a sink."""

    def play_it(rig: Rig, *columns: np.ndarray, sink: str | None = None) -> None:
        path = tmp_path / f"{sink or 'first'}.wav"
        soundfile.write(path, np.stack(columns, axis=1).astype(np.float32), RATE, subtype="FLOAT")
        rig.play(path, sink)

    return play_it


TIMES = np.arange(60 * RATE) / RATE
TONE = 0.25 * np.sin(2 * np.pi * 1234.5 * TIMES)
HISS = 0.01 * np.random.default_rng(0).standard_normal(len(TIMES))


def test_every_input_is_listed_with_the_words_that_find_it(rig: Rig) -> None:
    done = devices(rig)
    assert done.returncode == 0
    assert done.stdout.split("\n")[0].split() == ["device", "inputs", "Hz", "interface", "default"]
    rows = [line.split() for line in done.stdout.splitlines()[1:]]
    assert [(row[0], row[-1]) for row in rows] == [("rigfile", "-"), ("rig", "-"), ("default", "yes")]
    assert 'device = "..."' in done.stderr


def test_json_is_one_object_a_line_and_nothing_else(rig: Rig, objects: Any) -> None:
    done = devices(rig, "--json")
    assert done.stderr == ""
    found = objects(done.stdout)
    assert [one["device"] for one in found] == ["rigfile", "rig", "default"]
    assert [one["default"] for one in found] == [False, False, True]
    assert all(one["inputs"] == 32 and one["interface"] == "ALSA" for one in found)


def test_words_name_one_input_of_those_there_are(make_rig: Any) -> None:
    rig = make_rig(sinks=("probe-left", "probe-right"))
    done = devices(rig, "probe")
    assert (done.returncode, done.stdout) == (2, "")
    assert "'probe' means 2 sound inputs: 'probe-left, ALSA' (32 inputs); 'probe-right, ALSA'" in done.stderr
    done = devices(rig, "RIGHT", "--json")
    assert [json.loads(line)["name"] for line in done.stdout.splitlines()] == ["probe-right"]


def test_an_unknown_name_is_told_with_those_there_are(rig: Rig) -> None:
    done = devices(rig, "--watch", "nowhere")
    assert done.returncode == 2
    assert done.stderr.startswith("Error: no sound input is called 'nowhere'; expected a name or a part of one of: ")
    assert "Traceback" not in done.stderr


def test_the_words_leave_out_a_cards_number_where_they_can_and_always_find_their_input() -> None:
    names = [("Probe: USB (hw:1,0)", "ALSA"), ("Line (hw:2,0)", "ALSA"), ("Line (hw:3,0)", "ALSA"), ("Mix", "ALSA")]
    names += [("Mix", "JACK"), ("Twin", "JACK"), ("Twin", "JACK")]
    there = [SoundInput(index, name, host, 2, 48_000.0, False) for index, (name, host) in enumerate(names)]
    words = [words_for(there, one) for one in there]
    assert words == ["Probe: USB", "Line (hw:2,0)", "Line (hw:3,0)", "Mix, ALSA", "Mix, JACK", None, None]
    assert all(find_input(there, word) == one for word, one in zip(words, there, strict=True) if word)


def test_watching_shows_the_line_and_level_of_the_right_input(rig: Rig, play: Any) -> None:
    """A sine of amplitude 1/4 has a peak of -12.0 dB and an rms of -15.1 dB; hiss of 0.01 rms has -40 dB.

    The rms of a second of hiss has a standard deviation of 0.02 dB; 0.15 dB are five of them and the rounding.
    """
    play(rig, HISS, TONE)
    done = devices(rig, "--watch", "rig", "--seconds", "3", "--rate", str(RATE), "--inputs", "2")
    assert done.returncode == 0, done.stderr
    heads, *lines = done.stdout.splitlines()
    assert heads.split() == ["input", "rms", "peak", "held", "clipped", "line", "remark"]
    last = {line.split()[1]: line.split() for line in lines}
    assert last["2"] == ["rig", "2", "-15.1", "dB", "-12.0", "dB", "-12.0", "dB", "0", "1234.5", "Hz", "loudest"]
    assert float(last["1"][2]) == pytest.approx(-40.0, abs=0.15)
    assert last["1"][-2:] == ["0", "-"]
    assert len(lines) >= 6


def test_watching_as_json_tells_silence_and_clipping(rig: Rig, play: Any, objects: Any) -> None:
    play(rig, np.zeros(len(TIMES)), np.clip(8 * TONE, -1, 1))
    done = devices(rig, "rig", "--watch", "--seconds", "3", "--rate", str(RATE), "--inputs", "2", "--json")
    silent, loud = objects(done.stdout)[-2:]
    assert (silent["rms_db"], silent["remark"], silent["line_hz"]) == (None, "silent", None)
    assert loud["peak_db"] == 0.0
    assert loud["clipped"] > RATE  # of a sine cut at half its amplitude two thirds lie there
    assert loud["line_hz"] == pytest.approx(1234.5, abs=0.1)


def test_several_devices_are_watched_side_by_side(make_rig: Any, play: Any, objects: Any) -> None:
    rig = make_rig(inputs=1, sinks=("first", "second"))
    play(rig, TONE, sink="second")
    words = ["--watch", "--seconds", "2", "--inputs", "1", "--rate", str(RATE), "--json"]
    done = devices(rig, "first", "second", *words)
    first, second = objects(done.stdout)[-2:]
    assert [first["device"], first["remark"]] == ["first", "silent"]
    assert [second["device"], second["remark"]] == ["second", "loudest"]


def test_watching_ends_in_good_order_when_interrupted(rig: Rig) -> None:
    process = subprocess.Popen([*PROGRAM, "--watch"], env=rig.env, stdout=subprocess.PIPE, text=True)
    try:
        assert process.stdout is not None
        assert process.stdout.readline().startswith("input")
        assert process.stdout.readline().startswith("default 1")
        process.send_signal(signal.SIGINT)
        assert process.wait(timeout=30) == 0
    finally:
        process.kill()
        process.communicate()


def test_a_device_lost_while_watching_is_told(rig: Rig) -> None:
    process = subprocess.Popen(
        [*PROGRAM, "--watch", "rig"], env=rig.env, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    try:
        assert process.stdout is not None
        process.stdout.readline()
        process.stdout.readline()
        rig.kill()
        _, told = process.communicate(timeout=30)
    finally:
        process.kill()
        process.wait()
    assert process.returncode == 1
    assert "Error: sound input 'rig' is gone; expected it to stay" in told


def test_a_hanging_server_does_not_keep_the_command(rig: Rig) -> None:
    rig.stop()
    try:
        done = devices(rig)
    finally:
        rig.cont()
    assert done.returncode == 2
    assert "the sound system did not answer within 10 s" in done.stderr


def test_without_any_input_the_remedies_are_told(rig: Rig) -> None:
    rig.kill()
    for words in ((), ("--watch",), ("rig",)):
        done = devices(rig, *words)
        assert (done.returncode, done.stdout) == (2, "")
        assert done.stderr.startswith("Error: no sound input is there; expected at least one; plug it in")
        assert len(done.stderr.splitlines()) == 1


@pytest.mark.parametrize("words", [["--seconds", "3"], ["--rate", "48000"], ["--inputs", "1"]])
def test_what_belongs_to_watching_is_refused_without_it(rig: Rig, words: list[str]) -> None:
    done = devices(rig, *words)
    assert done.returncode == 2
    assert f"{words[0]} came without --watch" in done.stderr


def without_portaudio(rig: Rig) -> subprocess.CompletedProcess[str]:
    """Run the command where the system's loader knows no library: a mount namespace with its cache masked."""
    command = 'mount --bind /dev/null /etc/ld.so.cache && exec "$@"'
    return subprocess.run(
        ["unshare", "-rm", "sh", "-c", command, "sh", *PROGRAM],
        env=rig.env, capture_output=True, text=True, timeout=60,
    )  # fmt: skip


def has_namespaces() -> bool:
    if shutil.which("unshare") is None or not Path("/etc/ld.so.cache").exists():
        return False
    probe = "mount --bind /dev/null /etc/ld.so.cache"
    return subprocess.run(["unshare", "-rm", "sh", "-c", probe], capture_output=True).returncode == 0


def test_without_portaudio_it_is_told_how_to_install_it(rig: Rig) -> None:
    if not has_namespaces():
        pytest.skip("this computer allows no mount namespace, in which the library could be hidden")
    done = without_portaudio(rig)
    assert (done.returncode, done.stdout) == (2, "")
    assert done.stderr.startswith("Error: the sound library cannot be loaded (PortAudio library not found); ")
    assert "apt-get install libportaudio2" in done.stderr
    assert len(done.stderr.splitlines()) == 1


STAND_IN = """
import ctypes.util
found = ctypes.util.find_library
ctypes.util.find_library = lambda name: None if name == "portaudio" else found(name)
"""


def test_without_portaudio_by_a_stand_in_where_nothing_can_be_hidden(tmp_path: Path) -> None:
    """A stand-in: the search for the library is told that there is none; all else is real."""
    (tmp_path / "sitecustomize.py").write_text(STAND_IN)
    done = subprocess.run(
        PROGRAM, env={**os.environ, "PYTHONPATH": str(tmp_path)}, capture_output=True, text=True, timeout=60
    )
    assert done.returncode == 2
    assert "apt-get install libportaudio2" in done.stderr


def test_the_examples_of_the_help_work(rig: Rig) -> None:
    assert devices(rig).returncode == 0
