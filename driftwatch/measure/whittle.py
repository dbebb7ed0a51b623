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
    omega: Array  # shape (count,), rad/s, rising

    @property
    def spacing(self) -> float:
        """Distance of two lines, rad/s."""
        return 2 * np.pi * self.rate_hz / self.length

    @property
    def seconds(self) -> float:
        """Length T of the window."""
        return self.length / self.rate_hz

    def colour(self, omega: Array) -> Array:
        """Return (w/wc)^2k."""
        return np.asarray((omega / self.centre) ** (2 * self.velocity_power), dtype=np.float64)

    def tilt(self, omega: Array) -> Array:
        """Return the place in the band, -1 at its lower and 1 at its upper edge."""
        return (omega - 0.5 * (self.low + self.high)) * (2.0 / (self.high - self.low))


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
    low, high = (2 * np.pi * edge for edge in search_hz)
    return Lines(first, omega.size, length, rate_hz, 2 * np.pi * centre_hz, low, high, velocity_power, omega)


@dataclass(frozen=True, slots=True)
class Pools:
    """Pooled periodograms of a batch; every array has shape (rows, pools)."""

    seconds: float  # length T of the windows
    centre: float  # rad/s
    count: Array  # lines in the pool, may be 0
    power: Array  # mean periodogram of the pool
    half_omega: Array  # w/2 at the pool's middle
    half_inverse: Array  # 1/(2w) there
    spread: Array  # variance of u inside the pool
    upper: Array  # the floor's shape: colour times the share of the upper edge's level
    lower: Array  # the same for the lower edge

    def rows(self, index: NDArray[np.intp]) -> Self:
        """Return some of the rows."""
        arrays = (np.take(getattr(self, field.name), index, axis=0) for field in fields(self)[2:])
        return type(self)(self.seconds, self.centre, *arrays)


def cumulated(power: Array) -> Array:
    """Return the running sum over the lines, shape (rows, lines + 1), beginning with 0."""
    sums = np.zeros((power.shape[0], power.shape[1] + 1))
    np.cumsum(power, axis=1, out=sums[:, 1:])
    return sums


def pool(sums: Array, lines: Lines, wn: Array, g: Array) -> Pools:
    """Pool periodograms around resonances.

    Parameters
    ----------
    sums
        Shape (rows, lines + 1), see `cumulated`.
    lines
        Their frequencies.
    wn, g
        Shape (rows,), rad/s and 1/s: where the pools are to be narrow, and how narrow.
    """
    edges = _edges(lines, wn, g)
    count = np.diff(edges, axis=1).astype(np.float64)
    power = np.diff(np.take_along_axis(sums, edges, axis=1), axis=1) / np.maximum(count, 1.0)
    omega = lines.omega[0] + lines.spacing * (0.5 * (edges[:, 1:] + edges[:, :-1]) - 0.5)
    tilt = lines.tilt(omega)
    colour = 0.5 * lines.colour(omega)
    warp = 0.5 + 0.5 * np.square(wn[:, None] / omega)  # du/dw
    spread = np.maximum(np.square(count) - 1.0, 0.0) * (lines.spacing**2 / 12) * np.square(warp)
    return Pools(
        seconds=lines.seconds,
        centre=lines.centre,
        count=count,
        power=power,
        half_omega=0.5 * omega,
        half_inverse=0.5 / omega,
        spread=spread,
        upper=colour * (1.0 + tilt),
        lower=colour * (1.0 - tilt),
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
class Shape:
    """Coefficients of S = q D - r D^2 - sigma u D^2 and their derivatives; every array has shape (rows, 1)."""

    g: Array
    q: Array  # g + kappa
    q_g: Array  # derivative by g
    q_wn: Array  # derivative by wn
    r: Array  # 2 g^2 kappa
    r_g: Array
    r_wn: Array
    sigma: Array
    sigma_g: Array
    sigma_wn: Array
    short: bool  # whether exp(-g T) matters for any row

    @classmethod
    def of(cls, wn: Array, g: Array, seconds: float, centre: float) -> Self:
        """Return the coefficients for wn and g of shape (rows, 1)."""
        decay = g * seconds
        e = np.where(decay < _UNDERFLOW, np.exp(-decay), 0.0)
        psi = (centre - np.sqrt(np.maximum(wn * wn - g * g, 0.0))) * seconds
        ec, es = e * np.cos(psi), e * np.sin(psi)
        kappa = (1.0 - ec) / seconds
        return cls(
            g=g,
            q=g + kappa,
            q_g=1.0 + ec,
            q_wn=-es,
            r=2.0 * g * g * kappa,
            r_g=4.0 * g * kappa + 2.0 * g * g * ec,
            r_wn=-2.0 * g * g * es,
            sigma=2.0 * g * es / seconds,
            sigma_g=2.0 * es / seconds - 2.0 * g * es,
            sigma_wn=-2.0 * g * ec,
            short=bool(np.any(e > 0.0)),
        )


def expected(theta: Array, pools: Pools) -> tuple[Array, Array]:
    """Return the expected periodogram and the derivatives of its logarithm.

    Parameters
    ----------
    theta
        Shape (rows, 5), see `WN`, `LN_G`, `LN_P`, `FLOOR`, `TILT`.
    pools
        Where, with the same rows.

    Returns
    -------
    E : shape (rows, pools)
    J : shape (rows, 5, pools)
        Derivatives of ln E by wn/g (wn in units of the row's g), ln g, ln P, f, d.
    """
    wn, g = theta[:, WN, None], np.exp(theta[:, LN_G, None])
    shape = Shape.of(wn, g, pools.seconds, pools.centre)
    u = pools.half_omega - pools.half_inverse * (wn * wn)
    d = 1.0 / (u * u + g * g)
    s, slope, s_g = _pooled_shape(shape, pools.spread, d)
    jacobian = np.empty((theta.shape[0], 5, u.shape[1]))
    ud = u * d
    slope *= -2.0  # now dS/du = slope u D, and dS/dg has the same with g in the place of u
    by_wn = slope * ud
    s_g += slope * (g * d)
    if shape.short:
        s, by_wn, s_g = _short(shape, s, by_wn, s_g, u, d)
    by_wn *= -2.0 * wn  # du/dwn = -wn/w
    by_wn *= pools.half_inverse
    if shape.short:
        by_wn += _by_phase(shape, u, d)
    level = np.exp(theta[:, FLOOR, None])
    lift = np.exp(theta[:, TILT, None])
    twice_power = 2.0 * np.exp(theta[:, LN_P, None])
    upper, lower = (level * lift) * pools.upper, (level / lift) * pools.lower
    floor = upper + lower
    signal = twice_power * s
    total = signal + floor
    inverse = 1.0 / total
    weight = (twice_power * g) * inverse
    np.multiply(by_wn, weight, out=jacobian[:, 0])
    np.multiply(s_g, weight, out=jacobian[:, 1])
    np.multiply(signal, inverse, out=jacobian[:, 2])
    np.multiply(floor, inverse, out=jacobian[:, 3])
    np.multiply(upper - lower, inverse, out=jacobian[:, 4])
    return total, jacobian


def _pooled_shape(shape: Shape, spread: Array, d: Array) -> tuple[Array, Array, Array]:
    """Return S without sigma, dS/dD times D, and dS/dg at fixed D, the curvature inside a pool included.

    With S'' = q (6 D^2 - 8 g^2 D^3) for the leading term: S = q D + (3 q v - r) D^2 - 4 g^2 q v D^3.
    """
    g, q = shape.g, shape.q
    bend = 3.0 * spread
    cube = spread * d
    cube *= 4.0 * g * g  # 4 g^2 v D
    square = bend - cube
    square *= q
    square -= shape.r  # (3 q v - r) - 4 g^2 q v D
    square *= d
    s = d * (q + square)
    slope = q + 2.0 * square
    slope -= (q * d) * cube
    slope *= d
    s_g = bend - cube
    s_g *= shape.q_g
    s_g -= cube * (2.0 * q / g)
    s_g -= shape.r_g
    s_g *= d
    s_g += shape.q_g
    s_g *= d
    return s, slope, s_g


def _short(shape: Shape, s: Array, by_u: Array, s_g: Array, u: Array, d: Array) -> tuple[Array, Array, Array]:
    """Add what exp(-g T) leaves in a window that is short against the memory."""
    d2 = d * d
    ud2 = u * d2
    return (
        s - shape.sigma * ud2,
        by_u - shape.sigma * (d2 - 4.0 * u * ud2 * d),
        s_g - shape.sigma_g * ud2 + shape.sigma * (4.0 * shape.g) * ud2 * d,
    )


def _by_phase(shape: Shape, u: Array, d: Array) -> Array:
    """Return dS/dwn by way of psi."""
    return np.asarray((shape.q_wn - (shape.r_wn + shape.sigma_wn * u) * d) * d, dtype=np.float64)


def signal_and_floor(theta: Array, lines: Lines) -> tuple[Array, Array]:
    """Return the model's two parts on every line, shape (rows, lines) each."""
    wn, g = theta[:, WN, None], np.exp(theta[:, LN_G, None])
    shape = Shape.of(wn, g, lines.seconds, lines.centre)
    u = 0.5 * lines.omega - (0.5 / lines.omega) * (wn * wn)
    d = 1.0 / (u * u + g * g)
    bracket = shape.q - shape.r * d
    if shape.short:
        bracket -= shape.sigma * (u * d)
    signal = (2.0 * np.exp(theta[:, LN_P, None])) * d
    signal *= bracket
    tilt, colour = lines.tilt(lines.omega), 0.5 * lines.colour(lines.omega)
    level, lift = np.exp(theta[:, FLOOR, None]), np.exp(theta[:, TILT, None])
    floor = (level * lift) * (colour * (1.0 + tilt)) + (level / lift) * (colour * (1.0 - tilt))
    return signal, floor
