"""One daemon to a state folder: the lock in it, and what is said to the second.

::

    StateError
    ├── StateBusyError         another daemon runs on the folder
    └── StateUnreachableError  the folder is not there and cannot be made, or may not be written to
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from driftwatch.store.lock import HeldError, HolderLock

if TYPE_CHECKING:
    from driftwatch.config import Configuration

LOCK_NAME = "daemon.lock"

FOLDER_MODE = 0o700
"""A state folder made here is for its owner: raw recordings lie in it, and a microphone may have recorded speech."""


def state_folder(config: Configuration, store: str | None = None) -> Path:
    """Return the state folder of a run: the configuration's, or that of the database that is named instead."""
    if store is not None and config.daemon.state is None:
        return Path(store.removeprefix("sqlite:///")).absolute().parent
    return config.state


def recordings_folder(config: Configuration, store: str | None = None) -> Path:
    """Return where the raw samples of a run lie."""
    return Path(config.record.folder or state_folder(config, store) / "recordings")


class StateError(Exception):
    """The state folder cannot be used."""


class StateBusyError(StateError):
    """Another daemon runs on the folder."""


class StateUnreachableError(StateError):
    """The folder cannot be made or written to."""


class StateLock(HolderLock):
    """The right to run on a state folder, held from construction until `release`, or until the process ends.

    The folder is made if it is not there; the folder around it must be there, so that a slip of the pen makes no tree
    of folders.

    Parameters
    ----------
    folder
        The state folder, ``Configuration.state``.
    station
        Who runs, told to whoever finds the folder taken.

    Raises
    ------
    StateBusyError
        When another daemon has it; names its process and station.
    StateUnreachableError
        When the folder cannot be made or written to.
    """

    def __init__(self, folder: Path, station: str) -> None:
        self._folder = folder
        try:
            self._is_new_folder = not folder.exists()
            folder.mkdir(FOLDER_MODE, exist_ok=True)
            super().__init__(folder / LOCK_NAME, station)
        except HeldError as error:
            raise StateBusyError(
                f"{folder}: {error.holder} runs on this state folder; expected no other daemon there; "
                "stop that process, or name another folder with [daemon] state"
            ) from None
        except OSError as error:
            raise StateUnreachableError(
                f"{folder}: got {error.strerror or error}; expected a folder that may be written to, or to be made in "
                "one that is there; make it, change its permissions, or name another with [daemon] state"
            ) from None

    def discard(self) -> None:
        """Let the next one in, and leave neither file nor folder where there was none before."""
        super().discard()
        if self._is_new_folder and self._folder.is_dir() and not any(self._folder.iterdir()):
            self._folder.rmdir()
