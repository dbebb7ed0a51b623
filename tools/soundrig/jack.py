"""A second virtual sound card, for what the first one never does: the server of jackd2 flags a loss.

Its device is ``system`` with two inputs of silence. A client killed with the server running is fine; with the server
killed under it, closing hangs.
"""

from __future__ import annotations

import os
import shutil
import subprocess
import tempfile
import time
from pathlib import Path
from typing import TYPE_CHECKING, Self

from soundrig import READY_S, RigError

if TYPE_CHECKING:
    from types import TracebackType


def missing_packages() -> list[str]:
    """Return the system packages that this needs and that are not there."""
    return [] if shutil.which("jackd") and shutil.which("jack_lsp") else ["jackd2"]


class Jack:
    """A server of its own, of 48 kHz; started by entering, killed by leaving."""

    def __init__(self) -> None:
        self.folder = Path(tempfile.mkdtemp(prefix="jack-"))
        self._name = self.folder.name
        self._server: subprocess.Popen[bytes] | None = None

    @property
    def env(self) -> dict[str, str]:
        """The environment for a program under test."""
        return {**os.environ, "JACK_DEFAULT_SERVER": self._name, "JACK_NO_START_SERVER": "1"}

    def __enter__(self) -> Self:
        try:
            with (self.folder / "server.log").open("wb") as log:
                self._server = subprocess.Popen(
                    f"jackd --no-realtime -n {self._name} -d dummy -r 48000 -p 480 -C 2 -P 2".split(),
                    env=self.env, stdin=subprocess.DEVNULL, stdout=log, stderr=log,
                )  # fmt: skip
            self._await_ready()
        except BaseException:
            self.close()
            raise
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def _await_ready(self) -> None:
        deadline = time.monotonic() + READY_S
        while time.monotonic() < deadline:
            listed = subprocess.run(["jack_lsp"], env=self.env, capture_output=True, check=False)  # noqa: S607
            if b"system:capture_2" in listed.stdout:
                return
            time.sleep(0.05)
        raise RigError(f"jackd did not come up:\n{(self.folder / 'server.log').read_text(errors='replace')}")

    def close(self) -> None:
        """End the server, in good order so that its shared memory goes too, and remove the folder."""
        if self._server is not None:
            self._server.terminate()
            try:
                self._server.wait(READY_S)
            except subprocess.TimeoutExpired:
                self._server.kill()
                self._server.wait()
            self._server = None
        shutil.rmtree(self.folder, ignore_errors=True)
