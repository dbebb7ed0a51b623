"""One resonance against values from outside the project, each with its source beside it.

"From memory" marks a value that nobody here could read in its source, "common practice" a fact of the trade that has
none. Nothing here is computed by the code it checks.
"""

import cmath
import importlib
import math
import warnings
from collections.abc import Callable
from importlib import resources
from typing import Any

import numpy as np
import pytest
from driftwatch.resonance import Pole, QDefinition, parting_zeta, q_definitions
from scipy import integrate, optimize, signal

EPS = np.finfo(np.float64).eps


def normalised(zeta: float) -> tuple[list[float], list[float]]:
    """Return numerator and denominator of x k / F for wn = 1 rad/s, static deflection 1."""
    return [1.0], [1.0, 2.0 * zeta, 1.0]


def freqs_gain(zeta: float, ratio: float, order: int = 0) -> float:
    """Return |(i r)^order x k / F| by `scipy.signal.freqs`: displacement, velocity, acceleration for 0, 1, 2."""
    _, denominator = normalised(zeta)
    _, response = signal.freqs([1.0] + [0.0] * order, denominator, [ratio])
    return float(abs(response[0]))


# ---------------------------------------------------------------------------------------------- Q and its kin


@pytest.mark.parametrize("zeta", [1e-6, 1e-4, 1e-3])
def test_q_is_one_thing_by_all_definitions_for_light_damping(zeta: float) -> None:
    """Q = 1/(2 zeta) = fn / half-power width = 2 pi stored / lost (vibration handbooks; eta: ISO 6721-1, from memory).

    Tolerance: the energy definition parts by 2 pi zeta to first order, the others by zeta^2.
    """
    pole = Pole(1.0, zeta)
    q = 1.0 / (2.0 * zeta)
    assert pole.q == pytest.approx(q, rel=4 * EPS)
    assert pole.loss_factor == pytest.approx(2.0 * zeta, rel=4 * EPS)
    assert pole.loss_factor == pytest.approx(pole.logarithmic_decrement / math.pi, rel=zeta**2 + 4 * EPS)
    assert pole.half_power_width_hz == pytest.approx(1.0 / q, rel=2 * zeta**2 + 4 * EPS)
    energy = q_definitions(pole)[QDefinition.ENERGY]
    assert energy == pytest.approx(q, rel=7 * zeta)


@pytest.mark.parametrize("zeta", [0.01, 0.1, 0.5])
def test_a_cycle_of_steady_vibration_at_fn_loses_2_pi_over_q_of_the_energy_stored(zeta: float) -> None:
    """Q = 2 pi x energy stored / energy lost per cycle (vibration handbooks), lost = work of the force."""
    amplitude = complex(Pole(1.0 / (2.0 * math.pi), zeta).receptance(1.0 / (2.0 * math.pi)))
    work, _ = integrate.quad(lambda t: math.cos(t) * (1j * amplitude * cmath.exp(1j * t)).real, 0.0, 2.0 * math.pi)
    stored = 0.5 * abs(amplitude) ** 2  # stiffness 1
    assert 2.0 * math.pi * stored / work == pytest.approx(1.0 / (2.0 * zeta), rel=1e-12)  # quad's own error


def test_the_logarithmic_decrement_at_zeta_0_05_is_0_31455() -> None:
    """Vibration handbooks; 2 pi zeta / sqrt(1 - zeta^2), recomputed: 0.314552..., printed to five decimals."""
    assert Pole(123.0, 0.05).logarithmic_decrement == pytest.approx(0.31455, abs=0.5e-5)


def test_the_logarithmic_decrement_is_that_of_two_maxima_of_an_integrated_decay() -> None:
    """Definition of the trade: ln of two successive maxima; the decay by a general-purpose integrator."""
    zeta = 0.05
    pole = Pole(1.0 / (2.0 * math.pi), zeta)
    solved: Any = integrate.solve_ivp(
        lambda _t, y: [y[1], -2.0 * zeta * y[1] - y[0]],
        (0.0, 20.0),
        [0.0, 1.0],
        events=_velocity_falls_through_zero(),
        rtol=1e-11,
        atol=1e-13,
    )
    maxima = solved.y_events[0][:, 0]
    assert len(maxima) >= 3
    # the integrator's tolerance, over some hundred steps
    np.testing.assert_allclose(np.log(maxima[:-1] / maxima[1:]), pole.logarithmic_decrement, rtol=1e-8)


def _velocity_falls_through_zero() -> Any:
    def event(_t: float, y: Any) -> float:
        return float(y[1])

    event.direction = -1.0  # type: ignore[attr-defined]
    return event


# ---------------------------------------------------------------------------------------------- response to a force


def test_at_zeta_one_sixteenth_the_amplitude_at_fn_is_8_and_90_degrees_behind() -> None:
    """Common practice: unit static deflection, zeta = 1/16."""
    pole = Pole(440.0, 1.0 / 16.0)
    value = complex(pole.receptance(440.0))
    assert abs(value) == pytest.approx(8.0, rel=4 * EPS)
    assert math.degrees(cmath.phase(value)) == pytest.approx(-90.0, rel=4 * EPS)
    assert pole.amplification_at_fn == 8.0
    assert float(pole.phase_deg(440.0)) == pytest.approx(-90.0, rel=4 * EPS)


@pytest.mark.parametrize("zeta", [1e-4, 1.0 / 16.0, 0.5])
def test_phase_is_0_minus_90_minus_180_far_below_at_and_far_above_fn(zeta: float) -> None:
    """Common practice. Tolerance: the phase is 2 zeta r from its limit, in radians, for r = f/fn or its inverse."""
    far = 1e-6
    phases = Pole(50.0, zeta).phase_deg(np.array([50.0 * far, 50.0, 50.0 / far]))
    tolerance = math.degrees(2.1 * zeta * far) + 180.0 * 4 * EPS
    np.testing.assert_allclose(phases, [0.0, -90.0, -180.0], rtol=0.0, atol=tolerance)


@pytest.mark.parametrize("zeta", [1.0 / 1000.0, 1.0 / 16.0, 0.3])
def test_the_complex_response_equals_that_of_scipy_signal_freqs(zeta: float) -> None:
    """`scipy.signal.freqs` evaluates the polynomials; near fn it loses eps/zeta, which sets the tolerance."""
    pole, wn = Pole(100.0, zeta), 200.0 * math.pi
    f = np.concatenate([np.geomspace(0.1, 1e4, 101), 100.0 * (1.0 + zeta * np.linspace(-3, 3, 31))])
    mass = 2.5
    denominator = [mass, 2.0 * mass * zeta * wn, mass * wn**2]
    for ours, numerator in (
        (pole.receptance, [1.0]),
        (pole.mobility, [1.0, 0.0]),
        (pole.accelerance, [1.0, 0.0, 0.0]),
    ):
        _, theirs = signal.freqs(numerator, denominator, 2.0 * math.pi * f)
        np.testing.assert_allclose(ours(f, mass=mass), theirs, rtol=32 * EPS / zeta)


# ---------------------------------------------------------------------------------------------- transient


@pytest.mark.parametrize("q", [5.0, 20.0, 100.0])
def test_the_transient_falls_to_1_over_e_in_q_over_pi_cycles(q: float) -> None:
    """Common practice. The step response of `scipy.signal.lsim`; its distance from the end value is the transient.

    The envelope of a decay is ``sqrt(e^2 + ((e' + g e)/wd)^2)`` for any phase; e' from a second output of the system.
    """
    zeta = 0.5 / q
    cycles = Pole.from_q(1.0 / (2.0 * math.pi), q).cycles_to_1e
    system = ([[0.0, 1.0], [-1.0, -2.0 * zeta]], [[0.0], [1.0]], np.eye(2), [[0.0], [0.0]])
    t = np.linspace(0.0, 2.0 * math.pi * cycles, 2001)
    _, states, _ = signal.lsim(system, np.ones_like(t), t)
    e, rate = states[:, 0] - 1.0, states[:, 1]
    envelope = np.hypot(e, (rate + zeta * e) / math.sqrt(1.0 - zeta**2))
    assert envelope[-1] / envelope[0] == pytest.approx(math.exp(-1.0), rel=2001 * 8 * EPS)  # one product a step
    assert cycles == pytest.approx(q / math.pi, rel=4 * EPS)


@pytest.mark.parametrize("q", [5.0, 100.0])
def test_free_vibration_of_scipy_signal_lsim_follows_the_pole(q: float) -> None:
    """The impulse response, ``Im exp(s t)``, against the exact discretisation in `scipy.signal.lsim`."""
    pole = Pole.from_q(10.0, q)
    wn = 20.0 * math.pi
    system = ([[0.0, 1.0], [-(wn**2), -wn / q]], [[0.0], [0.0]], [[1.0, 0.0]], [[0.0]])
    t = np.linspace(0.0, 1.0, 1001)
    _, displacement, _ = signal.lsim(system, np.zeros_like(t), t, X0=[0.0, pole.s.imag])
    # errors of one step's matrix exponential add up over the thousand steps
    np.testing.assert_allclose(displacement, np.exp(pole.s * t).imag, rtol=0.0, atol=1001 * 32 * EPS)


# ---------------------------------------------------------------------------------------------- peaks, half power


@pytest.mark.parametrize("zeta", [0.01, 0.05, 0.2, 0.4, 0.6])
def test_the_three_responses_peak_where_a_general_optimiser_finds_them(zeta: float) -> None:
    """Peaks at fn sqrt(1-2 zeta^2), fn, fn/sqrt(1-2 zeta^2) (vibration handbooks).

    Tolerance: an optimum is found to the square root of the rounding of its value, times its width.
    """
    pole = Pole(1.0, zeta)
    for order, ours in enumerate((pole.displacement_peak_hz, pole.velocity_peak_hz, pole.acceleration_peak_hz)):
        found = optimize.minimize_scalar(
            lambda r, order=order: -freqs_gain(zeta, r, order), bounds=(0.2, 3.0), method="bounded",
            options={"xatol": 1e-10},
        )  # fmt: skip
        assert ours == pytest.approx(found.x, abs=1e-6)
        if order == 0:
            assert pole.peak_amplification == pytest.approx(-found.fun, rel=1e-10)


def half_power_by_search(zeta: float) -> tuple[float, float]:
    """Return f/fn of both half-power points of the displacement response: search on `scipy.signal.freqs` alone."""
    peak = optimize.minimize_scalar(
        lambda r: -freqs_gain(zeta, r), bounds=(1e-3, 1.0), method="bounded", options={"xatol": 1e-13}
    )
    target = -peak.fun / math.sqrt(2.0)

    def above_half(ratio: float) -> float:
        return freqs_gain(zeta, ratio) - target

    return (
        float(optimize.brentq(above_half, 0.0, peak.x, xtol=1e-15)),
        float(optimize.brentq(above_half, peak.x, 3.0, xtol=1e-15)),
    )


@pytest.mark.parametrize("zeta", [0.01, 0.05, 0.1, 0.2, 0.35])
def test_exact_half_power_frequencies_are_where_a_general_search_finds_them(zeta: float) -> None:
    points = Pole(1.0, zeta).half_power_hz
    assert points == pytest.approx(half_power_by_search(zeta), rel=1e-12)  # 32 eps / zeta at the smallest zeta


def parting_of_lower(zeta: float) -> float:
    return 1.0 - half_power_by_search(zeta)[0] / (1.0 - zeta)


def parting_of_upper(zeta: float) -> float:
    return 1.0 - half_power_by_search(zeta)[1] / (1.0 + zeta)


def parting_of_q(zeta: float) -> float:
    low, high = half_power_by_search(zeta)
    return 1.0 - 2.0 * zeta / (high - low)


@pytest.mark.parametrize(
    ("parting", "fraction", "stated"),
    [
        (parting_of_lower, 0.01, 0.0762),
        (parting_of_lower, 0.05, 0.1563),
        (parting_of_upper, 0.01, 0.0873),
        (parting_of_upper, 0.05, 0.2109),
        (parting_of_q, 0.01, 0.0988),
        (parting_of_q, 0.05, 0.2103),
    ],
)
def test_exact_and_light_half_power_part_by_1_and_5_percent_at_the_zeta_stated(
    parting: Callable[[float], float], fraction: float, stated: float
) -> None:
    """Computed with `scipy.optimize` on `scipy.signal.freqs`; the statement has four decimals."""
    found = float(optimize.brentq(lambda zeta: parting(zeta) - fraction, 0.02, 0.36, xtol=1e-12))
    assert found == pytest.approx(stated, abs=0.5e-4)
    pole = Pole(1.0, found)
    exact = pole.half_power_hz
    assert exact is not None
    if parting is parting_of_q:
        # the search's 1e-12 in zeta and 1e-13 in the width, over the slope 2 zeta of the parting
        assert parting_zeta(QDefinition.HALF_POWER, fraction) == pytest.approx(found, abs=1e-10)
    else:
        side = 0 if parting is parting_of_lower else 1
        assert 1.0 - exact[side] / pole.half_power_light_hz[side] == pytest.approx(fraction, abs=1e-10)


@pytest.mark.parametrize("fraction", [0.01, 0.05])
def test_the_amplification_parts_from_q_where_a_general_search_says(fraction: float) -> None:
    """The largest of `scipy.signal.freqs` over 1/(2 zeta)."""

    def excess(zeta: float) -> float:
        top = optimize.minimize_scalar(
            lambda r: -freqs_gain(zeta, r), bounds=(1e-3, 1.0), method="bounded", options={"xatol": 1e-12}
        ).fun
        return float(-top * 2.0 * zeta - 1.0 - fraction)

    found = float(optimize.brentq(excess, 0.01, 0.6, xtol=1e-13))
    assert parting_zeta(QDefinition.AMPLIFICATION, fraction) == pytest.approx(found, rel=1e-10)


# ---------------------------------------------------------------------------------------------- tables of poles


@pytest.fixture(scope="module")
def seismology() -> Any:
    """Give `obspy`, which warns while it is imported: its own affair."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        importlib.import_module("obspy.signal.invsim")
        return importlib.import_module("obspy")


def test_the_wood_anderson_pole_is_1_25_hz_with_damping_0_8(seismology: Any) -> None:
    """`obspy.signal.invsim.WOODANDERSON` (IASPEI); its poles carry four digits, -6.283 for -2 pi."""
    poles = seismology.signal.invsim.WOODANDERSON["poles"]
    rounding = 0.5e-3  # rad/s, of the real part; the imaginary part carries one digit more
    for s in poles:
        pole = Pole.from_pole(s)
        assert pole.frequency_hz == pytest.approx(1.25, abs=rounding / (2 * math.pi))
        assert pole.zeta == pytest.approx(0.8, abs=rounding / (2 * math.pi * 1.25))
    pair = sorted(poles, key=lambda s: s.imag)
    assert Pole(1.25, 0.8).s == pytest.approx(pair[1], abs=rounding)


def test_the_l4_geophone_pole_is_1_0_hz(seismology: Any) -> None:
    """The response file of an L-4 (three components) that `obspy` carries: station ZUGS, 1 Hz.

    Its damping there is 0.62 of critical; poles to five decimals.
    """
    file = resources.files("obspy.io.xseed.tests") / "data" / "dataless.seed.BW_ZUGS"
    with resources.as_file(file) as path, warnings.catch_warnings():
        warnings.simplefilter("ignore")
        inventory = seismology.read_inventory(str(path))
    channels = inventory[0][0].channels
    assert {channel.code for channel in channels} == {"EHZ", "EHN", "EHE"}
    for channel in channels:
        assert "L4" in channel.sensor.type
        stage = channel.response.get_paz()
        assert stage.pz_transfer_function_type == "LAPLACE (RADIANS/SECOND)"
        for s in stage.poles:
            pole = Pole.from_pole(complex(s))
            assert pole.frequency_hz == pytest.approx(1.0, abs=0.5e-5)
            assert pole.zeta == pytest.approx(0.62, abs=0.5e-5)


@pytest.mark.parametrize(("frequency", "damping"), [(1.25, 0.8), (1.0, 0.62), (1.0, 0.707), (4.5, 0.56)])
def test_poles_equal_those_obspy_makes_from_frequency_and_damping(
    seismology: Any, frequency: float, damping: float
) -> None:
    """`obspy.signal.invsim.corn_freq_2_paz`."""
    theirs = seismology.signal.invsim.corn_freq_2_paz(frequency, damping)["poles"]
    upper = max(theirs, key=lambda s: s.imag)
    assert Pole(frequency, damping).s == pytest.approx(upper, rel=8 * EPS)


@pytest.mark.parametrize(("frequency", "zeta"), [(900.0, 1 / 80), (2400.0, 1 / 300), (5000.0, 1 / 4000), (1.25, 0.8)])
def test_natural_frequency_and_damping_equal_those_of_control_damp(frequency: float, zeta: float) -> None:
    """`control.damp` finds them as roots of the denominator; roots lose eps/zeta in the damping, which sets rel."""
    control = pytest.importorskip("control")
    wn = 2.0 * math.pi * frequency
    wns, zetas, poles = control.damp(control.tf([1.0], [1.0, 2.0 * zeta * wn, wn**2]), doprint=False)
    for w, z, s in zip(wns, zetas, poles, strict=True):
        pole = Pole.from_pole(complex(s))
        assert pole.angular_frequency_rad_s == pytest.approx(w, rel=16 * EPS)
        assert pole.zeta == pytest.approx(z, rel=16 * EPS / zeta)
        assert pole.frequency_hz == pytest.approx(frequency, rel=16 * EPS)
        assert pole.zeta == pytest.approx(zeta, rel=16 * EPS / zeta)


@pytest.mark.parametrize(("frequency", "q"), [(900.0, 40.0), (5000.0, 2000.0), (23_000.0, 3.0)])
def test_discrete_poles_equal_those_of_scipy_signal_cont2discrete(frequency: float, q: float) -> None:
    """A zero-order hold keeps the poles exp(s T); read as the eigenvalues of the matrix exponential."""
    rate, wn = 48_000.0, 2.0 * math.pi * frequency
    # in states scaled to x and x'/wn, so that the matrix is balanced
    system = (np.array([[0.0, wn], [-wn, -wn / q]]), np.array([[0.0], [wn]]), np.eye(2), np.zeros((2, 1)))
    matrix = signal.cont2discrete(system, 1.0 / rate)[0]
    upper = max(np.linalg.eigvals(matrix), key=lambda z: z.imag)
    pole = Pole.from_q(frequency, q)
    assert pole.discrete(rate) == pytest.approx(complex(upper), rel=64 * EPS)
    back = Pole.from_discrete(complex(upper), rate)
    # |z| is known to eps, and the decay in one sample is decay_rate / rate
    assert back.zeta == pytest.approx(0.5 / q, rel=64 * EPS * rate / pole.decay_rate + 64 * EPS)
    assert back.frequency_hz == pytest.approx(frequency, rel=64 * EPS * rate / frequency)
