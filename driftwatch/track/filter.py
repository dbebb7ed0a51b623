"""Kalman filter on (ln fn, its rate, ln q), in closed form on plain floats.

The model: ln fn moves with a rate that white acceleration of density `Noise.acceleration` (1/s^3) changes; ln q walks
at random with density `Noise.walk` (1/s). A reading sees ln fn and ln q some time before the state's own time, so its
row for ln fn is (1, -age, 0) (Bar-Shalom, Li & Kirubarajan 2001, ch. 6).

The values here are never changed once made, but not frozen: freezing costs 1.4 us a value, and several are made for
each measurement.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from driftwatch.records import NS

if TYPE_CHECKING:
    from driftwatch.track.reading import Reading


@dataclass(slots=True)
class State:
    """What is known of a mode at one moment: mean and covariance of (ln fn, rate, ln q)."""

    time_ns: int  # stream time it speaks for
    ln_f: float
    rate: float  # d ln fn / dt, 1/s
    ln_q: float
    p_ff: float
    p_fr: float
    p_fq: float
    p_rr: float  # 1/s^2
    p_rq: float
    p_qq: float


@dataclass(slots=True)
class Noise:
    """How much the mode is allowed to change by itself."""

    acceleration: float  # density of the white acceleration of ln fn, 1/s^3
    walk: float  # density of the steps of ln q, 1/s


@dataclass(slots=True)
class Innovation:
    """A reading minus its prediction, with its covariance."""

    f: float
    q: float
    s_ff: float
    s_fq: float
    s_qq: float

    @property
    def distance(self) -> float:
        """Squared Mahalanobis distance: chi-square with 2 degrees of freedom when model and reading agree."""
        det = self.s_ff * self.s_qq - self.s_fq * self.s_fq
        return (self.s_qq * self.f * self.f - 2.0 * self.s_fq * self.f * self.q + self.s_ff * self.q * self.q) / det


def noise_for(reading: Reading, spacing_s: float, memory: float) -> Noise:
    """Return the noise that lets the filter average over about `memory` readings like this one.

    For readings of variance R every T seconds the filter of white acceleration s has its corner at (s / (R T))^(1/4)
    and settles at a variance of sqrt(2) R / memory when that is 1 / (memory T); the one of a random walk w has its
    corner at sqrt(w / (R T)) and settles at R / memory.
    """
    t = memory * spacing_s
    return Noise(reading.var_f * spacing_s / t**4, reading.var_q * spacing_s / (t * t))


def blend(old: Noise, new: Noise, share: float) -> Noise:
    """Return `old` moved towards `new` by a share between 0 and 1."""
    return Noise(
        old.acceleration + share * (new.acceleration - old.acceleration),
        old.walk + share * (new.walk - old.walk),
    )


def start(first: Reading, newest: Reading, noise: Noise) -> State:
    """Return the state after two readings that share no sample and agree.

    The prior of the rate is what the two readings suggest: zero, give or take their distance and their own
    uncertainty over the time between them. Where they differ by more than 2 standard deviations the mode may have
    drifted, or the first reading may be of something else (a window that a step cut in two): the excess joins the
    first one's variance, so that no drift is taken for certain from two readings.
    """
    apart_s = max((newest.moment_ns - first.moment_ns) / NS, 0.5 * newest.window_s)
    moved_f, moved_q = newest.ln_f - first.ln_f, newest.ln_q - first.ln_q
    both_f, both_q = newest.var_f + first.var_f, newest.var_q + first.var_q
    prior = State(
        time_ns=first.moment_ns,
        ln_f=first.ln_f,
        rate=0.0,
        ln_q=first.ln_q,
        p_ff=first.var_f + max(moved_f * moved_f - 4.0 * both_f, 0.0),
        p_fr=0.0,
        p_fq=first.cov,
        p_rr=(moved_f * moved_f + both_f) / (apart_s * apart_s),
        p_rq=0.0,
        p_qq=first.var_q + max(moved_q * moved_q - 4.0 * both_q, 0.0),
    )
    return update(predict(prior, newest.end_ns, noise), newest)


def predict(state: State, time_ns: int, noise: Noise) -> State:
    """Return the state carried forward to a later stream time; an earlier one changes nothing."""
    dt = (time_ns - state.time_ns) / NS
    if dt <= 0.0:
        return state
    a = noise.acceleration
    return State(
        time_ns,
        state.ln_f + dt * state.rate,
        state.rate,
        state.ln_q,
        state.p_ff + dt * (2.0 * state.p_fr + dt * (state.p_rr + a * dt / 3.0)),
        state.p_fr + dt * (state.p_rr + 0.5 * a * dt),
        state.p_fq + dt * state.p_rq,
        state.p_rr + a * dt,
        state.p_rq,
        state.p_qq + noise.walk * dt,
    )


def carry(state: State, time_ns: int, noise: Noise, coast_s: float, memory_s: float) -> State:
    """Return the state at a later time when nothing may have been learned in between.

    For `coast_s` the drift is followed on. Beyond, the figures stay where they are: nobody knows whether the drift
    went on, so the rate's own size joins its uncertainty; after `memory_s` even that is history, and the variance of
    ln fn grows no faster than with time (a random walk) so that a night without excitation stays a sober figure.
    """
    if time_ns - state.time_ns <= coast_s * NS:
        return predict(state, time_ns, noise)
    coasted = predict(state, state.time_ns + round(coast_s * NS), noise)
    blind = replace(coasted, rate=0.0, p_rr=coasted.p_rr + coasted.rate * coasted.rate)
    until_ns = min(time_ns, blind.time_ns + round(memory_s * NS))
    forgotten = predict(blind, until_ns, noise)
    rest_s = (time_ns - until_ns) / NS
    if rest_s <= 0.0:
        return forgotten
    return replace(
        forgotten,
        time_ns=time_ns,
        p_ff=forgotten.p_ff + forgotten.p_rr * memory_s * rest_s,
        p_qq=forgotten.p_qq + noise.walk * rest_s,
    )


def innovation(state: State, reading: Reading) -> Innovation:
    """Return how far a reading lies from what the state predicts for its moment."""
    age = reading.age_s + (state.time_ns - reading.end_ns) / NS
    return Innovation(
        f=reading.ln_f - (state.ln_f - age * state.rate),
        q=reading.ln_q - state.ln_q,
        s_ff=state.p_ff - age * (2.0 * state.p_fr - age * state.p_rr) + reading.var_f,
        s_fq=state.p_fq - age * state.p_rq + reading.cov,
        s_qq=state.p_qq + reading.var_q,
    )


def update(state: State, reading: Reading) -> State:
    """Return the state after a reading: ln fn first, then what ln q tells beyond it, each in Joseph's form.

    With c = cov / var_f the combination ln q - c ln fn has an error independent of that of ln fn, of variance
    var_q - c cov, so that two scalar updates do the work of the joint one.
    """
    age = reading.age_s + (state.time_ns - reading.end_ns) / NS
    c = reading.cov / reading.var_f
    state = _scalar(state, (1.0, -age, 0.0), reading.ln_f, reading.var_f)
    return _scalar(state, (-c, c * age, 1.0), reading.ln_q - c * reading.ln_f, reading.var_q - c * reading.cov)


def _scalar(x: State, h: tuple[float, float, float], value: float, r: float) -> State:
    """Update by one scalar: P+ = (I - k h') P (I - k h')' + r k k', which stays positive when k is rounded."""
    h0, h1, h2 = h
    g0 = x.p_ff * h0 + x.p_fr * h1 + x.p_fq * h2
    g1 = x.p_fr * h0 + x.p_rr * h1 + x.p_rq * h2
    g2 = x.p_fq * h0 + x.p_rq * h1 + x.p_qq * h2
    s = h0 * g0 + h1 * g1 + h2 * g2 + r
    k0, k1, k2 = g0 / s, g1 / s, g2 / s
    e0, e1, e2 = g0 - k0 * s, g1 - k1 * s, g2 - k2 * s  # zero but for the rounding of k
    y = value - (h0 * x.ln_f + h1 * x.rate + h2 * x.ln_q)
    return State(
        x.time_ns,
        x.ln_f + k0 * y,
        x.rate + k1 * y,
        x.ln_q + k2 * y,
        x.p_ff - k0 * g0 - e0 * k0,
        x.p_fr - 0.5 * (k0 * g1 + k1 * g0 + e0 * k1 + e1 * k0),
        x.p_fq - 0.5 * (k0 * g2 + k2 * g0 + e0 * k2 + e2 * k0),
        x.p_rr - k1 * g1 - e1 * k1,
        x.p_rq - 0.5 * (k1 * g2 + k2 * g1 + e1 * k2 + e2 * k1),
        x.p_qq - k2 * g2 - e2 * k2,
    )


def loosen(state: State, shift_f: float, shift_q: float, over_s: float) -> State:
    """Return the state made uncertain by shifts of ln fn and ln q that arose over the last `over_s` seconds."""
    return replace(
        state,
        p_ff=state.p_ff + shift_f * shift_f,
        p_rr=state.p_rr + (shift_f / over_s) ** 2,
        p_qq=state.p_qq + shift_q * shift_q,
    )
