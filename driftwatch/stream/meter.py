"""What a person needs to know a sensor by: level, clipping and the strongest line of each input.

Digital full scale is 1.0 and 0 dB, so a sine that just reaches it has an rms of -3.0 dB.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from driftwatch.records import NS
from driftwatch.stream.instants import instant_ns
from driftwatch.stream.soundcard import scale_into

if TYPE_CHECKING:
    from numpy.typing import NDArray

CLIPPED = 1.0 - 2.0**-15
"""Samples of this size or more are counted as clipped: the largest value of 16 bits."""

HELD_S = 3.0
"""Seconds for which a peak is held, so that a tap can be seen after it."""

ALIKE = 0.999
"""Inputs whose correlation over a second is beyond this carry the same signal."""

STANDS_OUT = 10.0**1.6
"""A line is one where its power is so many times the median's: 1e-6 of looks at a second of white noise of 48 kHz."""


TINY = 1e-30
"""Power below which there is nothing."""


@dataclass(frozen=True, slots=True)
class InputLevel:
    """What one input does now."""

    rms: float  # over the last second, mean removed
    peak: float  # largest absolute sample since the last reading
    held_peak: float  # the same over the last `HELD_S`
    clipped: int  # samples at full scale since the start
    line_hz: float | None  # strongest spectral line of the last second; None: none stands out
    like: int | None  # the first input, from 0, that carries the same signal; None: none does


class LatestSamples:
    """A sink that keeps the last seconds of a stream: written by one thread, read by another.

    Parameters
    ----------
    rate_hz, inputs
        Of the stream.
    seconds
        What is kept; who reads less often misses samples.
    """

    def __init__(self, rate_hz: int, inputs: int, seconds: float = 4.0) -> None:
        self._kept = np.zeros((round(rate_hz * seconds), inputs), np.float32)
        self._total = self._read = 0
        self._arrived_ns = instant_ns()

    @property
    def age_s(self) -> float:
        """Seconds since the last block came, or since there was none yet."""
        return (instant_ns() - self._arrived_ns) / NS

    def take(self, samples: NDArray[Any], arrived_ns: int, flagged: bool) -> None:  # noqa: ARG002 - a sink's
        """Keep a block, of at most what is kept in all."""
        begin = self._total % len(self._kept)
        first = min(len(samples), len(self._kept) - begin)
        scale_into(samples[:first], self._kept[begin : begin + first])
        scale_into(samples[first:], self._kept[: len(samples) - first])
        self._total += len(samples)
        self._arrived_ns = arrived_ns

    def fresh(self) -> NDArray[np.float32]:
        """Return a copy of what came since it was last asked for, as far as it is still there."""
        end = self._total
        begin = max(self._read, end - len(self._kept))
        self._read = end
        return np.take(self._kept, np.arange(begin, end), axis=0, mode="wrap")


class Meter:
    """Reads the levels of a stream.

    Parameters
    ----------
    rate_hz, inputs
        Of the stream.
    """

    def __init__(self, rate_hz: int, inputs: int) -> None:
        self._rate_hz = rate_hz
        self._second = np.zeros((0, inputs), np.float32)
        self._clipped = np.zeros(inputs, np.int64)
        self._peaks: list[tuple[int, NDArray[np.float32]]] = []  # total at the reading, peak of every input
        self._total = 0

    def read(self, samples: NDArray[np.float32]) -> list[InputLevel]:
        """Return the level of each input.

        Parameters
        ----------
        samples : ndarray of shape (n, inputs)
            What came since the last reading; full scale is 1.0.
        """
        self._total += len(samples)
        self._second = np.concatenate([self._second, samples])[-self._rate_hz :]
        size = np.abs(samples)
        self._clipped += np.count_nonzero(size >= CLIPPED, axis=0)
        peak = size.max(axis=0, initial=0.0)
        oldest = self._total - HELD_S * self._rate_hz
        self._peaks = [(at, one) for at, one in self._peaks if at > oldest] + [(self._total, peak)]
        held = np.max([one for _, one in self._peaks], axis=0)
        changes = self._second - (self._second.mean(axis=0) if len(self._second) else 0.0)
        rms = np.sqrt(np.mean(np.square(changes, dtype=np.float64), axis=0)) if len(changes) else np.zeros(len(peak))
        likes = _likes(changes)
        return [
            InputLevel(
                rms=float(rms[one]),
                peak=float(peak[one]),
                held_peak=float(held[one]),
                clipped=int(self._clipped[one]),
                line_hz=strongest_line(changes[:, one], self._rate_hz),
                like=likes[one],
            )
            for one in range(len(peak))
        ]


def _likes(changes: NDArray[np.float32]) -> list[int | None]:
    """Return for each column the first one before it that it follows, whatever its size."""
    products = changes.T.astype(np.float64) @ changes
    powers = np.sqrt(np.diag(products))
    alike = np.abs(products) > ALIKE * np.outer(powers, powers)
    return [next((first for first in range(one) if alike[first, one]), None) for one in range(len(powers))]


def strongest_line(samples: NDArray[np.float32], rate_hz: int) -> float | None:
    """Return the frequency of the strongest spectral line in Hz, or None where none stands out of the rest.

    Parameters
    ----------
    samples : ndarray of shape (n,)
        One input, mean removed.
    rate_hz : int
        Sample rate.

    Notes
    -----
    Periodogram with a Hann window; the line lies at the top of the parabola through the logarithms of the largest
    value and its neighbours, within 0.1 of a bin.
    """
    if len(samples) < 64:
        return None
    powers = np.square(np.abs(np.fft.rfft(samples * np.hanning(len(samples)).astype(np.float32))))
    top = 2 + int(np.argmax(powers[2:-1]))  # what the window leaves of a drifting zero is no line
    if powers[top] <= STANDS_OUT * max(float(np.median(powers)), TINY):
        return None
    below, at, above = np.log(np.maximum(powers[top - 1 : top + 2], TINY))
    bend = float(below - 2 * at + above)
    shift = 0.5 * float(below - above) / bend if bend < 0 else 0.0
    return (top + shift) * rate_hz / len(samples)
