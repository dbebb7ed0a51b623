"""A virtual sound card: a sound server with null sinks, whose monitors PortAudio opens as inputs through ALSA.

What is played on a sink comes out of its input bit by bit, paced in real time. No hardware, no kernel module, no
session bus, no rights. Tests and benches share it::

    with Rig(inputs=2) as rig:
        program = subprocess.Popen([...], env=rig.env)     # its configuration: device = "rig"
        rig.play(wav)                                      # or wait=True
        rig.stop(); rig.cont(); rig.kill(); rig.start(); rig.unload_sink(); rig.load_sink()

Inputs that the program sees: one by the name of each sink, and ``rigfile``: the bytes given to `Rig.set_file`, as
they are, paced by the first sink, from the moment of opening on; silence after their end.
"""

from __future__ import annotations

import contextlib
import os
import shutil
import signal
import subprocess
import sysconfig
import tempfile
import time
from pathlib import Path
from typing import TYPE_CHECKING, Self

if TYPE_CHECKING:
    from collections.abc import Sequence
    from types import TracebackType

READY_S = 20.0
"""Most seconds for the server to come up: far more than it takes, for a busy computer."""

_PLACES = "front-left,front-right,rear-left,rear-right,front-center,lfe,side-left,side-right"
_PACKAGES = {"pulseaudio": "pulseaudio", "pactl": "pulseaudio-utils", "paplay": "pulseaudio-utils"}
_PLUGIN = "libasound_module_pcm_pulse.so"


class RigError(Exception):
    """The virtual sound card does not do what it should."""


def missing_packages() -> list[str]:
    """Return the system packages that the rig needs and that are not there."""
    found = {package for program, package in _PACKAGES.items() if shutil.which(program) is None}
    if _plugins() is None:
        found.add("libasound2-plugins")
    if not _has_portaudio():
        found.add("libportaudio2")
    return sorted(found)


def channel_map(inputs: int) -> str | None:
    """Return the channel map that keeps so many channels from being remixed; None: the server's own does."""
    return ",".join(_PLACES.split(",")[:inputs]) if 2 < inputs <= 8 else None


class Rig:
    """A sound server of its own in a fresh folder; started by entering, ended with all it started by leaving.

    Parameters
    ----------
    rate_hz, inputs
        Of every sink.
    sinks
        Names of the sinks, each of which is an input by the same name; the first is the default input.
    """

    def __init__(self, rate_hz: int = 48_000, inputs: int = 2, sinks: Sequence[str] = ("rig",)) -> None:
        self.rate_hz = rate_hz
        self.inputs = inputs
        self.sinks = tuple(sinks)
        self.folder = Path(tempfile.mkdtemp(prefix="rig-"))  # short: the path of a socket has at most 107 bytes
        self.socket = self.folder / "pa.sock"
        self.log = self.folder / "server.log"
        self._file = self.folder / "signal.raw"
        self._server: subprocess.Popen[bytes] | None = None
        self._players: list[subprocess.Popen[bytes]] = []

    def __enter__(self) -> Self:
        try:
            self._file.write_bytes(b"")
            (self.folder / "asound.conf").write_text(self._alsa(), encoding="utf-8")
            (self.folder / "client.conf").write_text("autospawn = no\nenable-shm = no\n", encoding="utf-8")
            self.start()
        except BaseException:
            self.close()
            raise
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    @property
    def settings(self) -> dict[str, str]:
        """What the environment of a program under test must hold before it opens the sound library."""
        return {
            "ALSA_CONFIG_PATH": str(self.folder / "asound.conf"),
            "PULSE_CLIENTCONFIG": str(self.folder / "client.conf"),
            "PULSE_RUNTIME_PATH": str(self.folder / "client"),
            "PULSE_COOKIE": str(self.folder / "cookie"),
            "JACK_NO_START_SERVER": "1",
        }

    @property
    def env(self) -> dict[str, str]:
        """The environment for a program under test: ours and the `settings`."""
        return {**os.environ, **self.settings}

    @property
    def pid(self) -> int:
        """Process id of the server."""
        if self._server is None:
            raise RigError("the server does not run; start it first")
        return self._server.pid

    # ------------------------------------------------------------------------------------------ server

    def start(self) -> None:
        """Start the server, on the same socket as before, and wait until it answers."""
        if self._server is not None:
            raise RigError("the server runs already; kill it first")
        self.socket.unlink(missing_ok=True)
        folders = {name: self.folder / name for name in ("home", "xdg", "pulse", "state")}
        for folder in folders.values():
            folder.mkdir(mode=0o700, exist_ok=True)
        env = {name: value for name, value in os.environ.items() if name not in ("DBUS_SESSION_BUS_ADDRESS", "DISPLAY")}
        env |= {"HOME": str(folders["home"]), "XDG_RUNTIME_DIR": str(folders["xdg"])}
        env |= {"PULSE_RUNTIME_PATH": str(folders["pulse"]), "PULSE_STATE_PATH": str(folders["state"])}
        command = "pulseaudio -n --daemonize=no --use-pid-file=no --exit-idle-time=-1 --realtime=no --high-priority=no"
        command += " --disable-shm=yes --log-target=stderr --log-level=notice"
        modules = [f"module-native-protocol-unix auth-anonymous=1 socket={self.socket}"]
        modules += [f"module-null-sink {self._sink_arguments(sink)}" for sink in self.sinks]
        with self.log.open("ab") as log:
            self._server = subprocess.Popen(
                [*command.split(), *(word for module in modules for word in ("-L", module))],
                env=env, stdin=subprocess.DEVNULL, stdout=log, stderr=log,
            )  # fmt: skip
        self._await_ready()

    def stop(self) -> None:
        """Stop the server as a debugger would: nothing moves, nothing is told."""
        os.kill(self.pid, signal.SIGSTOP)

    def cont(self) -> None:
        """Let a stopped server go on."""
        os.kill(self.pid, signal.SIGCONT)

    def kill(self) -> None:
        """Kill the server at once; also one that is stopped."""
        if self._server is not None:
            self._server.kill()
            self._server.wait()
            self._server = None

    def unload_sink(self, sink: str | None = None) -> None:
        """Take a sink, and with it the input of its name, away from the running server."""
        wanted = f"sink_name={sink or self.sinks[0]}"
        for line in self._pactl("list", "short", "modules").splitlines():
            number, *words = line.split()
            if wanted in words:
                self._pactl("unload-module", number)
                return
        raise RigError(f"no sink {sink or self.sinks[0]} is loaded")

    def load_sink(self, sink: str | None = None) -> None:
        """Bring a sink back."""
        self._pactl("load-module", "module-null-sink", *self._sink_arguments(sink or self.sinks[0]).split())

    def close(self) -> None:
        """End the server and every player, and remove the folder."""
        for player in self._players:
            player.kill()
            player.wait()
        self._players.clear()
        self.kill()
        shutil.rmtree(self.folder, ignore_errors=True)

    # ------------------------------------------------------------------------------------------ signals

    def play(self, path: str | Path, sink: str | None = None, *, wait: bool = False) -> subprocess.Popen[bytes]:
        """Play a recording of the rig's rate and channels on a sink.

        Parameters
        ----------
        path
            A WAV file; float32 comes out bit by bit.
        sink
            The first one where it is left out.
        wait
            Return when it was played to its end; left out: at once. `stop_players` ends it early.

        Raises
        ------
        RigError
            When it was waited for and could not be played.
        """
        places = channel_map(self.inputs)
        command = ["paplay", f"--device={sink or self.sinks[0]}", *([f"--channel-map={places}"] if places else [])]
        with self.log.open("ab") as log:
            player = subprocess.Popen([*command, str(path)], env=self._client, stdout=log, stderr=log)
        self._players.append(player)
        if wait and player.wait() != 0:
            raise RigError(f"{path} could not be played:\n{self.log.read_text(errors='replace')}")
        return player

    def stop_players(self) -> None:
        """Silence every sink."""
        for player in self._players:
            player.kill()
            player.wait()
        self._players.clear()

    def set_file(self, raw: bytes) -> None:
        """Set what the input ``rigfile`` gives to whoever opens it next.

        Parameters
        ----------
        raw
            Samples in the format and with the channel count that the program opens it with, interleaved.
        """
        self._file.write_bytes(raw)

    # ------------------------------------------------------------------------------------------ inside

    @property
    def _client(self) -> dict[str, str]:
        return {**self.env, "PULSE_SERVER": f"unix:{self.socket}"}

    def _sink_arguments(self, sink: str) -> str:
        """Return a sink's arguments; with rewinds the first block of a player would come a second late."""
        places = channel_map(self.inputs)
        arguments = f"sink_name={sink} rate={self.rate_hz} channels={self.inputs} format=float32le norewinds=1"
        return f"{arguments} channel_map={places}" if places else arguments

    def _alsa(self) -> str:
        plugins, server, first = _plugins(), f'server "unix:{self.socket}"', self.sinks[0]
        if plugins is None:
            raise RigError(f"no {_PLUGIN} in any library folder; install libasound2-plugins")
        lines = [
            f'pcm_type.pulse {{ lib "{plugins / _PLUGIN}" }}',
            f'ctl_type.pulse {{ lib "{plugins / _PLUGIN.replace("_pcm_", "_ctl_")}" }}',
            f'pcm.!default {{ type pulse {server} device "{first}.monitor" }}',
            f"ctl.!default {{ type pulse {server} }}",
            f'pcm.rigfile {{ type file slave.pcm "{first}" file "/dev/null" infile "{self._file}" format "raw" }}',
        ]
        lines += [f'pcm.{sink} {{ type pulse {server} device "{sink}.monitor" }}' for sink in self.sinks]
        return "\n".join(lines) + "\n"

    def _await_ready(self) -> None:
        deadline = time.monotonic() + READY_S
        while time.monotonic() < deadline:
            with contextlib.suppress(RigError):
                self._pactl("info")
                return
            if self._server is None or self._server.poll() is not None:
                break
            time.sleep(0.05)
        self.kill()
        raise RigError(f"the sound server did not come up:\n{self.log.read_text(errors='replace')}")

    def _pactl(self, *words: str) -> str:
        done = subprocess.run(  # found on the path, as by whoever installed it
            ["pactl", *words],  # noqa: S607
            env=self._client,
            capture_output=True,
            text=True,
            timeout=READY_S,
            check=False,
        )
        if done.returncode != 0:
            raise RigError(f"pactl {' '.join(words)}: {done.stderr.strip()}")
        return done.stdout


def _plugins() -> Path | None:
    """Return the folder of ALSA's plugins for this architecture."""
    architecture = sysconfig.get_config_var("MULTIARCH")
    roots = [f"/usr/lib/{architecture}"] if architecture else []
    folders = [Path(root) / "alsa-lib" for root in (*roots, "/usr/lib64", "/usr/lib")]
    return next((folder for folder in folders if (folder / _PLUGIN).exists()), None)


def _has_portaudio() -> bool:
    from ctypes.util import find_library

    return find_library("portaudio") is not None
