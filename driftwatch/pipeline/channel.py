"""One channel: samples in, measurements out.

The channel owns the raw samples and the zoom; each of its modes owns its baseband (`ModeLine`). Blocks of the zoom
lie on a fixed grid, another one for each input. Missing samples are zeros that no usable window may touch; after a gap
longer than a block the channel begins again at the grid's block that holds the first new sample.
"""

from __future__ import annotations

import math
import uuid
from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from driftwatch.measure.zoom import VELOCITY_POWER, BandRequest, Zoom
from driftwatch.pipeline.buffer import SampleBuffer
from driftwatch.pipeline.missing import Incident, Missing, MissingList, unfinite_runs
from driftwatch.pipeline.mode_line import ModeLine
from driftwatch.pipeline.reading import Reading
from driftwatch.records import Fault, Health, Phase, sample_time_ns

if TYPE_CHECKING:
    from driftwatch.config import ChannelConfig, ModeConfig

PHASE_STEP = (math.sqrt(5.0) - 1.0) / 2.0
"""From the grid of one input to that of the next, in hops: the golden ratio spreads any number of inputs evenly over
time, so that they are measured in turn and none waits for all the others."""

MOST_BLOCKS = 16
"""Blocks transformed at a time: side by side they cost less, and memory grows with them."""


class ChannelLine:
    """What measures the modes of one channel.

    Parameters
    ----------
    channel
        Which input, and in which quantity.
    modes
        What is followed on it, at least one.
    rate_hz, start_ns
        Sample rate, and stream time of sample 0.
    first_sample
        Stream index of the first sample to come: of what lies before nothing is known.

    Raises
    ------
    ValueError
        When a search band does not fit the sample rate.
    """

    def __init__(
        self, channel: ChannelConfig, modes: Sequence[ModeConfig], rate_hz: int, start_ns: int, first_sample: int = 0
    ) -> None:
        self.name = channel.name
        self._input = channel.input - 1
        self._rate_hz = rate_hz
        self._start_ns = start_ns
        self._zoom = zoom_of(channel, modes, rate_hz)
        self._missing = MissingList()
        self._unfinite = Incident(rate_hz)
        self._lines = [ModeLine(channel, mode, self._zoom, number, start_ns) for number, mode in enumerate(modes)]
        self._look_back = max(line.look_back for line in self._lines)
        self._position = first_sample  # stream index of the next sample
        if first_sample > 0:
            self._missing.add(Missing(0, first_sample, "gap"))
        self._begin_at(first_sample)

    @property
    def late(self) -> int:
        """Most samples from the end of a window to its result."""
        return max(line.late for line in self._lines)

    def push(self, first_sample: int, samples: NDArray[np.float32]) -> list[Reading]:
        """Take a block in and return what it makes known.

        Parameters
        ----------
        first_sample
            Stream index of the first row.
        samples
            Shape (samples, inputs).

        Raises
        ------
        ValueError
            When the block lies before one that came already.
        """
        if first_sample < self._position:
            raise ValueError(
                f"channel {self.name}: a block at sample {first_sample} came after sample {self._position}; "
                "expected blocks in order"
            )
        readings: list[Reading] = []
        if first_sample > self._position:
            readings.extend(self._skip(first_sample))
        column = samples[:, self._input]
        for begin, end, finite in unfinite_runs(column):
            readings.extend(self._good(column[begin:end]) if finite else self._bad(end - begin))
        readings.extend(self._advance())
        return readings

    @property
    def steps_s(self) -> list[float]:
        """Time between two windows of each mode, seconds."""
        return [line.step_s for line in self._lines]

    @property
    def memory(self) -> int:
        """Samples before the next one that may still bear on what is measured."""
        return self._look_back + self.late

    def finish(self) -> list[Reading]:
        """Return what the last samples still make known."""
        readings = self._flush()
        if self._unfinite.first is not None:
            readings.append(self._unfinite_ends())
        return readings

    # ------------------------------------------------------------------------------------------ grid

    def _begin_at(self, sample: int) -> None:
        """Begin anew with the block of the grid that holds `sample`; what came before counts as zero."""
        self._block = self._zoom.block_of(sample)
        first = self._zoom.first_of(self._block)
        self._raw: SampleBuffer[np.float32] = SampleBuffer(np.float32, first - self._zoom.edge)
        self._raw.append_zeros(sample - self._raw.end)
        self._position = sample
        for line in self._lines:
            line.begin_at(first, sample)

    def _advance(self) -> list[Reading]:
        """Zoom every block that is complete, then let the modes measure."""
        zoom, before = self._zoom, self._block
        while (count := self._complete_blocks()) > 0:
            first = zoom.first_of(self._block) - zoom.edge
            samples = self._raw.view(first, first + zoom.fft_length + (count - 1) * zoom.hop)
            for line, stream in zip(self._lines, zoom.blocks(samples, self._block, count), strict=True):
                line.extend(stream)
            self._block += count
        if self._block == before:  # all that becomes known does so with a block of the grid
            self._raw.give_back()
            return []
        readings = [
            reading for line in self._lines for reading in line.measure(self._raw, self._missing, self._position)
        ]
        keep = min(zoom.first_of(self._block) - zoom.edge, *(line.keeps_from for line in self._lines))
        self._raw.forget(keep)
        self._raw.give_back()  # so that a block and the next one are never held at a time
        self._missing.forget(keep - self._look_back)  # impacts look further back for what is quiet
        return readings

    def _complete_blocks(self) -> int:
        """Return how many blocks can be zoomed now, at most `MOST_BLOCKS`, and few that lie across the raw's seam."""
        zoom = self._zoom
        first = zoom.first_of(self._block)
        beyond = self._raw.end - zoom.edge - first
        before_seam = self._raw.seam + zoom.edge - first
        most = -(-before_seam // zoom.hop) if before_seam > 0 else MOST_BLOCKS
        return min(beyond // zoom.hop, most, MOST_BLOCKS)

    def _flush(self) -> list[Reading]:
        """Go on with zeros until everything up to the position is measured; the position stays."""
        position = self._position
        wanted = position + max(line.lookahead for line in self._lines) + self._zoom.hop + self._zoom.edge
        self._raw.append_zeros(max(0, wanted - self._raw.end))
        readings = self._advance()
        for line in self._lines:
            readings.extend(line.last(self._raw, self._missing, position))
        return [Reading(min(reading.ready, position), reading.time_ns, reading.body) for reading in readings]

    # ------------------------------------------------------------------------------------------ what is missing

    def _skip(self, until: int) -> list[Reading]:
        """Pass over samples that never came, up to stream index `until`."""
        count = until - self._position
        if count <= self._zoom.fft_length:
            self._zeros(count, "gap")
            return []
        self._missing.add(Missing(self._position, until, "gap"))
        readings = self._flush()
        self._begin_at(until)
        return [Reading(min(reading.ready, until), reading.time_ns, reading.body) for reading in readings]

    def _zeros(self, count: int, reason: str) -> None:
        self._missing.add(Missing(self._position, self._position + count, reason))
        self._raw.append_zeros(count)
        self._position += count

    def _good(self, samples: NDArray[np.float32]) -> Iterator[Reading]:
        self._raw.append(samples)
        self._position += len(samples)
        if self._unfinite.is_over(self._position):
            yield self._unfinite_ends()

    def _bad(self, count: int) -> Iterator[Reading]:
        """Pass over samples that are no numbers, and say so."""
        first, end = self._position, self._position + count
        if self._unfinite.bad(first, end):
            yield self._unfinite_record(Phase.BEGIN, first, ready=first + 1)  # known once that sample is here
        self._zeros(count, "not_finite")

    def _unfinite_ends(self) -> Reading:
        end = self._unfinite.end
        reading = self._unfinite_record(Phase.END, end, ready=end + self._rate_hz)
        self._unfinite.first = None
        return reading

    def _unfinite_record(self, phase: Phase, at: int, ready: int) -> Reading:
        first = self._unfinite.first or 0
        since_ns = sample_time_ns(self._start_ns, first, self._rate_hz)
        health = Health(
            channel=self.name,
            fault=Fault.NOT_FINITE,
            phase=phase,
            incident=str(uuid.uuid5(uuid.NAMESPACE_URL, f"{self.name}/not_finite/{since_ns}")),
            since_ns=since_ns,
            seconds=(at - first) / self._rate_hz,
            first_sample=first,
            lost_samples=0 if phase is Phase.BEGIN else self._unfinite.lost,
            value=None,
            limit=None,
            unit=None,
            detail="samples are not numbers; windows that touch them are not used; check what wrote them",
        )
        return Reading(ready, sample_time_ns(self._start_ns, at, self._rate_hz), health)


def zoom_of(channel: ChannelConfig, modes: Sequence[ModeConfig], rate_hz: int) -> Zoom:
    """Return the zoom that serves the modes of a channel.

    Raises
    ------
    ValueError
        When a search band does not fit the sample rate.
    """
    power = VELOCITY_POWER[channel.quantity]
    requests = [
        BandRequest((mode.search_hz.low, mode.search_hz.high), mode.window_s, mode.step_s, power) for mode in modes
    ]
    return Zoom(rate_hz, requests, (channel.input - 1) * PHASE_STEP % 1.0)
