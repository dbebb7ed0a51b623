"""Sound inputs through real PortAudio on a virtual sound card."""

from __future__ import annotations

import os
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile
from driftwatch.stream.soundcard import (
    CardStream,
    DeviceUnavailableError,
    SoundInput,
    find_input,
    scale_into,
    sound_inputs,
    within,
    without_stderr,
)
from driftwatch.stream.source import SourceRefusedError

from soundrig import Rig
from soundrig.jack import Jack, missing_packages

RATE = 48_000
FRAMES = 960
LIMIT_S = 30.0
"""A deadline for what takes well under a second."""


class Kept:
    """A sink that keeps every block."""

    def __init__(self) -> None:
        self.blocks: list[np.ndarray] = []
        self.arrived_ns: list[int] = []
        self.flagged: list[bool] = []

    def take(self, samples: np.ndarray, arrived_ns: int, flagged: bool) -> None:
        self.blocks.append(samples.copy())
        self.arrived_ns.append(arrived_ns)
        self.flagged.append(flagged)

    def first(self, frames: int) -> np.ndarray:
        """Return the first samples as soon as they are there."""
        until(lambda: len(self.blocks) * FRAMES >= frames)
        return np.concatenate(self.blocks)[:frames]


def until(true: Callable[[], bool]) -> None:
    deadline = time.monotonic() + LIMIT_S
    while not true():
        assert time.monotonic() < deadline, "it did not come true"
        time.sleep(0.01)


@pytest.fixture
def card(rig: Rig, monkeypatch: pytest.MonkeyPatch) -> Rig:
    """The rig, seen by PortAudio in this very process."""
    for name, value in rig.settings.items():
        monkeypatch.setenv(name, value)
    return rig


@pytest.fixture
def opened() -> Iterator[Callable[..., tuple[CardStream, Kept]]]:
    streams: list[CardStream] = []

    def open_it(name: str | None = "rig", **changes: Any) -> tuple[CardStream, Kept]:
        settings = {"rate_hz": RATE, "inputs": 2, "sample_format": "float32", "frames": FRAMES} | changes
        sink = Kept()
        streams.append(CardStream(find_input(sound_inputs(), name), sink=sink, **settings))
        return streams[-1], sink

    yield open_it
    assert all(stream.close(LIMIT_S) for stream in streams)


# ---------------------------------------------------------------------------------------------- which input


def test_the_list_holds_every_input_by_name_with_the_default_one_marked(card: Rig) -> None:
    there = sound_inputs()
    assert [one.name for one in there] == ["rigfile", "rig", "default"]
    assert [one.name for one in there if one.is_default] == ["default"]
    assert {one.host for one in there} == {"ALSA"}
    assert find_input(there, None).name == "default"


def test_the_list_is_made_anew_each_time(card: Rig) -> None:
    assert sound_inputs()
    card.kill()
    with without_stderr():
        assert sound_inputs() == []
    card.start()
    assert [one.name for one in sound_inputs()] == ["rigfile", "rig", "default"]


def inputs_called(*names: str, host: str = "ALSA", inputs: int = 2) -> list[SoundInput]:
    return [SoundInput(index, name, host, inputs, 48_000.0, False) for index, name in enumerate(names)]


@pytest.mark.parametrize("wanted", ["Line", "line", " LINE ", "line, alsa"])
def test_a_whole_name_goes_before_parts_of_others_whatever_its_case(wanted: str) -> None:
    assert find_input(inputs_called("Line front", "Line"), wanted).index == 1


def test_a_part_of_one_name_is_enough() -> None:
    assert find_input(inputs_called("Probe (hw:1,0)", "Line"), "probe").index == 0


def test_an_ambiguous_part_lists_every_match_and_nothing_else() -> None:
    with pytest.raises(SourceRefusedError, match="means 2 sound inputs") as told:
        find_input(inputs_called("Probe A", "Probe B", "Line"), "probe")
    assert "'Probe A, ALSA' (2 inputs); 'Probe B, ALSA' (2 inputs)" in str(told.value)
    assert "Line" not in str(told.value)


def test_one_name_on_two_interfaces_is_ambiguous_until_the_interface_is_named() -> None:
    there = [*inputs_called("Line"), SoundInput(1, "Line", "JACK", 2, 48_000.0, False)]
    with pytest.raises(SourceRefusedError, match=r"'Line, ALSA' .*'Line, JACK'"):
        find_input(there, "line")
    assert find_input(there, "Line, JACK").index == 1


def test_an_unknown_name_lists_all_there_are_and_may_come_later() -> None:
    with pytest.raises(DeviceUnavailableError, match=r"no sound input is called 'probe'.*'Line, ALSA' \(1 input\)"):
        find_input(inputs_called("Line", inputs=1), "probe")


def test_without_any_input_the_remedies_are_named() -> None:
    for wanted in ("probe", None):
        with pytest.raises(DeviceUnavailableError, match="no sound input is there; expected at least one"):
            find_input([], wanted)


def test_without_a_default_input_a_name_is_asked_for() -> None:
    with pytest.raises(DeviceUnavailableError, match=r"no default sound input.*set device to one of: 'Line, ALSA'"):
        find_input(inputs_called("Line"), None)


def test_too_few_inputs_are_refused_with_how_many_there_are() -> None:
    with pytest.raises(SourceRefusedError, match="'Line' has 2 inputs; expected at least 4"):
        find_input(inputs_called("Line"), "Line", least_inputs=4)


# ---------------------------------------------------------------------------------------------- samples


@pytest.mark.parametrize("sample_format", ["float32", "int16", "int32"])
def test_samples_come_bit_by_bit_in_every_format(card: Rig, opened: Any, sample_format: str) -> None:
    rng = np.random.default_rng(0)
    if sample_format == "float32":
        sent = rng.standard_normal((RATE, 2)).astype(np.float32)  # some beyond full scale
    else:
        ends = np.iinfo(sample_format)
        sent = rng.integers(ends.min, ends.max, (RATE, 2), dtype=sample_format, endpoint=True)
    card.set_file(sent.tobytes())
    _, sink = opened("rigfile", sample_format=sample_format)
    np.testing.assert_array_equal(sink.first(RATE), sent)
    assert {block.shape for block in sink.blocks} == {(FRAMES, 2)}
    assert not any(sink.flagged)


def test_a_played_recording_comes_bit_by_bit_on_eight_inputs(
    make_rig: Any, opened: Any, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """Each on its own input: nothing is remixed."""
    rig = make_rig(inputs=8)
    for name, value in rig.settings.items():
        monkeypatch.setenv(name, value)
    sent = np.random.default_rng(1).uniform(-1, 1, (RATE, 8)).astype(np.float32)
    soundfile.write(tmp_path / "sent.wav", sent, RATE, subtype="FLOAT")
    _, sink = opened(inputs=8)
    rig.play(tmp_path / "sent.wav")
    until(lambda: any(block.any() for block in sink.blocks))
    heard = sink.first(len(sink.blocks) * FRAMES + len(sent))
    begin = int(np.flatnonzero(heard.any(axis=1))[0])
    np.testing.assert_array_equal(heard[begin : begin + len(sent)], sent)


@pytest.mark.parametrize(
    ("sample_format", "values", "scaled"),
    [
        ("int16", [-(2**15), -1, 2**14, 2**15 - 1], [-1.0, -(2.0**-15), 0.5, 1 - 2.0**-15]),
        ("int32", [-(2**31), 1, 2**30, 2**31 - 1], [-1.0, 2.0**-31, 0.5, 1.0]),
        ("float32", [-1.5, 0.0, 0.25, 1.0], [-1.5, 0.0, 0.25, 1.0]),
    ],
)
def test_full_scale_is_one(sample_format: str, values: list[float], scaled: list[float]) -> None:
    out = np.empty(4, np.float32)
    scale_into(np.array(values, sample_format), out)
    assert out.tolist() == scaled


def test_blocks_arrive_in_order_at_about_the_nominal_rate(card: Rig, opened: Any) -> None:
    """Arrival is the monotonic clock's: between the opening and now, and it never goes back."""
    before = time.monotonic_ns()
    _, sink = opened()
    until(lambda: len(sink.blocks) >= 50)
    arrived = sink.arrived_ns[:50]
    assert before < arrived[0]
    assert arrived[-1] < time.monotonic_ns()
    assert arrived == sorted(arrived)


def test_a_genuine_overflow_is_flagged(make_rig: Any) -> None:
    """A callback that stalls for longer than the server's ring is told of the loss, at a block soon after it."""
    if missing_packages():
        pytest.skip(f"a sound card that flags losses needs: apt-get install {' '.join(missing_packages())}")
    with Jack() as jack:
        told = subprocess.run([sys.executable, "-c", STALLED], env=jack.env, capture_output=True, text=True, timeout=60)
    flags = [int(word) for word in told.stdout.split()]
    assert {20, 21} & set(flags), told.stderr  # a busy computer may add others, as genuine as this one


STALLED = """
import time
from driftwatch.stream.soundcard import CardStream, find_input, sound_inputs
class Sink:
    flags = []
    def take(self, samples, arrived_ns, flagged):
        self.flags.append(flagged)
        if len(self.flags) == 20:
            time.sleep(0.5)
sink = Sink()
stream = CardStream(find_input(sound_inputs(), "system"), rate_hz=48000, inputs=2, sample_format="float32",
                    frames=480, sink=sink)
while len(sink.flags) < 100:
    time.sleep(0.01)
assert stream.close(20)
print(*(index for index, flagged in enumerate(sink.flags) if flagged))
"""


# ---------------------------------------------------------------------------------------------- loss


def test_a_killed_server_finishes_the_stream_which_then_closes_and_opens_again(card: Rig, opened: Any) -> None:
    stream, sink = opened()
    sink.first(FRAMES)
    assert not stream.finished
    card.kill()
    until(lambda: stream.finished)
    assert stream.close(LIMIT_S)
    card.start()
    stream, sink = opened()
    sink.first(FRAMES)
    assert not stream.finished


def test_a_device_taken_away_finishes_the_stream(card: Rig, opened: Any) -> None:
    stream, sink = opened()
    sink.first(FRAMES)
    card.unload_sink()
    until(lambda: stream.finished)


@pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning")  # the error is printed, as it should
def test_a_sink_that_raises_finishes_the_stream(card: Rig) -> None:
    class Broken:
        def take(self, *_: object) -> None:
            raise RuntimeError("as any bug would")

    device = find_input(sound_inputs(), "rig")
    stream = CardStream(device, rate_hz=RATE, inputs=2, sample_format="float32", frames=FRAMES, sink=Broken())
    until(lambda: stream.finished)
    assert stream.close(LIMIT_S)


HUNG = """
import sys, time
from driftwatch.stream.soundcard import CardStream, find_input, leave_hung, sound_inputs, within
class Sink:
    count = 0
    def take(self, samples, arrived_ns, flagged):
        self.count += 1
sink = Sink()
settings = dict(rate_hz=48000, inputs=2, sample_format="float32", frames=960, sink=sink)
stream = CardStream(find_input(sound_inputs(), "rig"), **settings)
while sink.count < 10:
    time.sleep(0.01)
print("runs", flush=True)
sys.stdin.readline()
print("finished", stream.finished, flush=True)
print("closed", stream.close(0.5), flush=True)
leave_hung(7)
"""


def test_closing_gives_up_at_its_deadline_where_the_server_hangs(rig: Rig) -> None:
    program = subprocess.Popen(
        [sys.executable, "-c", HUNG], env=rig.env, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    )
    try:
        assert program.stdout is not None
        assert program.stdout.readline() == "runs\n"
        rig.stop()
        out, _ = program.communicate("go\n", timeout=LIMIT_S)
        assert out.splitlines() == ["finished False", "closed False"]
        assert program.returncode == 7
    finally:
        program.kill()
        program.wait()
        rig.cont()


def test_what_hangs_is_given_up_and_what_fails_is_told() -> None:
    assert within(LIMIT_S, lambda: 5) == 5
    with pytest.raises(TimeoutError, match=r"did not answer within 0\.05 s"):
        within(0.05, lambda: time.sleep(1))
    with pytest.raises(ZeroDivisionError):
        within(LIMIT_S, lambda: 1 / 0)


# ---------------------------------------------------------------------------------------------- refusals


def test_a_rate_that_the_device_has_not_is_refused(card: Rig, opened: Any) -> None:
    with without_stderr(), pytest.raises(SourceRefusedError, match=r"'rig' does not run at 9999999 Hz.*set rate_hz"):
        opened(rate_hz=9_999_999)


def test_more_inputs_than_the_device_has_are_refused(card: Rig, opened: Any) -> None:
    with without_stderr(), pytest.raises(SourceRefusedError, match="'rig' has 32 inputs; expected 33; lower inputs"):
        opened(inputs=33)


def test_an_input_that_went_away_since_the_list_was_made_may_come_back(card: Rig) -> None:
    device = find_input(sound_inputs(), "rig")
    card.kill()
    with without_stderr() as written:
        with pytest.raises(DeviceUnavailableError, match="'rig' cannot be opened"):
            CardStream(device, rate_hz=RATE, inputs=2, sample_format="float32", frames=FRAMES, sink=Kept())
        assert "Connection refused" in written()  # of the library's own words none reached a terminal


BUSY = """
import fcntl, os, pathlib, pty, termios
from driftwatch.stream.soundcard import CardStream, DeviceUnavailableError, find_input, sound_inputs
class Sink:
    def take(self, samples, arrived_ns, flagged):
        pass
device = find_input(sound_inputs(), "rig")
_, terminal = pty.openpty()
fcntl.ioctl(terminal, termios.TIOCEXCL)  # whoever opens it now is told by the kernel that it is busy
conf = pathlib.Path(os.environ["ALSA_CONFIG_PATH"])
text = conf.read_text()
plugin = text.splitlines()[0].replace("pulse", "oss")
pathlib.Path(f"{conf}.new").write_text(
    text.replace("pcm.rig {", "pcm.away {") + plugin + chr(10)
    + f'pcm.rig {{ type oss device "{os.ttyname(terminal)}" }}' + chr(10)
)
os.replace(f"{conf}.new", conf)
try:
    CardStream(device, rate_hz=48000, inputs=2, sample_format="float32", frames=960, sink=Sink())
except DeviceUnavailableError as error:
    print(error)
"""


def test_an_input_in_use_is_told_as_such(rig: Rig) -> None:
    """The kernel itself says EBUSY: between list and opening the input becomes a device file opened exclusively."""
    lesser = ["setpriv", "--bounding-set", "-sys_admin", "--inh-caps", "-sys_admin"] if os.geteuid() == 0 else []
    done = subprocess.run(
        [*lesser, sys.executable, "-c", BUSY], env=rig.env, capture_output=True, text=True, timeout=60
    )
    assert done.stdout.startswith("sound input 'rig' is in use ("), done.stderr
    assert "expected it free; end the program that has it open" in done.stdout


def test_what_captures_needs_no_scipy() -> None:
    code = "import sys, driftwatch.stream.soundcard; sys.exit('scipy' in sys.modules or 'sounddevice' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], timeout=60).returncode == 0
