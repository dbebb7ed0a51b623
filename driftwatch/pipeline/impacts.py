"""Where impacts fell into a mode's baseband, and how long each disturbs what follows.

Onsets are looked for in segments on a fixed grid, one for each block of the zoom, with fixed context on either side.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from driftwatch.measure import onset
from driftwatch.measure.ringdown import GUARD

if TYPE_CHECKING:
    from driftwatch.measure.zoom import Band
    from driftwatch.pipeline.buffer import SampleBuffer
    from driftwatch.pipeline.missing import MissingList

SETTLED = 4.0
"""A decay is over when the power has come down to so many times the mean power before its onset: random response
alone is stronger for one fiftieth of the time."""

FALL = 10.0
"""Power at the begin of a decay over that of its last quarter, at least, where only the decay can prove the onset."""


@dataclass(slots=True, eq=False)
class Impact:
    """One impact and what it disturbs, in baseband samples."""

    onset: float
    before: float  # mean power before it
    looked: int  # up to where its end was looked for
    doubtful: bool  # so near the begin of the samples that the begin itself may look like it
    quiet: NDArray[np.complex64]  # what is free of any disturbance in the window's length before it
    settled: int | None = None  # where its decay is over; None: not yet


class Impacts:
    """Finds the impacts of one mode.

    Parameters
    ----------
    band
        The zoom's band.
    segment
        Baseband samples in a segment: one block of the zoom.
    """

    def __init__(self, band: Band, segment: int) -> None:
        self._band = band
        self._segment = segment
        self._detector = onset.detector(band.rate_hz, band.search_hz)
        self.before = self._detector.before
        # an onset may lie a little before the core that its highest innovation belongs to
        self.after = self._detector.after + self._detector.separation
        self._reciprocal = band.rate_hz / (band.search_hz[1] - band.search_hz[0])  # bandwidth's, in samples
        self._chunk = max(4, round(4.0 * self._reciprocal))
        self.memory: int = band.window + self.before + self._chunk  # baseband that must stay before what is wanted next
        self._impacts: list[Impact] = []
        self.begin_at(0, 0)

    def begin_at(self, first: int, sample: int) -> None:
        """Begin anew: the baseband starts at `first`, the samples in it at `sample`."""
        self._begin: int = sample
        self._begun = False
        self._origin: int = first
        self._next: int = first  # where the next segment begins, before it is shifted by what is looked at behind it
        self._impacts.clear()

    @property
    def settled_until(self) -> int:
        """Baseband index up to which every onset is known."""
        return max(self._next - self.after, self._origin)

    def look(self, baseband: SampleBuffer[np.complex64], missing: MissingList, end: float) -> list[Impact]:
        """Look through every segment that is complete; return the new impacts.

        `end` is the baseband index at which the samples end for now: after it there are zeros, and no onset.
        """
        count = (baseband.end - self._next) // self._segment
        if count <= 0:
            return []
        found = self._detector.find(self._rows(baseband, count))
        begins = [self._next - self._detector.after - self.before + row * self._segment for row in range(count)]
        places = [
            max(begin + one.position, float(self._begin))
            for begin, ones in zip(begins, found, strict=True)
            for one in ones
        ]
        new = [] if self._begun else [self._new(baseband, float(self._begin), missing)]
        self._begun = True
        self._next += count * self._segment
        for place in places:
            if place > end - 2.0 * self._reciprocal or self._is_edge_of_gap(place, missing):
                continue
            if new and new[-1].onset == self._begin and place - self._begin < 2.0 * self._reciprocal:
                self._impacts.remove(new.pop())  # the begin itself is no second one
            if self._detector.is_repetition(place, self._last_onset()):
                continue
            self._settle(baseband, math.floor(place))
            new.append(self._new(baseband, place, missing))
        self._settle(baseband, self.settled_until)
        return new

    def _last_onset(self) -> float | None:
        """Return where the last impact began, if it was more than the begin of the samples."""
        return self._impacts[-1].onset if self._impacts and self._impacts[-1].onset != self._begin else None

    def _new(self, baseband: SampleBuffer[np.complex64], place: float, missing: MissingList) -> Impact:
        first = math.ceil(place) + 1
        if self._impacts and self._impacts[-1].doubtful:
            self._impacts[-1].settled = math.floor(place)
        if place < self._begin + self.before:  # nothing before it to compare with
            nothing = np.zeros(0, np.complex64)
            impact = Impact(place, 0.0, first, doubtful=True, quiet=nothing, settled=first + self._band.window)
        else:
            quiet = self._quiet_before(baseband, place, missing)
            impact = Impact(place, self._power_before(baseband, place), first, doubtful=False, quiet=quiet)
        self._impacts.append(impact)
        return impact

    def _is_edge_of_gap(self, place: float, missing: MissingList) -> bool:
        """Say whether the edge of a gap, filled with zeros, may look like an onset here."""
        first, end = math.floor(place) - self.before, math.ceil(place) + self.after
        step = self._band.decimation
        return any(run.end > self._begin * step for run in missing.within(first * step, end * step))

    def _rows(
        self, baseband: SampleBuffer[np.complex64], count: int
    ) -> np.ndarray[tuple[int, int], np.dtype[np.complex64]]:
        """Return the segments with their context, shape (count, before + segment + after); zeros before the begin."""
        first = self._next - self._detector.after - self.before
        end = self._next + count * self._segment
        held = max(first, self._origin)
        stretch = np.concatenate((np.zeros(held - first, np.complex64), baseband.view(held, end)))
        length = self.before + self._segment + self._detector.after
        windows = np.lib.stride_tricks.sliding_window_view(stretch, length)[:: self._segment]
        return np.ascontiguousarray(windows[:count])

    def falls(self, impact: Impact, baseband: SampleBuffer[np.complex64], end: int) -> bool:
        """Say whether the power from an onset on falls by `FALL` or more up to baseband index `end`."""
        first = math.floor(impact.onset)
        if end - first < 4 * self._chunk:
            return False
        head = baseband.view(first, first + self._chunk)
        tail = baseband.view(end - (end - first) // 4, end)
        return bool(np.vdot(head, head).real / len(head) >= FALL * np.vdot(tail, tail).real / len(tail))

    def forget(self, before: int) -> None:
        """Let go of impacts that are over before baseband index `before`; the last one stays, for its level."""
        self._impacts = [
            one for one in self._impacts[:-1] if one.settled is None or one.settled > before
        ] + self._impacts[-1:]

    def begun_by_blow(self, baseband: SampleBuffer[np.complex64], first: int, end: int) -> bool:
        """Say whether the samples begin between `first` and `end` with what can only be a decay."""
        return any(
            one.doubtful and first <= one.onset < end and self.falls(one, baseband, end) for one in self._impacts
        )

    def disturbed(self, first: int, end: int) -> list[tuple[int, int]]:
        """Return what impacts disturb of the baseband from `first` to before `end`: runs (begin, end), in order."""
        runs: list[tuple[int, int]] = []
        for one in self._impacts:
            begin = max(first, math.floor(one.onset) - 1, runs[-1][1] if runs else first)
            until = end if one.settled is None else min(end, one.settled)
            if not one.doubtful and begin < until:
                runs.append((begin, until))
        return runs

    def _power_before(self, baseband: SampleBuffer[np.complex64], place: float) -> float:
        """Return the mean power over a window before an onset, or before the last impact if that has hardly ended."""
        end = math.floor(place) - 1
        first = max(self._begin, end - self._band.window)
        earlier = self.disturbed(first, end) if end > first else []
        first = max([first, *(stretch[1] for stretch in earlier)])
        if earlier and (self._impacts[-1].settled is None or end - first < self._chunk):
            return self._impacts[-1].before
        if end <= first:
            return 0.0
        return float(np.mean(np.square(np.abs(baseband.view(first, end)))))

    def _quiet_before(
        self, baseband: SampleBuffer[np.complex64], place: float, missing: MissingList
    ) -> NDArray[np.complex64]:
        """Return a copy of what lies within a window's length before an onset, clear of everything by the guard."""
        guard = math.ceil(GUARD * self._reciprocal)
        end = math.floor(place) - guard
        first = max(self._begin + guard, math.floor(place) - 1 - self._band.window)
        step = self._band.decimation
        gaps = [-(-run.end // step) + guard for run in missing.within((first - guard) * step, end * step)]
        first = max([first, *gaps, *(until + guard for _, until in self.disturbed(first, end))])
        return baseband.view(first, end).copy() if first < end else np.zeros(0, np.complex64)

    def _settle(self, baseband: SampleBuffer[np.complex64], until: int) -> None:
        """Look for the end of each decay that goes on, chunk by chunk on its own grid, up to baseband index `until`."""
        for number, one in enumerate(self._impacts):
            after = self._impacts[number + 1].onset if number + 1 < len(self._impacts) else math.inf
            while one.settled is None and one.looked + self._chunk <= until:
                chunk = baseband.view(one.looked, one.looked + self._chunk)
                one.looked += self._chunk
                if one.looked > after or np.mean(np.square(np.abs(chunk))) <= SETTLED * one.before:
                    one.settled = one.looked
