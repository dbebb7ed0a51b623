"""Where a resonance may be in a window, and whether there is one at all.

Periodograms come here divided by their mean over the search band.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from driftwatch.measure.whittle import FLOOR, LN_G, LN_P, TILT, WN, Array, Lines, Pools

DETECTION_GAIN = 20.0
"""Gain in log-likelihood over a floor alone from which on a window holds a mode.

In noise, white or sloping by 6 dB/octave, P(gain > x) is near 0.06 n exp(-x) for n lines in the band: of 20,000
windows of 641 lines 3 % pass 7.1, and the mean excess over that is 1.02 to 1.09 (bench ``falsestart``). Carried on to
20 with that scale, 0.07 to 0.14 of the 648,000 windows of 30 days pass; with its upper confidence limit 0.8. A mode
whose variance is four times the noise's in its band gains hundreds.
"""

_SECTIONS = 16  # of the band, whose least mean begins the search for the floor


def start(sums: Array, lines: Lines) -> Array:
    """Return where to begin the fit: the band's most conspicuous bump.

    Boxes of 4, 8, 16 ... lines are moved over the band; the fullest of each width is compared by the likelihood of
    two levels, inside and outside, against one. The box that holds half of the best one's power gives place and width.

    Parameters
    ----------
    sums
        Shape (rows, lines + 1), running sums of periodograms of mean 1.
    lines
        Their frequencies.

    Returns
    -------
    array, shape (rows, 5)
        Parameters as in `whittle`.
    """
    widths, full, place = _boxes(sums)
    count = float(lines.count)
    inside = np.maximum(full / widths, 1e-300)
    outside = np.maximum((count - full) / (count - widths), 1e-9)
    gain = -widths * np.log(inside) - (count - widths) * np.log(outside)
    best = np.argmax(gain, axis=1)[:, None]
    floor = np.minimum(_least_section(sums), 0.9)
    excess = full - floor[:, None] * widths
    whole = np.take_along_axis(excess, best, axis=1)
    core = np.argmax(excess >= 0.5 * whole, axis=1)  # a Lorentzian has half its power within g of its middle
    theta = np.empty((sums.shape[0], 5))
    middle = np.take_along_axis(place, core[:, None], axis=1)[:, 0] + 0.5 * (widths[core] - 1.0)
    theta[:, WN] = lines.omega[0] + lines.spacing * middle
    theta[:, LN_G] = np.log(0.5 * lines.spacing * _half_width(widths, excess, whole, core))
    theta[:, LN_P] = np.log(np.maximum(whole[:, 0], 0.1) * lines.spacing / (2 * np.pi))
    theta[:, TILT] = 0.0
    theta[:, FLOOR] = np.log(np.maximum(floor - _tail(theta, lines), 0.1 * floor))
    return theta


def _tail(theta: Array, lines: Lines) -> Array:
    """Return what the resonance may leave at the band's further edge, shape (rows,)."""
    g = np.exp(theta[:, LN_G])
    away = np.maximum(theta[:, WN] - lines.low, lines.high - theta[:, WN])
    return np.asarray(2.0 * np.exp(theta[:, LN_P]) * g / (np.square(g) + np.square(away)), dtype=np.float64)


def _boxes(sums: Array) -> tuple[Array, Array, Array]:
    """Return the widths, shape (widths,), and the fullest box of each: its sum and first line, shape (rows, widths)."""
    count = sums.shape[1] - 1
    widths = [1 << k for k in range(2, count.bit_length()) if (1 << k) <= count // 2]
    full = np.empty((sums.shape[0], len(widths)))
    place = np.empty_like(full)
    for column, width in enumerate(widths):
        stride = max(1, width // 4)
        boxes = sums[:, width::stride] - sums[:, :-width:stride]
        where = np.argmax(boxes, axis=1)
        full[:, column] = np.take_along_axis(boxes, where[:, None], axis=1)[:, 0]
        place[:, column] = where * stride
    return np.array(widths, dtype=np.float64), full, place


def _half_width(widths: Array, excess: Array, whole: Array, core: NDArray[np.intp]) -> Array:
    """Return the width in lines, shape (rows,), that holds half of the excess `whole`, interpolated below `core`."""
    lower = np.maximum(core - 1, 0)
    high = np.take_along_axis(excess, core[:, None], axis=1)[:, 0]
    low = np.where(core > 0, np.take_along_axis(excess, lower[:, None], axis=1)[:, 0], 0.0)
    share = (0.5 * whole[:, 0] - low) / np.maximum(high - low, 1e-300)
    under = np.where(core > 0, widths[lower], 0.5 * widths[0])
    return np.asarray(under + np.clip(share, 0.0, 1.0) * (widths[core] - under), dtype=np.float64)


def _least_section(sums: Array) -> Array:
    """Return the least mean over sections of the band, shape (rows,)."""
    count = sums.shape[1] - 1
    edges = np.linspace(0, count, min(_SECTIONS, max(count // 4, 1)) + 1).astype(np.intp)
    means = np.diff(sums[:, edges], axis=1) / np.diff(edges)
    return np.asarray(np.maximum(np.min(means, axis=1), 1e-6), dtype=np.float64)


def floor_only(pools: Pools, tilt_precision: float) -> Array:
    """Return the log-likelihood of a floor alone, shape (rows,).

    Level and tilt are their moments' estimates, the tilt shrunk by its prior: in noise as good as their optimum.
    """
    colour = pools.upper + pools.lower
    tilt = (pools.upper - pools.lower) / colour
    flat = pools.power / colour
    weight = pools.weight
    total = np.sum(weight, axis=1, keepdims=True)
    weighted = weight * tilt
    middle = np.sum(weighted, axis=1, keepdims=True) / total
    about = tilt - middle
    information = np.sum(weighted * about, axis=1, keepdims=True)
    level = np.sum(weight * flat, axis=1, keepdims=True) / total
    slope = np.sum(weight * about * flat, axis=1, keepdims=True) / ((information + tilt_precision) * level)
    slope = np.clip(slope, -0.8, 0.8)
    floor = (level * colour) * (1.0 + slope * about)
    likelihood = -np.sum(weight * (np.log(floor) + pools.power / floor - 1.0), axis=1)
    return np.asarray(likelihood - 0.5 * tilt_precision * np.square(slope[:, 0]), dtype=np.float64)
