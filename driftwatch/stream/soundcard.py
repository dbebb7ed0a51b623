"""Samples from a sound input, through PortAudio: the callback hands over and flags, nothing else.

What PortAudio does that its interface does not tell (seen on a virtual sound card):

* A lost device or server ends the stream: `CardStream.finished` becomes true, no exception comes. A server that
  hangs ends nothing: no callback comes any more, and closing blocks for ever. Whoever opens a stream therefore also
  watches the age of the last callback, and does so in a process that can be killed.
* At the end of a process PortAudio is ended too, and that blocks just so: after a `CardStream.close` or `within`
  that gave up, leave by ``os._exit`` or be killed.
* Losses are flagged or not. Count frames, and compare their total with the monotonic clock.
* PortAudio and ALSA write on file descriptor 2 when something is lost or cannot be opened, past Python. A parent
  gets it by the child's stderr; `without_stderr` keeps it off a terminal.
"""

from __future__ import annotations

import errno
import threading
from typing import TYPE_CHECKING, Any, Literal, Protocol

import numpy as np

from driftwatch.stream.hanging import leave_hung, within, without_stderr
from driftwatch.stream.instants import instant_ns
from driftwatch.stream.sound_inputs import (
    DeviceUnavailableError,
    NoSoundLibraryError,
    SoundInput,
    counted,
    find_input,
    load_portaudio,
    sound_inputs,
)
from driftwatch.stream.source import SourceRefusedError, StreamError

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = [
    "FULL_SCALE",
    "CardStream",
    "DeviceUnavailableError",
    "NoSoundLibraryError",
    "SampleFormat",
    "Sink",
    "SoundInput",
    "find_input",
    "leave_hung",
    "scale_into",
    "sound_inputs",
    "within",
    "without_stderr",
]

SampleFormat = Literal["float32", "int16", "int32"]

FULL_SCALE: dict[SampleFormat, float] = {"float32": 1.0, "int16": 2.0**15, "int32": 2.0**31}
"""What digital full scale is in each format."""

# Numbers of PortAudio's errors (portaudio.h).
_HOST_ERROR, _CHANNELS, _RATE, _DEVICE, _FORMAT, _COMBINATION, _UNAVAILABLE = (
    -9999, -9998, -9997, -9996, -9994, -9993, -9985,
)  # fmt: skip


class Sink(Protocol):
    """Who takes the samples, on PortAudio's own thread."""

    def take(self, samples: NDArray[Any], arrived_ns: int, flagged: bool) -> None:
        """Copy a block at once; wait for nothing, allocate nothing that can be avoided, raise nothing.

        Parameters
        ----------
        samples : ndarray of shape (frames, inputs)
            PortAudio's own memory in the format asked for; it is gone when this returns.
        arrived_ns : int
            `instant_ns` as the block came. Blocks come in bursts: tell no rate from a few of them.
        flagged : bool
            PortAudio says that samples were lost before this block; it does not say how many, and not always.
        """
        ...


def scale_into(samples: NDArray[Any], out: NDArray[np.float32]) -> None:
    """Copy samples of any format to float32 with full scale 1.0, without any memory in between.

    Integers are divided by a power of two, so that int16 is exact and int32 is rounded once, to 24 bits.
    """
    np.copyto(out, samples, casting="same_kind")
    if samples.dtype.kind == "i":
        out *= np.float32(0.5 ** (8 * samples.dtype.itemsize - 1))


class CardStream:
    """An open sound input, from which blocks go to a sink from now on.

    Parameters
    ----------
    device : SoundInput
        From the list that `sound_inputs` made last.
    rate_hz : int
        Sample rate.
    inputs : int
        How many inputs are opened, from the first on.
    sample_format : {"float32", "int16", "int32"}
        What PortAudio is asked for; it converts where the device has another one, without dither.
    frames : int
        Samples per input in each block.
    sink : Sink
        Takes every block, on a thread of PortAudio's. When it raises, the stream ends.
    latency : float or {"low", "high"}
        Seconds that the device's own buffer should hold: for so long we may be late without a loss.

    Raises
    ------
    SourceRefusedError
        What will not pass with time: a rate, format or number of inputs that the device has not.
    DeviceUnavailableError
        What may pass: the device is gone, or used by another program.

    Notes
    -----
    Opening blocks for ever where the sound server hangs; `within` bounds that.
    """

    def __init__(
        self,
        device: SoundInput,
        *,
        rate_hz: int,
        inputs: int,
        sample_format: SampleFormat,
        frames: int,
        sink: Sink,
        latency: float | Literal["low", "high"] = "high",
    ) -> None:
        self._finished = threading.Event()
        library = load_portaudio()
        take, now = sink.take, instant_ns

        def callback(samples: NDArray[Any], _frames: int, _times: object, status: object) -> None:
            take(samples, now(), bool(status))

        try:
            self._stream = library.InputStream(
                device=device.index,
                samplerate=rate_hz,
                channels=inputs,
                dtype=sample_format,
                blocksize=frames,
                latency=latency,
                dither_off=True,
                callback=callback,
                finished_callback=self._finished.set,
            )
            self._start(library)
            self._latency_s = float(self._stream.latency)
        except (library.PortAudioError, ValueError) as error:
            raise refused_opening(error, device, rate_hz, inputs, sample_format) from error

    def _start(self, library: Any) -> None:
        try:
            self._stream.start()
        except library.PortAudioError:
            self._stream.close(ignore_errors=True)
            raise

    @property
    def finished(self) -> bool:
        """Whether no more blocks will come: the device or its server is gone, the sink raised, or it was closed."""
        return self._finished.is_set()

    @property
    def latency_s(self) -> float:
        """Seconds that PortAudio's buffer holds."""
        return self._latency_s

    def close(self, deadline_s: float) -> bool:
        """End the stream; drop what was not handed over.

        Returns
        -------
        bool
            False: it still hangs after `deadline_s` seconds. The process must then end by ``os._exit`` or be killed,
            and must not touch PortAudio any more.
        """
        try:
            within(deadline_s, self._end)
        except TimeoutError:
            return False
        return True

    def _end(self) -> None:
        self._stream.abort(ignore_errors=True)
        self._stream.close(ignore_errors=True)


def refused_opening(error: Exception, device: SoundInput, rate_hz: int, inputs: int, sample_format: str) -> StreamError:
    """Return our error for one of PortAudio's at opening: what came, what was expected, what to do."""
    name, why = repr(device.name), _reason(error)
    match _number(error):
        case _ if _is_errno(error, errno.EBUSY):
            return DeviceUnavailableError(_BUSY.format(name=name, why=why))
        case _ if _is_errno(error, errno.EACCES, errno.EPERM):
            return SourceRefusedError([_FORBIDDEN.format(name=name, why=why)])
        case n if n == _UNAVAILABLE:
            return DeviceUnavailableError(_BUSY.format(name=name, why=why))
        case n if n == _CHANNELS:
            has = f"sound input {name} has {counted(device.inputs)}"
            return SourceRefusedError([f"{has}; expected {inputs}; lower inputs or choose another device ({why})"])
        case n if n == _RATE:
            likes = f"it prefers {device.rate_hz:g} Hz"
            return SourceRefusedError(
                [f"sound input {name} does not run at {rate_hz} Hz ({why}); {likes}; set rate_hz to a rate it has"]
            )
        case n if n == _FORMAT:
            has = f"sound input {name} gives no {sample_format} ({why})"
            return SourceRefusedError([f"{has}; expected float32, int16 or int32; set sample_format to another one"])
    return DeviceUnavailableError(_GONE.format(name=name, why=why))


_BUSY = "sound input {name} is in use ({why}); expected it free; end the program that has it open, or stop its server"
_FORBIDDEN = (
    "sound input {name} may not be opened ({why}); expected permission; on Linux add this user to the group audio"
)
_GONE = "sound input {name} cannot be opened ({why}); expected it to be there; see its plug, or its sound server"


def _number(error: Exception) -> int | None:
    """Return PortAudio's number of an error, where it has one."""
    number = error.args[1] if len(error.args) > 1 else None
    return number if isinstance(number, int) else None


def _is_errno(error: Exception, *numbers: int) -> bool:
    """Say whether the system's own error, where PortAudio passed it on, is one of these."""
    host = error.args[2] if len(error.args) > 2 and _number(error) == _HOST_ERROR else None
    return isinstance(host, tuple) and len(host) > 1 and isinstance(host[1], int) and abs(host[1]) in numbers


def _reason(error: Exception) -> str:
    """Return the library's reason without the name of its function."""
    text = str(error.args[0] if error.args else error).removeprefix("Error opening InputStream: ").strip()
    if _number(error) == _COMBINATION:  # PortAudio's word for an input that fails to open by any other reason than busy
        return "the system does not open it"
    return text.rstrip(".") or type(error).__name__
