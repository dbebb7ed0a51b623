"""What the sample clock of a source does against the computer's clocks, from counted samples and arrival times.

Three clocks meet here, and nobody reads one: instants come in as parameters. *Stream time* counts samples at the
nominal rate. *Monotonic time* (``monotonic_ns``, ``arrived_ns``) says when blocks arrived; it never steps. *UTC*
(``utc_ns``) is what people and other computers go by; it may be set by an hour at any time, which moves no sample.

Indices and instants are Python integers throughout, so that nothing is rounded however long a run lasts; only
differences become floats.
"""

from __future__ import annotations

import math
from typing import Protocol

from driftwatch.records import NS, Clock, sample_time_ns

BIN_NS = 10 * NS
"""Of so much time the earliest arrival counts: one in hundreds is late by next to nothing, the mean by milliseconds."""

PRIOR_STD = 500e-6
"""Relative deviation of a sound card's clock before anything is known of it; they are sold with up to 300 ppm."""

WANDER_PER_SQRT_S = 0.5e-6 / math.sqrt(3600.0)
"""How far the relative deviation wanders: 0.5 ppm in an hour, twice that in four, as with the temperature of a room.

It is what makes the estimate forget: with arrivals good to 0.1 ms the last half hour or so counts."""

_NOISE_START_S = 2e-3  # standard deviation of a bin's earliest arrival, before any was seen
_NOISE_START_WEIGHT = 4.0  # as many bins as this first guess counts for
_NOISE_MEMORY = 100.0  # bins over which the noise is learned at last
_NOISE_LEAST_S = 20e-6
_OUTLIER = 4.0  # standard deviations beyond which a bin counts less, the more it is off
_OUTLIERS_IN_A_ROW = 3  # on one side: no outliers but samples lost too few to be seen; counting starts afresh
_LEAST_BINS = 3

STEP_NS = 50_000_000
"""A jump of UTC against monotonic time that is called a step."""

SLEW_PPM = 500
"""How fast a time service may turn the clock without stepping it."""


class RateEstimate:
    """The true rate of a sample clock: a straight line through counted samples against monotonic time.

    The lag of a block, arrival less counted samples over the nominal rate, has a lower edge where the computer was
    not busy; the slope of that edge is minus the relative deviation of the rate. Of each `BIN_NS` the smallest lag is
    taken, and a Kalman filter on (lag, slope), the slope in a random walk of `WANDER_PER_SQRT_S`, follows them: a
    regression that forgets, in constant memory. The noise of the bins is learned from the innovations.

    A gap whose length was not counted but taken from the clock says nothing of the rate: behind it (`gap`) the line
    goes on with the same slope from a new intercept.

    Parameters
    ----------
    rate_hz : int
        Nominal rate, Hz.
    """

    def __init__(self, rate_hz: int) -> None:
        self._rate_hz = rate_hz
        self._origin: tuple[int, int] | None = None  # index and arrival of the first sample counted
        self._bin_start_ns: int | None = None
        self._bin_least = (0, 0)  # lag and arrival of the smallest lag in the bin
        self._bin_last_ns = 0
        self._counted_ns = 0  # length of all bins that count
        self._bins = 0
        self._at_ns: int | None = None  # arrival to which the state below belongs
        self._fresh = True  # the lag is unknown
        self._lag, self._slope = 0.0, 0.0  # s, s/s
        self._p00, self._p01, self._p11 = 0.0, 0.0, PRIOR_STD**2
        self._noise, self._noise_weight = _NOISE_START_S**2, _NOISE_START_WEIGHT
        self._row = 0  # outliers in a row, negative: below

    def count(self, index_end: int, arrived_ns: int) -> None:
        """Take in that the samples before `index_end` (stream index) had arrived at `arrived_ns` (monotonic)."""
        if self._origin is None:
            self._origin = (index_end, arrived_ns)
        lag_ns = arrived_ns - self._origin[1] - (index_end - self._origin[0]) * NS // self._rate_hz
        if self._bin_start_ns is not None and arrived_ns - self._bin_start_ns >= BIN_NS:
            self._close()
        if self._bin_start_ns is None:
            self._bin_start_ns, self._bin_least = arrived_ns, (lag_ns, arrived_ns)
        self._bin_least = min(self._bin_least, (lag_ns, arrived_ns))
        self._bin_last_ns = arrived_ns

    def gap(self) -> None:
        """Samples were lost whose number only the clock tells."""
        if self._bin_start_ns is not None and self._bin_last_ns - self._bin_start_ns >= BIN_NS // 2:
            self._close()
        self._bin_start_ns = None
        self._fresh = True

    @property
    def deviation_ppm(self) -> float | None:
        """Deviation of the true rate from the nominal one, ppm; None before half a minute was counted."""
        return None if self._bins < _LEAST_BINS else -1e6 * self._slope

    @property
    def deviation_std_ppm(self) -> float | None:
        """Standard uncertainty of `deviation_ppm`."""
        return None if self._bins < _LEAST_BINS else 1e6 * math.sqrt(self._p11)

    @property
    def span_s(self) -> float:
        """Seconds for which samples were counted for this, gaps left out."""
        return self._counted_ns / NS

    @property
    def noise_s(self) -> float | None:
        """Standard deviation of the earliest arrivals about the line, seconds."""
        return None if self._bins < _LEAST_BINS else math.sqrt(self._noise)

    def _close(self) -> None:
        """Let the bin count."""
        if self._bin_start_ns is None:
            return
        lag_ns, at_ns = self._bin_least
        self._counted_ns += self._bin_last_ns - self._bin_start_ns
        self._bin_start_ns = None
        self._bins += 1
        self._predict(at_ns)
        lag = lag_ns / NS
        if self._fresh:
            self._start(lag)
        else:
            self._correct(lag)

    def _predict(self, at_ns: int) -> None:
        dt = 0.0 if self._at_ns is None else (at_ns - self._at_ns) / NS
        self._at_ns = at_ns
        q = WANDER_PER_SQRT_S**2
        self._lag += self._slope * dt
        self._p00 += 2.0 * dt * self._p01 + dt * dt * self._p11 + q * dt**3 / 3.0
        self._p01 += dt * self._p11 + q * dt * dt / 2.0
        self._p11 += q * dt

    def _start(self, lag: float) -> None:
        """Begin a line at `lag`, with the slope as it is."""
        self._lag, self._p00, self._p01 = lag, self._noise, 0.0
        self._fresh, self._row = False, 0

    def _correct(self, lag: float) -> None:
        innovation = lag - self._lag
        scale = math.sqrt(self._p00 + self._noise)
        excess = abs(innovation) / (_OUTLIER * scale)
        if excess > 1.0:
            self._row = max(self._row, 0) + 1 if innovation > 0 else min(self._row, 0) - 1
            if abs(self._row) >= _OUTLIERS_IN_A_ROW:
                self._start(lag)
                return
        else:
            self._row = 0
        noise = self._noise * max(excess, 1.0) ** 2
        variance = self._p00 + noise
        gain0, gain1 = self._p00 / variance, self._p01 / variance
        self._learn_noise(innovation**2, scale**2)
        self._lag += gain0 * innovation
        self._slope += gain1 * innovation
        self._p11 -= gain1 * self._p01
        self._p00, self._p01 = self._p00 * noise / variance, self._p01 * noise / variance

    def _learn_noise(self, square: float, expected: float) -> None:
        """Bring the noise closer to what an innovation shows, by as much as the noise has a part in it."""
        weight = (self._noise / expected) ** 2
        self._noise_weight = min(self._noise_weight + weight, _NOISE_MEMORY)
        surplus = min(square, _OUTLIER**2 * expected) - expected
        self._noise = max(self._noise + weight / self._noise_weight * surplus, _NOISE_LEAST_S**2)


class WallClock:
    """UTC against monotonic time: where it stands, and where it was set.

    A reading can be wrong by as long as the computer was busy between the two clocks, so that a jump becomes a step
    only when the next reading agrees with it, a second later.
    """

    def __init__(self) -> None:
        self._trusted: tuple[int, int] | None = None  # monotonic time, and UTC less it
        self._doubted: tuple[int, int] | None = None  # a reading that jumped, still alone

    def saw(self, monotonic_ns: int, utc_ns: int) -> float | None:
        """Take in one reading of both clocks at one instant; about one a second is right.

        Returns
        -------
        float or None
            By how many seconds UTC was set, positive: forwards. Once for each step, at the reading that confirms it.
        """
        reading = (monotonic_ns, utc_ns - monotonic_ns)
        if self._trusted is None or _agree(self._trusted, reading):
            self._trusted, self._doubted = reading, None
            return None
        if self._doubted is None or not _agree(self._doubted, reading):
            self._doubted = reading
            return None
        step = (reading[1] - self._trusted[1]) / NS
        self._trusted, self._doubted = reading, None
        return step

    def utc_ns(self, monotonic_ns: int) -> int:
        """Return the UTC of an instant, by the last reading that is trusted.

        Raises
        ------
        ValueError
            Before the first reading.
        """
        if self._trusted is None:
            raise ValueError(
                "no reading of UTC came yet; expected one pair of monotonic time and UTC: call saw() first"
            )
        return monotonic_ns + self._trusted[1]

    def offset_s(self, monotonic_ns: int, stream_ns: int) -> float:
        """Return UTC less stream time, seconds, at an instant whose stream time is `stream_ns`."""
        return (self.utc_ns(monotonic_ns) - stream_ns) / NS


def _agree(before: tuple[int, int], after: tuple[int, int]) -> bool:
    """Whether slewing alone explains how UTC less monotonic time changed."""
    slewed = abs(after[0] - before[0]) * SLEW_PPM // 1_000_000
    return abs(after[1] - before[1]) <= STEP_NS + slewed


class Counted(Protocol):
    """What is needed of the count of a stream: the arrival judge has it."""

    @property
    def rate(self) -> RateEstimate:
        """The true rate."""
        ...

    @property
    def next_index(self) -> int:
        """Stream index behind the latest sample that was counted."""
        ...

    def instant_ns(self, index: int) -> int:
        """Return the monotonic instant that belongs to a stream index."""
        ...


def clock_record(source: str, rate_hz: int, start_ns: int, counted: Counted, wall: WallClock) -> Clock:
    """Return what the sample clock of a source does against the computer's, as of its latest sample.

    The offset does not know how long the device and its driver take from a sensor's plug to the callback: stream time
    and UTC are compared at the arrival of an undelayed block.

    Parameters
    ----------
    source : str
        Its name.
    rate_hz : int
        Nominal rate, Hz.
    start_ns : int
        Stream time of sample 0, UTC nanoseconds.
    counted : Counted
        Its count of samples.
    wall : WallClock
        UTC against monotonic time.

    Raises
    ------
    ValueError
        Before the first block or the first reading of UTC.
    """
    rate, index = counted.rate, counted.next_index
    instant_ns = counted.instant_ns(index)
    return Clock(
        source=source,
        rate_hz=float(rate_hz),
        deviation_ppm=rate.deviation_ppm,
        deviation_std_ppm=rate.deviation_std_ppm,
        span_s=rate.span_s,
        offset_s=wall.offset_s(instant_ns, sample_time_ns(start_ns, index, rate_hz)),
        offset_std_s=rate.noise_s,
    )
