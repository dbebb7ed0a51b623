"""One mode on one channel: baseband in, measurements out.

Windows lie on a fixed grid anchored at sample 0. A measurement is a function of its window's samples and the
configuration alone; batches only save time, for every estimator treats each row of a batch by itself.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from driftwatch.measure import ambient, ringdown
from driftwatch.measure.decay_spread import Quiet
from driftwatch.pipeline.buffer import SampleBuffer
from driftwatch.pipeline.impacts import Impact, Impacts
from driftwatch.pipeline.missing import MissingList
from driftwatch.pipeline.reading import Reading
from driftwatch.pipeline.wording import Extent, Subject, ambient_bodies, ringdown_body, unusable_body
from driftwatch.records import Measurement, Method, sample_time_ns

if TYPE_CHECKING:
    from driftwatch.config import ChannelConfig, ModeConfig
    from driftwatch.measure.zoom import Zoom

_Measured = tuple[int, Measurement]  # stream index at which it is known, and what it is

CERTAIN_DB = 20.0
"""A decay where the samples begin must stand so far above its residuals: random response fits no decay that well."""

LEAST_QUIET = 0.5
"""Share of an ambient window that must be free of impacts."""


class ModeLine:
    """What measures one mode.

    Parameters
    ----------
    channel, mode
        What is measured.
    zoom, number
        The channel's zoom, and which of its bands is this mode's.
    start_ns
        Stream time of sample 0.
    """

    def __init__(self, channel: ChannelConfig, mode: ModeConfig, zoom: Zoom, number: int, start_ns: int) -> None:
        self._mode = mode
        self._band = zoom.bands[number]
        self._zoom = zoom
        self._start_ns = start_ns
        self._subject = Subject(channel.name, mode.name, channel.unit, channel.scale, zoom.rate_hz)
        self._impacts = Impacts(self._band, zoom.hop // self._band.decimation)
        self._run_up = round(ringdown.context_s(self._band.search_hz) * zoom.rate_hz)  # wanted before an onset
        self.look_back = (  # samples before what is measured next that may still be asked for
            self._band.window * self._band.decimation + self._run_up + self._impacts.memory * self._band.decimation
        )
        self.begin_at(0, 0)

    # ------------------------------------------------------------------------------------------ grid

    @property
    def step_s(self) -> float:
        """Time between two windows as the grid has it, seconds."""
        return self._band.step / self._band.rate_hz

    @property
    def late(self) -> int:
        """Most samples from the end of a window to its result."""
        return self._zoom.hop + self._zoom.edge + self.lookahead

    @property
    def lookahead(self) -> int:
        """Samples behind a window's end that are looked at before it is measured."""
        return self._impacts.after * self._band.decimation

    @property
    def keeps_from(self) -> int:
        """Stream index of the first raw sample that may still be wanted."""
        window = self._window * self._band.step * self._band.decimation
        onset = self._impacts.settled_until * self._band.decimation - self._run_up
        return min(
            window, onset, *(math.floor(one.onset) * self._band.decimation - self._run_up for one in self._waiting)
        )

    def begin_at(self, first: int, sample: int) -> None:
        """Begin anew: the baseband starts at stream index `first`, the samples at `sample`."""
        step = self._band.step * self._band.decimation
        self._baseband: SampleBuffer[np.complex64] = SampleBuffer(np.complex64, first // self._band.decimation)
        self._window = -(-sample // step)  # number of the next window
        self._waiting: list[Impact] = []  # those whose decay is not complete yet
        self._impacts.begin_at(first // self._band.decimation, -(-sample // self._band.decimation))

    def extend(self, stream: NDArray[np.complex64]) -> None:
        """Take the next piece of baseband in."""
        self._baseband.append(stream)

    def _ready(self, baseband_end: int) -> int:
        """Return the stream index at which baseband up to `baseband_end` and what is looked at behind it is known."""
        return self._zoom.known_at((baseband_end + self._impacts.after) * self._band.decimation)

    # ------------------------------------------------------------------------------------------ measuring

    def measure(self, raw: SampleBuffer[np.float32], missing: MissingList, position: int) -> list[Reading]:
        """Return what the baseband so far makes known.

        Parameters
        ----------
        raw
            The channel's samples.
        missing
            Which of them are not there.
        position
            Stream index up to which samples came: no usable window reaches beyond.
        """
        self._waiting += self._impacts.look(self._baseband, missing, position / self._band.decimation)
        measured: list[_Measured] = []
        windows = list(self._complete_windows(missing, position))
        if Method.AMBIENT in self._mode.methods:
            measured += self._ambient(windows)
        if Method.RINGDOWN in self._mode.methods:
            measured += self._ringdown(raw, missing, position)
        else:
            self._waiting.clear()
        self._forget()
        return self._readings(measured)

    def last(self, raw: SampleBuffer[np.float32], missing: MissingList, position: int) -> list[Reading]:
        """Return what ends with the stretch of samples: windows that a gap cut, and decays that go on no longer."""
        measured: list[_Measured] = []
        if Method.AMBIENT in self._mode.methods and missing.within(position, position + 1):
            measured += self._cut_windows(position)
        if Method.RINGDOWN in self._mode.methods:
            for impact in self._waiting:
                measured += self._decay(impact, position, raw, missing, position)
            self._waiting.clear()
        return self._readings(measured)

    def _readings(self, measured: list[_Measured]) -> list[Reading]:
        """Return measurements in the order in which they are known."""
        return [
            Reading(
                ready,
                sample_time_ns(self._start_ns, body.first_sample + body.samples, self._subject.rate_hz),
                body,
            )
            for ready, body in sorted(measured, key=lambda pair: pair[0])
        ]

    # ------------------------------------------------------------------------------------------ ambient

    def _extent(self, window: int) -> Extent:
        """Return the samples of window number `window`."""
        decimation = self._band.decimation
        return Extent(window * self._band.step * decimation, self._band.window * decimation)

    def _complete_windows(self, missing: MissingList, position: int) -> Iterator[tuple[int, str | None]]:
        """Yield the number of each window that can be measured now, with what spoils it; pass over all others."""
        while (extent := self._extent(self._window)).end <= position:
            end = extent.end // self._band.decimation
            if end > self._baseband.end or end > self._impacts.settled_until:
                return
            gaps = missing.within(extent.first_sample, extent.end)
            if not gaps:
                yield self._window, None
            elif gaps[0].reason != "gap" or gaps[0].first > extent.first_sample:
                yield self._window, gaps[0].reason  # of windows that begin where nothing came, nothing is said
            self._window += 1

    def _cut_windows(self, position: int) -> Iterator[_Measured]:
        """Yield the windows that began before a gap at `position` and would have ended in it."""
        while (extent := self._extent(self._window)).first_sample < position:
            body = unusable_body(self._subject, Method.AMBIENT, extent, ("gap",))
            yield position, body
            self._window += 1

    def _ambient(self, windows: list[tuple[int, str | None]]) -> Iterator[_Measured]:
        """Yield the measurement of each window; what impacts disturb of it is blanked."""
        batch: list[Extent] = []
        blanks: list[list[tuple[int, int]]] = []
        for window, spoilt in windows:
            extent = self._extent(window)
            disturbed = self._impacts.disturbed(*self._baseband_of(extent))
            lost = sum(end - first for first, end in disturbed)
            quiet = lost <= (1.0 - LEAST_QUIET) * self._band.window
            if spoilt is None and quiet and not self._impacts.begun_by_blow(self._baseband, *self._baseband_of(extent)):
                batch.append(extent)
                blanks.append(disturbed)
                continue
            body = unusable_body(self._subject, Method.AMBIENT, extent, (spoilt or "impact",))
            yield self._ready(extent.end // self._band.decimation), body
        if not batch:
            return
        also: list[tuple[str, ...]] = [("impact",) if blank else () for blank in blanks]
        bodies = ambient_bodies(self._subject, batch, self._fit(batch, blanks), also)
        for extent, body in zip(batch, bodies, strict=True):
            yield self._ready(extent.end // self._band.decimation), body

    def _baseband_of(self, extent: Extent) -> tuple[int, int]:
        return extent.first_sample // self._band.decimation, extent.end // self._band.decimation

    def _fit(self, extents: list[Extent], blanks: list[list[tuple[int, int]]]) -> ambient.AmbientFit:
        rows = np.stack([self._baseband.view(*self._baseband_of(extent)) for extent in extents])
        blanked = self._blanked(extents, blanks) if any(blanks) else None
        band = self._band
        return ambient.fit(rows, band.rate_hz, band.centre_hz, band.search_hz, band.velocity_power, blanked)

    def _blanked(self, extents: list[Extent], blanks: list[list[tuple[int, int]]]) -> NDArray[np.bool_]:
        """Return which samples of each window are not to be used, shape (windows, samples)."""
        blanked = np.zeros((len(extents), self._band.window), dtype=np.bool_)
        for row, (extent, blank) in enumerate(zip(extents, blanks, strict=True)):
            origin, _ = self._baseband_of(extent)
            for first, end in blank:
                blanked[row, first - origin : end - origin] = True
        return blanked

    # ------------------------------------------------------------------------------------------ ringdown

    def _ringdown(self, raw: SampleBuffer[np.float32], missing: MissingList, position: int) -> Iterator[_Measured]:
        """Yield the measurement of each decay that is complete: it is over, or the record is full."""
        while self._waiting:
            end = self._decay_end(self._waiting[0])
            if end is None or end * self._band.decimation > position:
                return
            yield from self._decay(self._waiting.pop(0), end * self._band.decimation, raw, missing, self._ready(end))

    def _decay_end(self, impact: Impact) -> int | None:
        """Return the baseband index at which a decay is complete; None while that is not known."""
        end = math.ceil(impact.onset) + self._band.window
        if impact.settled is not None:
            end = min(end, impact.settled)
        return end if end <= self._impacts.settled_until else None

    def _decay(
        self, impact: Impact, end: int, raw: SampleBuffer[np.float32], missing: MissingList, ready: int
    ) -> Iterator[_Measured]:
        """Yield the measurement of a decay up to stream index `end`; none where a begin may be no decay."""
        if impact.doubtful and not self._impacts.falls(impact, self._baseband, end // self._band.decimation):
            return
        onset = impact.onset * self._band.decimation
        first = max(round(onset) - self._run_up, raw.kept)
        for gap in missing.within(first, end):
            if gap.first <= onset:
                first = gap.end
            else:
                end = min(end, gap.first)
        extent = Extent(round(onset), max(end - round(onset), 0))
        if first > onset or extent.samples == 0:
            body = unusable_body(self._subject, Method.RINGDOWN, extent, ("gap",))
        else:
            quiet = Quiet(impact.quiet, self._band.rate_hz, self._band.centre_hz, self._band.velocity_power)
            fit = ringdown.fit(raw.view(first, end), self._subject.rate_hz, self._band.search_hz, onset - first, quiet)
            used = Extent(first + fit.first_sample, fit.samples) if fit.usable else extent
            body = ringdown_body(self._subject, used, fit)
        if not impact.doubtful or (body.snr_db or 0.0) >= CERTAIN_DB:
            yield ready, body

    # ------------------------------------------------------------------------------------------ memory

    def _forget(self) -> None:
        """Let go of the baseband before the next window and the next look for onsets."""
        wanted = min(self._window * self._band.step, self._impacts.settled_until)
        self._baseband.forget(wanted - self._impacts.memory)
        self._impacts.forget(wanted)
