"""One mode followed over time: measurements in, track points out."""

from __future__ import annotations

import math

from driftwatch.records import NS, Z95, Measurement, Method, Track, TrackStatus
from driftwatch.track import filter as kalman
from driftwatch.track.consistency import Cusum, Drifted
from driftwatch.track.reading import Reading, agree, new_part, reading_of, share_no_sample, with_var_q

GATE = 28.74
"""Squared distance beyond which a reading is not taken at once: chi-square, 2 degrees, the tail of 5 sigma (5.7e-7)."""

PENDING_WINDOWS = 3.0
"""For how many windows a reading that nothing confirmed is remembered."""

PENDING_DECAYS = 2
"""How many unconfirmed decays are remembered, however long ago: between impacts there is nothing to learn."""

NOT_FOUND = frozenset({"no_mode", "misfit", "band_edge", "too_wide", "not_converged"})
"""Reasons that say the mode should have been seen and was not; the others say that nothing could be learned."""

DAY_S = 86_400.0
_SMOOTHING = 0.1  # share of the newest reading in what is usual


class ModeTracker:
    """Follows one mode.

    *Start.* Two usable readings that share no sample, agree, and are at most three windows apart make a track (of
    decays: two among the last three). If noise alone looks like a mode in a share p of independent windows, false
    starts come at most 3 p^2 per window: with one false detection in 30 days of 4 s windows (p = 1.5e-6), one false
    start in some 18,000 years, and fewer since the two must agree as well.

    *Outliers and steps.* A reading beyond the gate is remembered and not taken. If another that shares no sample with
    it agrees with it before any reading falls inside the gate, the mode has stepped: the filter starts afresh there.

    *Shared.* A small error that all estimates of ln q have in common, `shared_q`, is part of the uncertainty stated and
    of no average.

    *Doubt.* While a reading outside the gate is neither taken nor contradicted by a later one, the 95 % interval stated
    reaches it: it may be the truth.

    *Held.* While unusable readings come and the last reading used is a window old or older, the status is held and
    the figures stay, with growing uncertainty. One reading inside the gate ends it.

    *Lost.* After `lost_windows` windows in a row in which the mode was not found although it should have been, or
    `silence_s` without any reading. A reading inside the gate ends it while the remembered state is surer than half a
    half-power width; else it takes two readings, as at the start.

    Parameters
    ----------
    channel, mode : str
        Names, as they stand in every track point.
    search_hz : tuple of float
        Band in which the mode may lie, Hz.
    window_s, step_s : float
        Length of the windows of ambient measurements and the time between them, seconds.
    memory_windows : float
        Over how many independent windows a constant truth is averaged.
    lost_windows : float
        After how many windows without finding it a mode counts as lost.
    silence_s : float
        After how long without any reading a mode counts as lost, seconds.
    shared_q : float
        Share of a reading's standard deviation of ln q that all readings may have in common.
    """

    def __init__(
        self,
        channel: str,
        mode: str,
        search_hz: tuple[float, float],
        window_s: float,
        step_s: float,
        *,
        memory_windows: float = 25.0,
        lost_windows: float = 5.0,
        silence_s: float = 60.0,
        shared_q: float = 0.0,
    ) -> None:
        self._channel, self._mode, self._search_hz = channel, mode, search_hz
        self._window_s = window_s
        self._memory = memory_windows
        self._lost_ns = round(lost_windows * window_s * NS)
        self._lost_decays = lost_windows
        self._silence_ns = round((silence_s + step_s) * NS)
        self._status = TrackStatus.SEARCHING
        self._reason: str | None = None
        self._regime: str | None = None
        self._state: kalman.State | None = None
        self._noise = kalman.Noise(0.0, 0.0)
        self._spacing_s = window_s
        self._pending: list[Reading] = []
        self._refused_since_ns: int | None = None  # begin of a run of readings outside the gate
        self._shared_q = shared_q
        self._shared_var_q = 0.0  # of ln q, common to all readings
        self._doubt = (0.0, 0.0)  # standard deviations of ln fn and ln q by which the interval reaches the last of them
        self._before: Reading | None = None
        self._usual_var_q: float | None = None
        self._used_ns: int | None = None
        self._heard_ns: int | None = None
        self._missing_since_ns: int | None = None
        self._missed_decays = 0
        self._cusum_f, self._cusum_q = Cusum(), Cusum()

    @property
    def status(self) -> TrackStatus:
        """What is known of the mode now."""
        return self._status

    def update(self, measurement: Measurement, time_ns: int, now_ns: int | None = None) -> Track:
        """Take one measurement, usable or not, and return the track point after it.

        Parameters
        ----------
        measurement : Measurement
        time_ns : int
            Stream time of the end of the samples it used. The track point speaks for this time, not for the window's
            middle: a drift is followed without the lag of half a window.
        now_ns : int, optional
            A later stream time for the track point to speak for: a decay is known after windows that ended later.
        """
        self._regime = measurement.regime
        self._heard_ns = time_ns if self._heard_ns is None else max(self._heard_ns, time_ns)
        reading = reading_of(measurement, time_ns, self._search_hz)
        if isinstance(reading, str):
            self._miss(measurement.method, reading, time_ns)
        elif self._state is None or self._status is TrackStatus.LOST:
            self._find(reading)
        else:
            self._follow(self._state, reading)
        return self._track(time_ns if now_ns is None else now_ns)

    def tick(self, time_ns: int) -> Track | None:
        """Tell that time went by without samples; return a track point if that changes the status."""
        if self._heard_ns is None:
            self._heard_ns = time_ns
        before = self._status
        if before in (TrackStatus.TRACKING, TrackStatus.HELD) and self._is_stale(time_ns):
            silent = time_ns - self._heard_ns >= self._silence_ns
            self._status = TrackStatus.LOST if silent else TrackStatus.HELD
            self._reason = "gap"
        return self._track(time_ns) if self._status is not before else None

    # ------------------------------------------------------------------------------------------ usable readings

    def _find(self, reading: Reading) -> None:
        """Begin to follow, or follow again, if the reading is confirmed; else remember it."""
        state = self._state
        if state is not None:
            now = self._carried(state, reading.end_ns)
            sure = now.p_ff <= (0.5 * math.exp(-now.ln_q)) ** 2
            if sure and kalman.innovation(now, reading).distance <= GATE:
                self._accept(now, reading)
                return
        self._confirm(reading)

    def _follow(self, state: kalman.State, reading: Reading) -> None:
        now = self._carried(state, reading.end_ns)
        if kalman.innovation(now, reading).distance <= GATE:
            self._accept(now, reading)
        elif not self._confirm(reading):
            self._doubt = (reading.ln_f - now.ln_f) / Z95, (reading.ln_q - now.ln_q) / Z95
            self._refused_since_ns = reading.end_ns if self._refused_since_ns is None else self._refused_since_ns
            if reading.end_ns - self._refused_since_ns >= self._pending_ns(reading):
                self._hold("misfit", reading.end_ns)

    def _confirm(self, reading: Reading) -> bool:
        """Start at a reading if a remembered one vouches for it; else remember it and return False."""
        self._forget(reading)
        for earlier in reversed(self._pending):
            if share_no_sample(earlier, reading) and agree(earlier, reading):
                self._start(earlier, reading)
                return True
        self._pending.append(reading)
        return False

    def _forget(self, newest: Reading) -> None:
        """Drop remembered readings that are too old to vouch for a new one."""
        oldest_ns = newest.end_ns - self._pending_ns(newest)
        decays = [each for each in self._pending if each.decay][-PENDING_DECAYS:]
        windows = [each for each in self._pending if not each.decay and each.end_ns >= oldest_ns]
        self._pending = sorted(decays + windows, key=lambda each: each.end_ns)

    def _pending_ns(self, reading: Reading) -> int:
        return round(PENDING_WINDOWS * max(self._window_s, reading.window_s) * NS)

    def _start(self, first: Reading, newest: Reading) -> None:
        apart_s = (newest.end_ns - first.end_ns) / NS
        self._spacing_s = max(newest.window_s, apart_s) if newest.decay else newest.window_s
        self._noise = kalman.noise_for(newest, self._spacing_s, self._memory)
        self._state = kalman.start(first, newest, self._noise)
        self._before, self._usual_var_q = None, None
        self._cusum_f.reset()
        self._cusum_q.reset()
        self._used(newest)

    def _accept(self, now: kalman.State, reading: Reading) -> None:
        """Update the state by what the reading tells beyond the one before it."""
        reading = self._steadied(reading)
        new = new_part(reading, self._before)
        if new is None:
            return
        self._state = kalman.update(self._loosened(now, new), new)
        self._adapt_noise(reading)
        self._used(reading)

    def _steadied(self, reading: Reading) -> Reading:
        """Return a window's reading with the variance of ln q that its like have had of late.

        The variance grows with the very q that was found (Au 2014), so readings that are low by chance claim to be
        the better ones, and their weighted mean would sit up to one variance of ln q too low however many there are.
        The usual variance does not know the reading's error. What differs by more than a factor of two is no chance
        but another kind of window (shorter, noisier), and stands as it is.
        """
        if reading.decay:
            return reading
        usual, self._usual_var_q = self._usual_var_q, reading.var_q
        if usual is None or not 0.5 <= reading.var_q / usual <= 2.0:
            return reading
        self._usual_var_q = usual * (reading.var_q / usual) ** _SMOOTHING
        return with_var_q(reading, usual)

    def _used(self, reading: Reading) -> None:
        self._used_ns = reading.end_ns if self._used_ns is None else max(self._used_ns, reading.end_ns)
        if not reading.decay:
            self._before = reading
        self._pending.clear()
        self._shared_var_q = self._shared_q**2 * reading.var_q
        self._refused_since_ns, self._doubt = None, (0.0, 0.0)
        self._missing_since_ns, self._missed_decays = None, 0
        self._status, self._reason = TrackStatus.TRACKING, None

    def _loosened(self, now: kalman.State, new: Reading) -> kalman.State:
        """Return the state, less sure if its innovations say that it does not follow any more."""
        seen = kalman.innovation(now, new)
        std_f, std_q = math.sqrt(seen.s_ff), math.sqrt(seen.s_qq)
        since_ns = new.start_ns
        f = self._cusum_f.add(seen.f / std_f, since_ns)
        q = self._cusum_q.add(seen.q / std_q, since_ns)
        if f is None and q is None:
            return now
        shift_f, shift_q = _shift(f, std_f), _shift(q, std_q)
        over_s = (new.end_ns - (f.since_ns if f is not None else since_ns)) / NS
        return kalman.loosen(now, shift_f, shift_q, over_s)

    def _adapt_noise(self, reading: Reading) -> None:
        """Let the allowed change follow the scatter of the readings; decays speak only where there are no windows."""
        if reading.decay:
            if self._before is not None or self._used_ns is None:
                return
            self._spacing_s = max(reading.window_s, (reading.end_ns - self._used_ns) / NS)
        else:
            self._spacing_s = reading.window_s
        fresh = kalman.noise_for(reading, self._spacing_s, self._memory)
        first_window = self._before is None and not reading.decay
        self._noise = fresh if first_window else kalman.blend(self._noise, fresh, _SMOOTHING)

    # ------------------------------------------------------------------------------------------ unusable ones

    def _miss(self, method: Method, reason: str, time_ns: int) -> None:
        """Take note that a measurement came and told nothing."""
        if method is Method.RINGDOWN:
            self._missed_decays += reason in NOT_FOUND
            if (
                self._missed_decays >= self._lost_decays
                and self._status is TrackStatus.TRACKING
                and self._before is None
            ):
                self._status, self._reason = TrackStatus.LOST, reason
            return
        if self._status in (TrackStatus.SEARCHING, TrackStatus.LOST):
            self._reason = reason
            return
        self._hold(reason, time_ns)

    def _hold(self, reason: str, time_ns: int) -> None:
        if reason not in NOT_FOUND:
            self._missing_since_ns = None
        elif self._missing_since_ns is None:
            self._missing_since_ns = time_ns
        missing_since_ns = self._missing_since_ns
        if missing_since_ns is not None and time_ns - missing_since_ns >= self._lost_ns:
            self._status, self._reason = TrackStatus.LOST, reason
        elif self._is_stale(time_ns):
            self._status, self._reason = TrackStatus.HELD, reason

    def _is_stale(self, time_ns: int) -> bool:
        """Say whether the last reading used ended a window ago or longer."""
        return self._used_ns is None or time_ns - self._used_ns >= self._window_s * NS

    # ------------------------------------------------------------------------------------------ track points

    def _carried(self, state: kalman.State, time_ns: int) -> kalman.State:
        coast_s = 2.0 * self._spacing_s
        return kalman.carry(state, time_ns, self._noise, coast_s, self._memory * self._spacing_s)

    def _track(self, time_ns: int) -> Track:
        if self._state is None or self._status is TrackStatus.SEARCHING:
            return self._point()
        x = self._carried(self._state, time_ns)
        f, q = math.exp(x.ln_f), math.exp(x.ln_q)
        std_f = math.sqrt(x.p_ff + self._doubt[0] ** 2)
        std_q = math.sqrt(x.p_qq + self._doubt[1] ** 2 + self._shared_var_q)
        reach = math.exp(Z95 * std_q)
        correlation = x.p_fq / (std_f * std_q)
        rate, rate_std = x.rate * DAY_S, math.sqrt(x.p_rr) * DAY_S
        return self._point(f, f * std_f, q, q * std_q, q / reach, q * reach, correlation, rate, rate_std)

    def _point(
        self,
        frequency_hz: float | None = None,
        frequency_std_hz: float | None = None,
        q: float | None = None,
        q_std: float | None = None,
        q_low: float | None = None,
        q_high: float | None = None,
        correlation: float | None = None,
        rate: float | None = None,
        rate_std: float | None = None,
    ) -> Track:
        return Track(
            channel=self._channel,
            mode=self._mode,
            status=self._status,
            regime=self._regime,
            frequency_hz=frequency_hz,
            frequency_std_hz=frequency_std_hz,
            q=q,
            q_std=q_std,
            q_low=q_low,
            q_high=q_high,
            frequency_q_correlation=correlation,
            frequency_compensated_hz=None,
            frequency_compensated_std_hz=None,
            q_compensated=None,
            q_compensated_std=None,
            clock_std_ppm=None,
            drift_per_day=rate,
            drift_std_per_day=rate_std,
            q_drift_per_day=None,
            q_drift_std_per_day=None,
            baseline=None,
            last_measurement_ns=self._used_ns,
            reason=self._reason,
        )


def _shift(drifted: Drifted | None, std: float) -> float:
    return 0.0 if drifted is None else drifted.mean * std
