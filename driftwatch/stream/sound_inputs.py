"""Which sound inputs there are, and which of them is meant by a name.

::

    StreamError
    ├── SourceRefusedError
    │   └── NoSoundLibraryError     PortAudio is not installed
    └── DeviceUnavailableError      the input is gone, busy or does not answer: it may be there later
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from driftwatch.stream.source import SourceRefusedError, StreamError

if TYPE_CHECKING:
    from collections.abc import Sequence

NONE_THERE = (
    "no sound input is there; expected at least one; plug it in, end what else uses it (an input in use may not be "
    "listed), start the sound server if there is one, and on Linux see that this user is in the group audio"
)

_PLACE = re.compile(r"\s*\(hw:\d+(,\d+)?\)$")


class NoSoundLibraryError(SourceRefusedError):
    """PortAudio, the system's library for sound inputs, cannot be loaded."""


class DeviceUnavailableError(StreamError):
    """An input is not there, is used by another program or does not answer: what may pass with time."""


@dataclass(frozen=True, slots=True)
class SoundInput:
    """A device that samples can come from, as it was when the list was made."""

    index: int  # in the list that PortAudio made last; another list, another index
    name: str  # as the system calls it
    host: str  # the system's interface it is reached by: ALSA, Core Audio ...
    inputs: int  # most inputs that can be opened
    rate_hz: float  # the rate it prefers
    is_default: bool  # what is opened where no device is named

    @property
    def full_name(self) -> str:
        """Name and interface."""
        return f"{self.name}, {self.host}"


def load_portaudio() -> Any:
    """Return the module ``sounddevice``; the first call opens the sound library, which takes a while.

    Raises
    ------
    NoSoundLibraryError
        With how to install it.
    """
    try:
        import sounddevice
    except OSError as error:
        reason = str(error).strip().rstrip(".") or type(error).__name__
        raise NoSoundLibraryError(
            [
                f"the sound library cannot be loaded ({reason}); expected PortAudio; install it "
                "(Debian, Ubuntu: apt-get install libportaudio2; Fedora: dnf install portaudio; "
                "macOS: pip install --force-reinstall sounddevice, which brings it) and start again"
            ]
        ) from error
    return sounddevice


def sound_inputs() -> list[SoundInput]:
    """Return the sound inputs that are there now, in the system's order.

    PortAudio is started anew, since its list stays as it was when it started: **no stream may be open** in this
    process. It may block for ever where a sound server hangs; `driftwatch.stream.soundcard.within` bounds that.
    PortAudio and ALSA write to file descriptor 2 while they look.

    Raises
    ------
    NoSoundLibraryError
        Without PortAudio.
    DeviceUnavailableError
        When PortAudio does not start.
    """
    library = load_portaudio()
    try:
        library._terminate()
        library._initialize()
        hosts = library.query_hostapis()
        default = int(library.default.device[0])
        devices = library.query_devices()
    except library.PortAudioError as error:
        raise DeviceUnavailableError(
            f"the sound inputs cannot be listed ({error}); expected a list; see that the sound system runs"
        ) from error
    if default < 0:  # no default set in this process: the system's
        default = next((int(host["default_input_device"]) for host in hosts if host["default_input_device"] >= 0), -1)
    return [
        SoundInput(
            index=int(device["index"]),
            name=str(device["name"]),
            host=str(hosts[device["hostapi"]]["name"]),
            inputs=int(device["max_input_channels"]),
            rate_hz=float(device["default_samplerate"]),
            is_default=int(device["index"]) == default,
        )
        for device in devices
        if device["max_input_channels"] > 0
    ]


def find_input(inputs: Sequence[SoundInput], wanted: str | None, least_inputs: int = 1) -> SoundInput:
    """Return the input that is meant by a name.

    Parameters
    ----------
    inputs : sequence of SoundInput
        What there is.
    wanted : str or None
        A name, with or without its interface, or a part of it, without regard to case; a whole name goes before
        parts of others. None: the default input.
    least_inputs : int
        How many inputs it must have.

    Raises
    ------
    SourceRefusedError
        When several are meant, with each of them; when it has too few inputs.
    DeviceUnavailableError
        When none is meant, with all there are.
    """
    found = _named(inputs, wanted)
    if found.inputs < least_inputs:
        raise SourceRefusedError(
            [
                f"sound input {found.name!r} has {counted(found.inputs)}; expected at least {least_inputs}; "
                "lower the channels' input numbers or choose another device"
            ]
        )
    return found


def _named(inputs: Sequence[SoundInput], wanted: str | None) -> SoundInput:
    if not inputs:
        raise DeviceUnavailableError(NONE_THERE if wanted is None else f"sound input {wanted!r}: {NONE_THERE}")
    if wanted is None:
        found = [one for one in inputs if one.is_default]
        if found:
            return found[0]
        raise DeviceUnavailableError(
            f"the system names no default sound input; expected one; set device to one of: {_listed(inputs)}"
        )
    matches = _matches(inputs, wanted)
    if not matches:
        raise DeviceUnavailableError(
            f"no sound input is called {wanted!r}; expected a name or a part of one of: {_listed(inputs)}; "
            "plug it in, or end what else uses it (an input in use may not be listed)"
        )
    if len(matches) > 1:
        raise SourceRefusedError(
            [f"{wanted!r} means {len(matches)} sound inputs: {_listed(matches)}; expected one; write more of its name"]
        )
    return matches[0]


def _matches(inputs: Sequence[SoundInput], wanted: str) -> list[SoundInput]:
    words = wanted.strip().casefold()
    exact = [one for one in inputs if words in (one.name.casefold(), one.full_name.casefold())]
    return exact or [one for one in inputs if words in one.full_name.casefold()]


def _listed(inputs: Sequence[SoundInput]) -> str:
    return "; ".join(f"{one.full_name!r} ({counted(one.inputs)})" for one in inputs)


def counted(inputs: int) -> str:
    """Return a number of inputs in words."""
    return f"{inputs} input{'' if inputs == 1 else 's'}"


def words_for(inputs: Sequence[SoundInput], one: SoundInput) -> str | None:
    """Return what to write into ``device`` so that `find_input` finds this one; None: nothing tells it from others.

    A card's number, such as in ``(hw:1,0)``, is left out where the rest will do: it changes with the plug.
    """
    for words in (_PLACE.sub("", one.name), one.name, one.full_name):
        if words.strip() and _matches(inputs, words) == [one]:
            return words
    return None
