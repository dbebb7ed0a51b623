"""The uncertainty law of random response, Au (Mechanical Systems and Signal Processing 48, 15-33, 2014)."""

from __future__ import annotations

import math

import numpy as np
import pytest
from driftwatch.measure import limits
from scipy import integrate


@pytest.mark.parametrize("kappa", [0.5, 1.0, 3.0, 12.0, 100.0])
def test_band_factors_are_the_information_in_the_band(kappa: float) -> None:
    """Au's closed band factors are integrals of the Lorentzian's log-derivatives, by quadrature (Whittle 1953).

    With x = (f - fn)/(zeta fn), S = 1/(1 + x^2): B_f is the share of (dlnS/dx)^2 in |x| < k; B_z that of the
    derivative by ln zeta after the unknown variance's is projected out.
    """
    frequency = integrate.quad(lambda x: (2 * x / (1 + x * x)) ** 2, -kappa, kappa)[0]
    by_width = [integrate.quad(lambda x, p=p: ((x * x - 1) / (1 + x * x)) ** p, -kappa, kappa)[0] for p in (1, 2)]
    damping = by_width[1] - by_width[0] ** 2 / (2 * kappa)
    assert limits.band_factors(kappa)[0] == pytest.approx(frequency / (2 * math.pi), rel=1e-7)
    assert limits.band_factors(kappa)[1] == pytest.approx(damping / (2 * math.pi), rel=1e-6)


def test_law_for_a_worked_example() -> None:
    """1 Hz, zeta 1 %, 600 s, no band: sqrt(0.01 / (2 pi 600)) for f and 1/sqrt(2 pi 0.01 600) for zeta, by hand."""
    got = limits.ambient_law(1.0, 50.0, 600.0)
    assert got.ln_frequency_std == pytest.approx(1.6287e-3, rel=1e-4)
    assert got.ln_q_std == pytest.approx(0.16287, rel=1e-4)


def test_band_of_one_half_power_width_to_either_side() -> None:
    """k = 2: B_f = (2/pi)(atan 2 - 2/5), B_z = (2/pi)(atan 2 + 2/5 - atan(2)^2), put in by hand."""
    assert limits.band_factors(2.0) == pytest.approx((0.450185, 0.179126), abs=2e-6)


@pytest.mark.parametrize(("frequency_hz", "q"), [(900.0, 40.0), (2400.0, 150.0), (5000.0, 2000.0)])
def test_bound_of_the_lines_is_the_law_when_the_floor_is_known_and_weak(frequency_hz: float, q: float) -> None:
    """At 40 dB the information summed over the band's lines agrees with the closed law to 1e-3."""
    kappa = 12.0
    half = kappa * frequency_hz / (2 * q)
    search = (frequency_hz - half, frequency_hz + half)
    bound = limits.ambient_bound(frequency_hz, q, 10.0, search, 40.0, floor_known=True)
    law = limits.ambient_law(frequency_hz, q, 10.0, kappa)
    assert bound.ln_frequency_std == pytest.approx(law.ln_frequency_std, rel=1e-3)
    assert bound.ln_q_std == pytest.approx(law.ln_q_std, rel=1e-3)


def test_estimating_a_weak_floor_in_a_narrow_band_costs_about_two_fifths_in_q() -> None:
    """Three half-power widths to either side: an unknown floor widens ln q by about 1.4, ln fn hardly at all."""
    search = (900.0 - 67.5, 900.0 + 67.5)
    known = limits.ambient_bound(900.0, 40.0, 4.0, search, 40.0, floor_known=True)
    unknown = limits.ambient_bound(900.0, 40.0, 4.0, search, 40.0)
    assert unknown.ln_q_std / known.ln_q_std == pytest.approx(1.4, abs=0.05)
    assert unknown.ln_frequency_std / known.ln_frequency_std == pytest.approx(1.0, abs=0.01)


def test_law_agrees_with_a_simulated_maximum_likelihood_fit() -> None:
    """Exponential periodograms of known shape, fitted by a general optimiser, scatter as the law says.

    400 fits of ln g alone with known variance and frequency left free; the chi-square of their spread has a standard
    error of 3.5 %, five of which are allowed.
    """
    from scipy import optimize

    rng = np.random.default_rng(0)
    x = np.arange(-12.0, 12.0, 0.02)  # lines, in damping ratios; T follows from their spacing 1/T = 0.02 zeta fn
    errors = np.empty(400)

    def cost(p: np.ndarray, power: np.ndarray) -> float:
        model = np.exp(p[2] + p[0]) / (np.exp(2 * p[0]) + (x - p[1]) ** 2)
        return float(np.sum(np.log(model) + power / model))

    for trial in range(errors.size):
        power = rng.exponential(size=x.size) / (1 + x * x)
        errors[trial] = optimize.minimize(cost, np.zeros(3), args=(power,), method="BFGS").x[0]
    zeta, fn = 0.01, 100.0
    law = limits.ambient_law(fn, 1 / (2 * zeta), 1.0 / (0.02 * zeta * fn), 12.0)
    assert np.std(errors) == pytest.approx(law.ln_q_std, rel=0.18)
