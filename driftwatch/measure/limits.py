"""What a window of random response can resolve at best.

Two answers to one question: a closed law for a known weak floor (Au, Mechanical Systems and Signal Processing 48,
15-33, 2014), and the Fisher information of the lines in the band, for any floor, known or estimated from the same band.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

_GRID = 4001  # nodes of the integral over the band


@dataclass(frozen=True, slots=True)
class Resolution:
    """Least standard uncertainties of one window."""

    ln_frequency_std: float  # of ln fn, that is relative
    ln_q_std: float  # of ln q


def band_factors(kappa: float) -> tuple[float, float]:
    """Return the shares of information, for frequency and for Q, that lie in the band fn (1 +- kappa zeta).

    B_f = (2/pi) [atan k - k/(k^2+1)],  B_z = (2/pi) [atan k + k/(k^2+1) - 2 atan(k)^2 / k]  (Au 2014)

    Raises
    ------
    ValueError
        When `kappa` is not positive.
    """
    if not kappa > 0.0:
        raise ValueError(f"band half-width of {kappa} damping ratios; expected a positive number")
    arc, side = math.atan(kappa), kappa / (kappa * kappa + 1.0)
    return 2.0 / math.pi * (arc - side), 2.0 / math.pi * (arc + side - 2.0 * arc * arc / kappa)


def ambient_law(frequency_hz: float, q: float, window_s: float, kappa: float = math.inf) -> Resolution:
    """Return the uncertainty law of random response for a known weak floor.

    std(ln fn) = sqrt(zeta / (2 pi N B_f)),  std(ln q) = sqrt(Q / (pi N B_z)),  N = fn T periods  (Au 2014)

    Parameters
    ----------
    frequency_hz, q
        The resonance.
    window_s
        Length T of the window, long against the resonance's memory Q/(pi fn).
    kappa
        Half-width of the band used, in damping ratios: fn (1 +- kappa zeta). Infinite: everything is used.
    """
    frequency, damping = (1.0, 1.0) if math.isinf(kappa) else band_factors(kappa)
    periods = frequency_hz * window_s
    return Resolution(
        ln_frequency_std=math.sqrt(1.0 / (4.0 * math.pi * q * periods * frequency)),
        ln_q_std=math.sqrt(q / (math.pi * periods * damping)),
    )


def ambient_bound(
    frequency_hz: float,
    q: float,
    window_s: float,
    search_hz: tuple[float, float],
    snr_db: float = math.inf,
    *,
    floor_known: bool = False,
) -> Resolution:
    """Return the Cramér-Rao bound of the periodogram's lines in a band.

    The lines of a long window are independent and exponential; of a spectrum E with parameters p they carry the
    information T int (d ln E/dp) (d ln E/dp)' df (Whittle 1953). The parameters are fn, Q, the signal's variance and,
    unless it is known, the floor's level.

    Parameters
    ----------
    frequency_hz, q
        The resonance.
    window_s
        Length T of the window, long against the resonance's memory Q/(pi fn).
    search_hz
        Lowest and highest frequency used.
    snr_db
        Signal variance over noise variance in the band; infinite: no floor.
    floor_known
        Whether the floor's level needs no estimate.

    Raises
    ------
    ValueError
        When the band is empty.
    """
    low, high = search_hz
    if not 0.0 < low < high:
        raise ValueError(f"search band {low} to {high} Hz; expected 0 < low < high")
    frequencies = _nodes(frequency_hz, q, low, high)
    derivatives = _log_derivatives(frequencies, frequency_hz, q, search_hz, snr_db)
    if floor_known or math.isinf(snr_db):
        derivatives = derivatives[:3]
    information = window_s * np.trapezoid(derivatives[:, None, :] * derivatives[None, :, :], frequencies, axis=2)
    covariance = np.linalg.inv(information)
    return Resolution(math.sqrt(covariance[0, 0]), math.sqrt(covariance[1, 1]))


def window_needed(frequency_hz: float, q: float, ln_q_std: float, kappa: float = math.inf) -> float:
    """Return the window in seconds after which ln q is known to `ln_q_std` at best (Au 2014, see `ambient_law`)."""
    return (ambient_law(frequency_hz, q, 1.0, kappa).ln_q_std / ln_q_std) ** 2


def _nodes(frequency_hz: float, q: float, low: float, high: float) -> NDArray[np.float64]:
    """Return frequencies over the band, dense about the resonance."""
    half_width = frequency_hz / (2.0 * q)
    ends = np.arcsinh((np.array([low, high]) - frequency_hz) / half_width)
    nodes = frequency_hz + half_width * np.sinh(np.linspace(ends[0], ends[1], _GRID))
    return np.asarray(nodes, dtype=np.float64)


def _log_derivatives(
    frequencies: NDArray[np.float64], frequency_hz: float, q: float, search_hz: tuple[float, float], snr_db: float
) -> NDArray[np.float64]:
    """Return the derivatives of ln E by ln fn, ln q, ln P, ln floor, shape (4, frequencies)."""
    w, wn = 2 * np.pi * frequencies, 2 * np.pi * frequency_hz
    g = wn / (2.0 * q)
    u = (w - wn * wn / w) / 2.0
    signal = 2.0 * g / (g * g + u * u)
    mean = np.trapezoid(signal, frequencies) / (search_hz[1] - search_hz[0])
    floor = mean * 10.0 ** (-snr_db / 10.0)
    by_u = -2.0 * u / (g * g + u * u)
    by_g = 1.0 - 2.0 * g * g / (g * g + u * u)  # by ln g; ln g = ln wn - ln 2q
    share = signal / (signal + floor)
    rows = (by_u * (-wn * wn / w) + by_g, -by_g, np.ones_like(w))
    return np.stack([share * row for row in rows] + [1.0 - share])
