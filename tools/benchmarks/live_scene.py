"""What a live daemon is measured on: a virtual sound card on which a recording is played round and round."""

from __future__ import annotations

import os
import socket
import subprocess
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Self

import numpy as np
from numpy.typing import NDArray

from benchmarks.scene import MODES, RATE_HZ
from soundrig import Rig, channel_map

LOOP_S = 20
"""Length of what is played, seconds: its end goes on into its beginning, so that no window sees a seam."""

FRAMES = 480
"""Samples in a block of the device: 10 ms, the default."""

WINDOW_S = 2.0
STEP_S = 0.5
"""Of every mode: two readings a second of each."""

_APART = 0.03  # of two neighbouring channels' frequencies, relative: an exchanged channel would show
_NOISE = 1e-3  # rms


@dataclass(frozen=True, slots=True)
class LiveScene:
    """So many channels of so many modes each, every one at a frequency of its own."""

    channels: int
    modes: int  # on each channel
    impacts: bool = False  # also followed by the decays

    def truth(self) -> dict[tuple[str, str], float]:
        """Return each mode's true natural frequency in Hz by the names of channel and mode."""
        return {
            (f"c{index}", name): frequency_hz * (1 + _APART * (index - 1))
            for index in range(1, self.channels + 1)
            for name, frequency_hz, _, _ in MODES[: self.modes]
        }

    def config(self, source: str, publish: str, more: str = "") -> str:
        """Return the configuration that follows every mode of a source, given as its table."""
        bus = f'[bus]\npublish = "{publish}"\ncontrol = "{free_endpoint()}"'
        parts = ['schema = 1\n[station]\nname = "bench"', source, bus, more]
        parts += ['[store]\nurl = "sqlite:///bench.db"']
        for index in range(1, self.channels + 1):
            parts += [f'[[channel]]\nname = "c{index}"\ninput = {index}\nquantity = "velocity"']
        parts += [self._mode(channel, name, frequency) for (channel, name), frequency in self.truth().items()]
        return "\n".join(parts) + "\n"

    def _mode(self, channel: str, name: str, frequency_hz: float) -> str:
        half_hz = next(half for other, _, _, half in MODES if other == name)
        methods = '["ambient", "ringdown"]' if self.impacts else '["ambient"]'
        return f"""
[[mode]]
name = "{name}"
channel = "{channel}"
search_hz = [{frequency_hz - half_hz:.2f}, {frequency_hz + half_hz:.2f}]
methods = {methods}
window_s = {WINDOW_S}
step_s = {STEP_S}
[[mode.band]]
name = "warning"
low = {frequency_hz * 0.97:.2f}
high = {frequency_hz * 1.03:.2f}"""

    def loop(self) -> NDArray[np.float32]:
        """Return `LOOP_S` of samples, shape (samples, channels), without a seam between its end and its beginning.

        Each mode's response is white force through the resonator's transfer function, on the circle: periodic, and
        20 dB over the noise in its search band.
        """
        count = LOOP_S * RATE_HZ
        w = 2 * np.pi * np.fft.rfftfreq(count, 1 / RATE_HZ)
        samples = np.empty((count, self.channels), np.float32)
        for index in range(1, self.channels + 1):
            rng = np.random.default_rng(index)
            sum_of_modes = _NOISE * rng.standard_normal(count)
            for name, _, q, half_hz in MODES[: self.modes]:
                wn = 2 * np.pi * self.truth()[f"c{index}", name]
                response = np.fft.rfft(rng.standard_normal(count)) * 1j * w / (wn**2 - w**2 + 1j * w * wn / q)
                part = np.fft.irfft(response, count)
                sum_of_modes += part * (10 * _NOISE * np.sqrt(2 * half_hz / (RATE_HZ / 2)) / np.std(part))
            samples[:, index - 1] = sum_of_modes
        return samples


class Player:
    """Plays raw samples round and round on a rig.

    Parameters
    ----------
    rig
        The virtual sound card.
    samples
        Shape (samples, channels).
    folder
        Where they are kept meanwhile.
    """

    def __init__(self, rig: Rig, samples: NDArray[np.float32], folder: Path) -> None:
        path, self._log = folder / "loop.f32", folder / "player.log"
        path.write_bytes(samples.tobytes())
        places = channel_map(samples.shape[1])
        command = ["pacat", "--playback", "--raw", "--verbose", "--format=float32le", f"--rate={rig.rate_hz}"]
        command += [f"--channels={samples.shape[1]}", f"--device={rig.sinks[0]}", "--latency-msec=2000"]
        command += [f"--channel-map={places}"] if places else []
        env = {**rig.env, "PULSE_SERVER": f"unix:{rig.socket}"}
        # a shell writes, so that no work of this process can let the player run dry
        self._writer = subprocess.Popen(
            ["/bin/sh", "-c", 'while cat "$0"; do :; done', str(path)], stdout=subprocess.PIPE, process_group=0
        )
        with self._log.open("wb") as log:
            self._player = subprocess.Popen(command, stdin=self._writer.stdout, env=env, stdout=log, stderr=log)
        if self._writer.stdout is not None:
            self._writer.stdout.close()  # the player's alone: when it ends, so does the writer

    @property
    def pids(self) -> tuple[int, ...]:
        """The player's process number."""
        return (self._player.pid,)

    @property
    def ran_dry(self) -> int:
        """How often there was nothing to play."""
        return self._log.read_text(errors="replace").count("underrun")

    def close(self) -> None:
        """End it."""
        for process in (self._player, self._writer):
            process.kill()
            process.wait()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


def card(inputs: int) -> str:
    """Return the table of a source that is the virtual sound card."""
    return (
        f'[[source]]\nname = "card"\nkind = "soundcard"\ndevice = "rig"\nrate_hz = {RATE_HZ}\ninputs = {inputs}\n'
        f"block_s = {FRAMES / RATE_HZ}"
    )


def free_endpoint() -> str:
    """Return an endpoint that nobody has taken just now."""
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        return f"tcp://127.0.0.1:{taken.getsockname()[1]}"


@contextmanager
def two_cores() -> Iterator[None]:
    """Let this process and all that it starts run on two cores only."""
    before = os.sched_getaffinity(0)
    os.sched_setaffinity(0, sorted(before)[:2])
    try:
        yield
    finally:
        os.sched_setaffinity(0, before)
