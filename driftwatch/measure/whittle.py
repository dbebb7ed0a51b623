"""Debiased Whittle likelihood of one resonance in a floor: the model, its derivatives, and pools of lines.

The periodogram of a window of length T is compared with its *expectation* under the model, so that a window which
is short against the resonance's memory is not biased (Sykulski, Olhede, Guillaumin, Lilly & Early, Biometrika 2019).
For the velocity of a resonator under white force, with g = zeta wn, the warped frequency u = (w - wn^2/w)/2,
a = g + i u and e = exp(-g T), the expectation is E = 2 P S + floor with

    S = Re{ 1/a - (1 - exp(-a T)) / (a^2 T) }
      = (g + kappa) D - 2 g^2 kappa D^2 - sigma u D^2,      D = 1 / (g^2 + u^2),
    kappa = (1 - e cos psi) / T,    sigma = 2 e g sin(psi) / T.

The second form holds on the lines of the window's own Fourier grid: there exp(-i w T) is the same on every line, so
that the phase psi = (wc - wd) T belongs to the window and not to the line. P is the variance of the baseband signal.

The floor runs linearly from one level at the band's lower edge to another at its upper edge, times the known colour
(w/wc)^2k of white noise after its conversion to velocity; its parameters are ln of the geometric mean f and half the
log ratio d of the two levels, so that it stays positive.

A pool is a run of neighbouring lines, replaced by their mean. Pools are narrow at the peak and widen with the distance
from it, like the resonance itself. The curvature of the model inside a pool is allowed for by (variance of u) S''/2,
so that a pool costs a little information and no bias.

Everything here is a row's own affair: the same row gives the same bits whatever else is in the batch.
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from functools import lru_cache
from typing import Self

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

WN, LN_G, LN_P, FLOOR, TILT = range(5)
"""Columns of a parameter array: wn in rad/s, ln g, ln P, mean log floor f, half the floor's log ratio d."""

POOLS = 32
"""Pools of lines in a window: some nine to a half-power width."""

_LEAST = 1e-12  # of the expected periodogram, whose mean over the band is about 1
_UNDERFLOW = 37.0  # exp(-37) does not change 1 in double precision


@dataclass(frozen=True, slots=True)
class Lines:
    """The lines of a window's Fourier grid that lie inside the search band."""

    first: int  # signed index of the lowest line, 0 is the centre frequency
    count: int
    length: int  # samples in the window
    rate_hz: float
    centre: float  # rad/s
    low: float  # the search band, rad/s
    high: float
    velocity_power: int
    omega: Array  # shape (count,), rad/s, rising; so the following
    half_omega: Array  # w/2
    half_inverse: Array  # 1/(2w)
    own_unit: Array  # (w/wc)^-2k: undoes the conversion to velocity
    upper: Array  # the floor's shape: colour times the share of the upper edge's level
    lower: Array  # the same for the lower edge

    @property
    def spacing(self) -> float:
        """Distance of two lines, rad/s."""
        return 2 * np.pi * self.rate_hz / self.length

    @property
    def seconds(self) -> float:
        """Length T of the window."""
        return self.length / self.rate_hz


@lru_cache(maxsize=256)
def lines_of(
    length: int, rate_hz: float, centre_hz: float, search_hz: tuple[float, float], velocity_power: int
) -> Lines:
    """Return the in-band lines of windows of `length` baseband samples."""
    spacing_hz = rate_hz / length
    below = int(np.ceil((search_hz[0] - centre_hz) / spacing_hz - 1e-9))
    above = int(np.floor((search_hz[1] - centre_hz) / spacing_hz + 1e-9))
    first, last = max(below, -(length // 2)), min(above, (length - 1) // 2)
    omega = 2 * np.pi * (centre_hz + np.arange(first, last + 1, dtype=np.float64) * spacing_hz)
    low, high, centre = 2 * np.pi * search_hz[0], 2 * np.pi * search_hz[1], 2 * np.pi * centre_hz
    colour = (omega / centre) ** (2 * velocity_power)
    place = (omega - low) / (high - low)
    return Lines(
        first=first,
        count=omega.size,
        length=length,
        rate_hz=rate_hz,
        centre=centre,
        low=low,
        high=high,
        velocity_power=velocity_power,
        omega=omega,
        half_omega=0.5 * omega,
        half_inverse=0.5 / omega,
        own_unit=1.0 / colour,
        upper=colour * place,
        lower=colour * (1.0 - place),
    )


@dataclass(frozen=True, slots=True)
class Quiet:
    """How much of each window is not blanked; every array has shape (rows, 1).

    Of a window with blanked samples the periodogram has the same lines, but they are no longer independent: as many
    are worth as many seconds are left. Its expectation is that of the pieces between the blanks, which are taken as
    equally long and, a blank being long against the memory, as independent.
    """

    share: Array  # of the window's samples
    pieces: Array  # runs of samples between the blanks

    @classmethod
    def whole(cls, rows: int) -> Self:
        """Return this of windows without blanks."""
        return cls(np.ones((rows, 1)), np.ones((rows, 1)))

    def rows(self, index: NDArray[np.intp]) -> Self:
        """Return some of the rows."""
        return type(self)(self.share[index], self.pieces[index])

    def seconds(self, lines: Lines) -> Array:
        """Return the length T of one piece."""
        return lines.seconds * self.share / self.pieces


@dataclass(frozen=True, slots=True)
class Pools:
    """Pooled periodograms of a batch; every array but `seconds` has shape (rows, pools)."""

    centre: float  # rad/s
    seconds: Array  # shape (rows, 1), length T of what the window holds in one piece
    count: Array  # lines in the pool, may be 0
    weight: Array  # how many of them are independent
    root_weight: Array  # its square root
    power: Array  # mean periodogram of the pool
    half_omega: Array  # w/2 at the pool's middle
    half_inverse: Array  # 1/(2w) there
    spread: Array  # variance of u inside the pool
    upper: Array  # the floor's shape: colour times the share of the upper edge's level
    lower: Array  # the same for the lower edge

    def rows(self, index: NDArray[np.intp]) -> Self:
        """Return some of the rows."""
        arrays = (np.take(getattr(self, field.name), index, axis=0) for field in fields(self)[1:])
        return type(self)(self.centre, *arrays)


def cumulated(power: NDArray[np.floating]) -> Array:
    """Return the running sum over the lines, shape (rows, lines + 1), beginning with 0."""
    sums = np.zeros((power.shape[0], power.shape[1] + 1))
    np.cumsum(power, axis=1, dtype=np.float64, out=sums[:, 1:])
    return sums


def pool(sums: Array, lines: Lines, quiet: Quiet, wn: Array, g: Array) -> Pools:
    """Pool periodograms around resonances.

    Parameters
    ----------
    sums
        Shape (rows, lines + 1), see `cumulated`.
    lines
        Their frequencies.
    quiet
        How much of each window is there.
    wn, g
        Shape (rows,), rad/s and 1/s: where the pools are to be narrow, and how narrow.
    """
    edges = _edges(lines, wn, g)
    begin, end = edges[:, :-1], edges[:, 1:]
    count = (end - begin).astype(np.float64)
    taken = np.take(sums, edges + sums.shape[1] * np.arange(sums.shape[0])[:, None])
    power = (taken[:, 1:] - taken[:, :-1]) / np.maximum(count, 1.0)
    omega = (begin + end) * (0.5 * lines.spacing) + (lines.omega[0] - 0.5 * lines.spacing)
    upper = (omega - lines.low) * (1.0 / (lines.high - lines.low))
    lower = 1.0 - upper
    if lines.velocity_power:
        colour = (omega / lines.centre) ** (2 * lines.velocity_power)
        upper *= colour
        lower *= colour
    half_inverse = 0.5 / omega
    warp = half_inverse * wn[:, None]  # du/dw = 1/2 + 2 (wn/2w)^2
    warp = 0.5 + 2.0 * (warp * warp)
    spread = np.maximum(count * count - 1.0, 0.0) * (warp * warp) * (lines.spacing**2 / 12)
    weight = count * quiet.share
    return Pools(
        centre=lines.centre,
        seconds=quiet.seconds(lines),
        count=count,
        weight=weight,
        root_weight=np.sqrt(weight),
        power=power,
        half_omega=0.5 * omega,
        half_inverse=half_inverse,
        spread=spread,
        upper=upper,
        lower=lower,
    )


def _edges(lines: Lines, wn: Array, g: Array) -> NDArray[np.int64]:
    """Return the pools' first lines, shape (rows, pools + 1): at equal steps of asinh((w - wn)/g)."""
    if lines.count <= POOLS:
        return np.broadcast_to(np.arange(lines.count + 1), (wn.size, lines.count + 1))
    scale = np.maximum(g, lines.spacing)[:, None]
    place = wn[:, None]
    begin = np.arcsinh((lines.omega[0] - 0.5 * lines.spacing - place) / scale)
    end = np.arcsinh((lines.omega[-1] + 0.5 * lines.spacing - place) / scale)
    omega = place + scale * np.sinh(begin + (end - begin) * np.linspace(0.0, 1.0, POOLS + 1))
    edges = np.rint((omega - lines.omega[0]) / lines.spacing + 0.5).astype(np.int64)
    return np.asarray(np.clip(edges, 0, lines.count), dtype=np.int64)


@dataclass(frozen=True, slots=True)
class Short:
    """What exp(-g T) adds to S g in windows that are short against the memory; every array has shape (rows, 1).

    S g = d + kappa' (d - 2 d^2) - sigma' x d^2 with x = u/g, d = 1/(1 + x^2), kappa' = kappa/g, sigma' = sigma/g.
    """

    kappa: Array  # kappa'
    kappa_g: Array  # its derivative by ln g
    kappa_wn: Array  # by wn/g
    sigma: Array  # sigma'
    sigma_g: Array
    sigma_wn: Array
    matters: bool  # whether exp(-g T) changes anything in any row

    @classmethod
    def of(cls, wn: Array, g: Array, seconds: Array, centre: float) -> Self:
        """Return the coefficients for wn, g and the windows' length of shape (rows, 1)."""
        decay = g * seconds
        soon = decay < _UNDERFLOW
        kappa = 1.0 / decay
        if not np.any(soon):
            return cls(kappa, -kappa, kappa, kappa, kappa, kappa, matters=False)
        e = np.where(soon, np.exp(-decay), 0.0)
        psi = (centre - np.sqrt(np.maximum(wn * wn - g * g, 0.0))) * seconds
        ec, es = e * np.cos(psi), e * np.sin(psi)
        return cls(
            kappa=kappa * (1.0 - ec),
            kappa_g=-kappa * (1.0 - ec) + ec,
            kappa_wn=-es,
            sigma=2.0 * kappa * es,
            sigma_g=-2.0 * es * (1.0 + kappa),
            sigma_wn=-2.0 * ec,
            matters=True,
        )


def expected(theta: Array, pools: Pools) -> tuple[Array, Array]:
    """Return the expected periodogram and its derivatives.

    Parameters
    ----------
    theta
        Shape (rows, 5), see `WN`, `LN_G`, `LN_P`, `FLOOR`, `TILT`.
    pools
        Where, with the same rows.

    Returns
    -------
    E : shape (rows, pools)
    J : shape (6, rows, pools)
        Derivatives of E by wn/g (wn in units of the row's g), ln g, ln P, f, d; the last one is left blank.
    """
    wn, logs = theta[:, WN, None], np.exp(theta[:, LN_G:, None])
    g, level, lift = logs[:, 0], logs[:, 2], logs[:, 3]
    height = 2.0 * logs[:, 1] / g
    short = Short.of(wn, g, pools.seconds, pools.centre)
    columns = np.empty((6, *pools.power.shape))
    by_wn, _, signal, floor, by_tilt = columns[:5]
    x = pools.half_omega * (1.0 / g)
    x -= pools.half_inverse * (wn * (wn / g))
    d = x * x
    d += 1.0
    np.divide(1.0, d, out=d)
    _resonance(short, height, pools.spread * (height * (1.0 + short.kappa) / (g * g)), x, d, columns)
    by_wn *= pools.half_inverse
    by_wn *= -2.0 * wn  # dx/dwn = -wn/(w g)
    if short.matters:
        by_wn += height * (short.kappa_wn * (d - 2.0 * d * d) - short.sigma_wn * (x * d * d))
    upper = (level * lift) * pools.upper
    lower = (level / lift) * pools.lower
    np.add(upper, lower, out=floor)
    np.subtract(upper, lower, out=by_tilt)
    # pools much wider than the resonance, as a search may meet them, drive the curvature's term below nothing
    return np.maximum(signal + floor, _LEAST), columns


def _resonance(short: Short, height: Array, bend: Array, x: Array, d: Array, columns: Array) -> None:
    """Fill in the resonance's part and its derivatives by x and by ln g.

    With q = height (1 + kappa'), r = 2 height kappa' and the curvature inside a pool, bend = q v / g^2, the part is
    q d + (3 bend - r) d^2 - 4 bend d^3.
    """
    q, r = height * (1.0 + short.kappa), (2.0 * height) * short.kappa
    by_x, by_g, signal = columns[:3]
    curve = d * -4.0
    curve += 3.0
    curve *= bend  # bend (3 - 4 d)
    square = curve - r
    square *= d
    np.add(square, q, out=signal)
    bend *= d
    bend *= d
    bend *= -4.0
    by_x[:] = signal
    by_x += square
    by_x += bend  # derivative by d: q + 2 (3 bend - r) d - 12 bend d^2
    signal *= d
    by_x *= d
    by_x *= d
    by_x *= x
    by_x *= -2.0
    # by ln g: the height and x fall with g, the bend with its square
    np.multiply(curve, -3.0 + short.kappa_g / (1.0 + short.kappa), out=by_g)
    by_g -= height * (2.0 * short.kappa_g) - r
    by_g *= d
    by_g += height * short.kappa_g - q
    by_g *= d
    if short.matters:
        _add_short(short, height, x, d, columns)
    by_g -= x * by_x


def _add_short(short: Short, height: Array, x: Array, d: Array, columns: Array) -> None:
    by_x, by_g, signal = columns[:3]
    xd2 = x * d * d
    signal -= (height * short.sigma) * xd2
    by_x -= (height * short.sigma) * (d * d - 4.0 * x * xd2 * d)
    by_g -= (height * (short.sigma_g - short.sigma)) * xd2


def on_lines(theta: Array, lines: Lines, quiet: Quiet, kind: type[np.floating] = np.float64) -> NDArray[np.floating]:
    """Return the expected periodogram on every line, shape (rows, lines), in single precision where that will do."""
    wn, logs = theta[:, WN, None], np.exp(theta[:, LN_G:, None])
    g, level, lift = logs[:, 0], logs[:, 2], logs[:, 3]
    short = Short.of(wn, g, quiet.seconds(lines), lines.centre)
    height = 2.0 * logs[:, 1] / g
    middle = lines.omega[lines.count // 2]
    omega, inverse = (lines.omega - middle).astype(kind), (0.5 / lines.omega).astype(kind)
    x = inverse * (wn / g).astype(kind)
    x += (0.5 / g).astype(kind)
    x *= omega - (wn - middle).astype(kind)  # u = (w - wn) (1/2 + wn/2w)
    d = x * x
    d += 1.0
    np.divide(1.0, d, out=d)
    signal = d * (-2.0 * height * short.kappa).astype(kind)
    signal += (height * (1.0 + short.kappa)).astype(kind)
    if short.matters:
        signal -= (height * short.sigma).astype(kind) * (x * d)
    signal *= d
    signal += (level * lift).astype(kind) * lines.upper.astype(kind)
    signal += (level / lift).astype(kind) * lines.lower.astype(kind)
    return np.asarray(signal, dtype=kind)
