"""The pole and what follows from it, against identities that hold whatever the code does."""

import math
from fractions import Fraction

import numpy as np
import pytest
from driftwatch.resonance import (
    ZETA_NO_LOWER_HALF_POWER,
    ZETA_NO_PEAK,
    Pole,
    QDefinition,
    parting_zeta,
    q_definitions,
)
from hypothesis import assume, given
from hypothesis import strategies as st

EPS = np.finfo(np.float64).eps
CLOSE = 16 * EPS  # a handful of roundings, none of them amplified

frequencies = st.floats(1e-3, 1e6)
zetas = st.floats(1e-12, 1.0, exclude_max=True)
light = st.floats(1e-12, 0.99)  # 1 - zeta keeps its digits through |s|
poles = st.builds(Pole, frequencies, zetas)
light_poles = st.builds(Pole, frequencies, light)


# ---------------------------------------------------------------------------------------------- ways in


@given(frequencies, zetas)
def test_q_round_trip(frequency: float, zeta: float) -> None:
    pole = Pole(frequency, zeta)
    assume(pole.q > 0.5)  # at the largest zeta below 1 the quotient rounds to 1/2
    back = Pole.from_q(frequency, pole.q)
    assert back.frequency_hz == frequency
    assert back.zeta == pytest.approx(zeta, rel=CLOSE)


@given(light_poles)
def test_pole_round_trip_by_either_of_the_pair(pole: Pole) -> None:
    for s in (pole.s, pole.s.conjugate()):
        back = Pole.from_pole(s)
        assert back.frequency_hz == pytest.approx(pole.frequency_hz, rel=CLOSE)
        assert back.zeta == pytest.approx(pole.zeta, rel=CLOSE)


@given(st.floats(0.01, 0.45), st.floats(1e-6, 0.9), st.floats(1.0, 1e6))
def test_discrete_round_trip_by_either_of_the_pair(share: float, zeta: float, rate: float) -> None:
    """z keeps 1 - |z| and its angle to eps only: what is left of zeta's digits is eps over the decay of a sample."""
    pole = Pole(share * rate, zeta)
    bound = 16 * EPS / min(1.0, pole.decay_rate / rate)
    for z in (pole.discrete(rate), pole.discrete(rate).conjugate()):
        back = Pole.from_discrete(z, rate)
        assert back.zeta == pytest.approx(zeta, rel=bound + 1e3 * EPS)
        assert back.frequency_hz == pytest.approx(pole.frequency_hz, rel=1e3 * EPS)


@given(light_poles)
def test_decay_round_trip(pole: Pole) -> None:
    back = Pole.from_decay(pole.damped_frequency_hz, pole.time_constant_s)
    assert back.frequency_hz == pytest.approx(pole.frequency_hz, rel=CLOSE)
    assert back.zeta == pytest.approx(pole.zeta, rel=CLOSE)


@pytest.mark.parametrize("zeta", [0.0, -0.1, 1.0, 1.5, math.nan, math.inf])
def test_a_damping_ratio_outside_0_to_1_is_refused(zeta: float) -> None:
    with pytest.raises(ValueError, match="damping ratio"):
        Pole(100.0, zeta)


@pytest.mark.parametrize("frequency", [0.0, -1.0, math.nan, math.inf])
def test_a_frequency_that_is_not_positive_is_refused(frequency: float) -> None:
    with pytest.raises(ValueError, match="natural frequency in Hz"):
        Pole(frequency, 0.01)


@pytest.mark.parametrize("q", [0.5, 0.0, -3.0, math.nan, math.inf])
def test_a_q_of_a_half_or_less_is_refused(q: float) -> None:
    with pytest.raises(ValueError, match="Q of"):
        Pole.from_q(100.0, q)


@pytest.mark.parametrize("s", [1j, 1 + 1j, -1 + 0j, 0j, complex(math.nan, 1.0)])
def test_a_pole_that_does_not_decay_or_swing_is_refused(s: complex) -> None:
    with pytest.raises(ValueError, match="rad/s is no resonance"):
        Pole.from_pole(s)


@pytest.mark.parametrize("z", [0j, 0.9 + 0j, -0.9 + 0j, 1j, 0.8 + 0.8j, complex(math.nan, 0.1)])
def test_a_discrete_pole_on_the_axis_or_not_inside_the_circle_is_refused(z: complex) -> None:
    with pytest.raises(ValueError, match="discrete pole"):
        Pole.from_discrete(z, 1000.0)


def test_a_rate_or_a_decay_that_is_not_positive_is_refused() -> None:
    with pytest.raises(ValueError, match="sample rate in Hz is 0"):
        Pole.from_discrete(0.5 + 0.5j, 0.0)
    with pytest.raises(ValueError, match="sample rate in Hz is -1"):
        Pole(1.0, 0.1).discrete(-1.0)
    with pytest.raises(ValueError, match="damped frequency in Hz"):
        Pole.from_decay(0.0, 1.0)
    with pytest.raises(ValueError, match="time constant in seconds"):
        Pole.from_decay(1.0, math.inf)


# ---------------------------------------------------------------------------------------------- derived figures


@given(poles)
def test_identities_of_damping_hold_at_any_damping(pole: Pole) -> None:
    assert pole.loss_factor * pole.q == pytest.approx(1.0, rel=CLOSE)
    assert pole.decay_rate == pytest.approx(math.pi * pole.frequency_hz / pole.q, rel=CLOSE)
    assert pole.time_constant_s * pole.decay_rate == pytest.approx(1.0, rel=CLOSE)
    assert pole.cycles_to_1e == pytest.approx(pole.frequency_hz * pole.time_constant_s, rel=CLOSE)
    assert pole.logarithmic_decrement == pytest.approx(pole.decay_rate / pole.damped_frequency_hz, rel=CLOSE)
    assert pole.amplification_at_fn == pole.q


@given(frequencies, st.integers(1, 2**40))
def test_damped_frequency_keeps_its_digits_near_critical_damping(frequency: float, steps: int) -> None:
    """With zeta = 1 - d, d exact, ``1 - zeta^2 = d (2 - d)`` holds every digit; ``1 - zeta**2`` would lose them."""
    distance = steps * 2.0**-53
    pole = Pole(frequency, 1.0 - distance)
    assert 1.0 - pole.zeta == distance
    expected = frequency * math.sqrt(distance * (2.0 - distance))
    assert pole.damped_frequency_hz == pytest.approx(expected, rel=CLOSE)


@given(poles)
def test_the_pole_lies_on_the_circle_of_wn(pole: Pole) -> None:
    assert abs(pole.s) == pytest.approx(pole.angular_frequency_rad_s, rel=CLOSE)
    assert pole.s.real == -pole.decay_rate
    assert pole.s.imag > 0.0


@given(poles)
def test_peaks_of_displacement_and_acceleration_lie_symmetrically_about_fn(pole: Pole) -> None:
    low, high = pole.displacement_peak_hz, pole.acceleration_peak_hz
    assert pole.velocity_peak_hz == pole.frequency_hz
    if low is None or high is None:
        assert low is None
        assert high is None
        assert pole.zeta >= ZETA_NO_PEAK * (1 - CLOSE)
        assert pole.peak_amplification is None
    else:
        assert low <= pole.frequency_hz <= high
        assert math.sqrt(low) * math.sqrt(high) == pytest.approx(pole.frequency_hz, rel=CLOSE)


@given(st.builds(Pole, frequencies, st.floats(1e-12, 0.7)))
def test_the_response_at_its_peak_is_the_peak_amplification_and_falls_to_both_sides(pole: Pole) -> None:
    peak, top = pole.displacement_peak_hz, pole.peak_amplification
    assert peak is not None
    assert top is not None
    aside = peak * np.array([1.0, 1.0 - pole.zeta / 2, 1.0 + pole.zeta / 2])
    there, below, above = np.abs(pole.receptance(aside))
    # the peak's place is rounded to eps: at tiny zeta that is eps/zeta half widths aside
    assert there == pytest.approx(top, rel=CLOSE + 4 * (EPS / pole.zeta) ** 2 + 4 * EPS / pole.zeta)
    assert below < there
    assert above < there


@given(st.builds(Pole, frequencies, st.floats(1e-9, ZETA_NO_LOWER_HALF_POWER, exclude_max=True)))
def test_the_power_at_the_half_power_frequencies_is_half_that_of_the_peak(pole: Pole) -> None:
    points, top = pole.half_power_hz, pole.peak_amplification
    assert points is not None
    assert top is not None
    share = np.abs(pole.receptance(np.array(points))) ** 2 / top**2
    np.testing.assert_allclose(share, 0.5, rtol=32 * EPS / pole.zeta)  # places rounded to eps, slope 1/zeta


@given(st.builds(Pole, frequencies, st.floats(1e-12, 0.38)))
def test_the_half_power_width_does_not_cancel(pole: Pole) -> None:
    """Against r2 - r1 = sqrt(2 cos 2t - 2 sqrt(cos 4t)), zeta = sin t, in its expansion where zeta is small."""
    width = pole.half_power_width_hz
    assert width is not None
    z2 = pole.zeta**2
    if pole.zeta < 1e-4:  # 2 zeta (1 + zeta^2 + O(zeta^4))
        assert width == pytest.approx(2 * pole.zeta * (1 + z2) * pole.frequency_hz, rel=CLOSE)
    else:
        angle = math.asin(pole.zeta)
        exact = math.sqrt(2 * math.cos(2 * angle) - 2 * math.sqrt(math.cos(4 * angle)))
        assert width == pytest.approx(exact * pole.frequency_hz, rel=CLOSE + 32 * EPS / z2)


def test_there_are_no_half_power_frequencies_where_the_static_response_is_above_half_power() -> None:
    for zeta in (ZETA_NO_LOWER_HALF_POWER * (1 + CLOSE), 0.5, 0.8):
        assert Pole(10.0, zeta).half_power_hz is None
        assert Pole(10.0, zeta).half_power_width_hz is None
    below = Pole(10.0, ZETA_NO_LOWER_HALF_POWER * (1 - 1e-9)).half_power_hz
    assert below is not None
    assert 0.0 < below[0] < 0.001


@given(st.builds(Pole, frequencies, st.floats(1e-9, 1.0, exclude_max=True)))
def test_the_half_power_width_of_the_velocity_is_fn_over_q_at_any_damping(pole: Pole) -> None:
    low, high = pole.velocity_half_power_hz
    assert high - low == pytest.approx(pole.half_power_width_light_hz, rel=8 * EPS / pole.zeta)
    top = abs(pole.mobility(pole.frequency_hz))
    share = np.abs(pole.mobility(np.array([low, high]))) ** 2 / top**2
    np.testing.assert_allclose(share, 0.5, rtol=32 * EPS / pole.zeta)


@given(frequencies, st.floats(1e-12, 1e-5))
def test_light_forms_are_the_limit_of_the_exact_ones(frequency: float, zeta: float) -> None:
    """They part by terms of zeta^2 alone, the energy definition by 2 pi zeta."""
    pole = Pole(frequency, zeta)
    points = pole.half_power_hz
    assert points is not None
    assert points == pytest.approx(pole.half_power_light_hz, rel=2 * zeta**2 + CLOSE)
    assert pole.half_power_width_hz == pytest.approx(pole.half_power_width_light_hz, rel=2 * zeta**2 + CLOSE)
    assert pole.displacement_peak_hz == pytest.approx(frequency, rel=2 * zeta**2 + CLOSE)
    assert pole.damped_frequency_hz == pytest.approx(frequency, rel=zeta**2 + CLOSE)
    assert pole.logarithmic_decrement == pytest.approx(math.pi * pole.loss_factor, rel=zeta**2 + CLOSE)
    for definition, value in q_definitions(pole).items():
        parting = 7 * zeta if definition is QDefinition.ENERGY else 2 * zeta**2
        assert value == pytest.approx(pole.q, rel=parting + CLOSE)


# ---------------------------------------------------------------------------------------------- complex response


@given(poles, st.floats(0.0, 1e3), st.floats(1e-3, 1e3))
def test_the_response_solves_the_equation_of_motion(pole: Pole, ratio: float, mass: float) -> None:
    """``(-w^2 m + i w c + k) x = F``, each term by another of the three responses; sizes relative to the largest."""
    f = ratio * pole.frequency_hz
    x, v, a = (complex(of(f, mass=mass)) for of in (pole.receptance, pole.mobility, pole.accelerance))
    stiffness = mass * pole.angular_frequency_rad_s**2
    damping = 2.0 * mass * pole.decay_rate
    terms = (mass * a, damping * v, stiffness * x)
    assert abs(sum(terms) - 1.0) <= CLOSE * (1.0 + sum(abs(term) for term in terms))


@given(poles)
def test_with_unit_stiffness_the_response_at_fn_is_minus_i_q(pole: Pole) -> None:
    value = complex(pole.receptance(pole.frequency_hz))
    assert value.real == 0.0
    assert value.imag == pytest.approx(-pole.q, rel=CLOSE)
    assert complex(pole.receptance(0.0)) == 1.0


@given(poles, st.floats(1e-3, 1e3))
def test_mobility_at_fn_is_one_over_the_damping_constant(pole: Pole, mass: float) -> None:
    expected = 1.0 / (2.0 * mass * pole.decay_rate)
    assert complex(pole.mobility(pole.frequency_hz, mass=mass)) == pytest.approx(expected, rel=CLOSE)


@given(poles, st.floats(1e-3, 1e3))
def test_far_above_fn_accelerance_is_one_over_the_mass(pole: Pole, mass: float) -> None:
    ratio = 1e7
    value = complex(pole.accelerance(ratio * pole.frequency_hz, mass=mass))
    assert value == pytest.approx(1.0 / mass, rel=3.0 / ratio)


@given(poles, st.floats(1e-3, 1e3), st.floats(0.0, 10.0))
def test_mass_and_stiffness_are_two_ways_to_say_the_same(pole: Pole, mass: float, ratio: float) -> None:
    stiffness = mass * pole.angular_frequency_rad_s**2
    f = ratio * pole.frequency_hz
    assert complex(pole.receptance(f, mass=mass)) == complex(pole.receptance(f, stiffness=stiffness))


@given(poles, st.floats(1e-6, 1e6))
def test_phase_is_that_of_the_complex_response_between_0_and_minus_180(pole: Pole, ratio: float) -> None:
    f = ratio * pole.frequency_hz
    phase = float(pole.phase_deg(f))
    assert -180.0 <= phase <= 0.0
    assert phase == pytest.approx(float(np.degrees(np.angle(pole.receptance(f)))), abs=1e-12 * 180)


@given(poles, st.floats(0.0, 100.0))
def test_negative_frequencies_answer_with_the_conjugate(pole: Pole, ratio: float) -> None:
    f = ratio * pole.frequency_hz
    for of in (pole.receptance, pole.mobility, pole.accelerance):
        assert complex(of(-f)) == pytest.approx(complex(of(f)).conjugate(), rel=4 * CLOSE + 32 * EPS / pole.zeta)


def test_the_response_keeps_the_shape_of_the_frequencies_and_leaves_them_alone() -> None:
    pole, grid = Pole.from_q(900.0, 40.0), np.linspace(0.0, 2000.0, 12).reshape(3, 4)
    before = grid.copy()
    for of in (pole.receptance, pole.mobility, pole.accelerance, pole.phase_deg):
        values = of(grid)
        assert values.shape == (3, 4)
        assert complex(values[1, 2]) == pytest.approx(complex(of(grid[1, 2])), rel=CLOSE)
        assert of(900.0).shape == ()
        assert of([1.0, 2.0]).shape == (2,)
    np.testing.assert_array_equal(grid, before)


@given(st.builds(Pole, frequencies, st.floats(1e-12, 1e-9)), st.integers(-40, 40))
def test_the_response_keeps_its_digits_beside_a_very_sharp_resonance(pole: Pole, steps: int) -> None:
    """Against rational arithmetic, a few floating-point steps from fn, where 1 - r^2 would lose them all."""
    f = pole.frequency_hz + steps * math.ulp(pole.frequency_hz)
    ratio = Fraction(f) / Fraction(pole.frequency_hz)
    dynamic = complex(float(1 - ratio**2), float(2 * Fraction(pole.zeta) * ratio))
    assert complex(pole.receptance(f)) == pytest.approx(1.0 / dynamic, rel=CLOSE)


def test_both_mass_and_stiffness_or_one_that_is_not_positive_is_refused() -> None:
    pole = Pole(10.0, 0.1)
    with pytest.raises(ValueError, match="both mass and stiffness"):
        pole.receptance(1.0, mass=1.0, stiffness=1.0)
    with pytest.raises(ValueError, match="modal mass in kg is 0"):
        pole.mobility(1.0, mass=0.0)
    with pytest.raises(ValueError, match="modal stiffness in N/m is -1"):
        pole.accelerance(1.0, stiffness=-1.0)


# ---------------------------------------------------------------------------------------------- definitions of Q


@given(st.builds(Pole, frequencies, st.floats(1e-6, 0.95)), st.floats(0.0, 6.3))
def test_the_energy_definition_is_that_of_the_free_decay_from_any_phase(pole: Pole, phase: float) -> None:
    """Energy of ``Re exp(s t)`` from velocity and displacement at both ends of one damped period."""
    s, w = pole.s, pole.angular_frequency_rad_s

    def energy(t: float) -> float:
        x = np.exp(s * t + 1j * phase)
        return float(((s * x).real / w) ** 2 + x.real**2)

    stored, later = energy(0.0), energy(1.0 / pole.damped_frequency_hz)
    # the difference of two energies cancels to the loss of a cycle; rounding of the phase s t costs 2 pi eps
    loss = 1.0 - math.exp(-2 * pole.logarithmic_decrement)
    smallest = 1.0 - pole.zeta  # of the energy over its swing
    expected = 2 * math.pi * stored / (stored - later)
    assert q_definitions(pole)[QDefinition.ENERGY] == pytest.approx(expected, rel=100 * EPS / loss / smallest)


@pytest.mark.parametrize("definition", QDefinition)
@pytest.mark.parametrize("fraction", [1e-6, 1e-3, 0.01, 0.05, 0.2, 0.35])
def test_a_definition_parts_by_the_fraction_asked_for_at_the_zeta_returned(
    definition: QDefinition, fraction: float
) -> None:
    pole = Pole(1.0, parting_zeta(definition, fraction))
    value = q_definitions(pole)[definition]
    assert value is not None
    assert abs(value / pole.q - 1.0) == pytest.approx(fraction, rel=64 * EPS / fraction)
    for share in np.linspace(0.05, 0.95, 19):
        less = Pole(1.0, share * pole.zeta)
        there = q_definitions(less)[definition]
        assert there is not None
        assert abs(there / less.q - 1.0) < fraction


@pytest.mark.parametrize("definition", QDefinition)
def test_a_fraction_by_which_a_definition_never_parts_is_refused(definition: QDefinition) -> None:
    for fraction in (0.0, -0.1, 12.0, math.nan):
        with pytest.raises(ValueError, match="never parts"):
            parting_zeta(definition, fraction)


def test_definitions_that_need_a_peak_are_none_without_one() -> None:
    values = q_definitions(Pole(1.0, 0.8))
    assert values[QDefinition.AMPLIFICATION] is None
    assert values[QDefinition.HALF_POWER] is None
    assert values[QDefinition.ENERGY] is not None
    assert values[QDefinition.DECREMENT] == pytest.approx(0.6 / 1.6, rel=CLOSE)
