"""The pole of one resonance and all that follows from it: pure physics, no state, no randomness.

A resonance is a pair of poles ``s = -g ± i wd`` of ``m x'' + c x' + k x = F``. With the undamped natural frequency
``fn = wn / (2 pi)`` and the damping ratio ``zeta = c / (2 m wn)``

    g = zeta wn          decay rate, 1/s
    wd = wn sqrt(1 - zeta^2)
    Q = 1 / (2 zeta)

Everything here is exact for any 0 < zeta < 1 to the rounding of the two numbers held; where a form holds for light
damping only, its name says ``light``. Formulas are those of the vibration handbooks (J. P. Den Hartog, *Mechanical
Vibrations*, chapter 2; from memory) unless a docstring names another source or derives them.

Sign convention: time dependence ``exp(+i w t)``, so that displacement follows force by a phase of 0 degrees far below,
-90 degrees at and -180 degrees far above fn.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass
from enum import StrEnum
from typing import Self

import numpy as np
from numpy.typing import ArrayLike, NDArray

TWO_PI = 2.0 * math.pi

ZETA_NO_PEAK = math.sqrt(0.5)
"""From this damping ratio on, displacement and acceleration responses have no peak (1 - 2 zeta^2 <= 0)."""

ZETA_NO_LOWER_HALF_POWER = math.sin(math.pi / 8)
"""From this damping ratio on, the displacement response stays above half its peak power down to zero frequency."""


@dataclass(frozen=True, slots=True)
class Pole:
    """One resonance by its two numbers; everything else is derived from them.

    Raises
    ------
    ValueError
        When the frequency is not positive and finite, or zeta does not lie strictly between 0 and 1: a system damped
        critically or more does not resonate.
    """

    frequency_hz: float  # undamped natural frequency fn
    zeta: float  # damping ratio, 0 < zeta < 1

    def __post_init__(self) -> None:
        _require_positive("natural frequency in Hz", self.frequency_hz)
        if not 0.0 < self.zeta < 1.0:
            raise ValueError(f"damping ratio {self.zeta!r} is no resonance; expected more than 0 and less than 1")

    # ------------------------------------------------------------------------------------------ ways in

    @classmethod
    def from_q(cls, frequency_hz: float, q: float) -> Self:
        """Return the pole of natural frequency `frequency_hz` (Hz) and quality factor `q` = 1/(2 zeta), q > 1/2."""
        if not (q > 0.5 and math.isfinite(q)):
            raise ValueError(f"Q of {q!r} is no resonance; expected a finite value above 1/2")
        return cls(frequency_hz, 0.5 / q)

    @classmethod
    def from_pole(cls, s: complex) -> Self:
        """Return the resonance of a continuous-time pole `s` (rad/s); either of the conjugate pair will do.

        ``wn = |s|``, ``zeta = -Re s / |s|``.

        Raises
        ------
        ValueError
            When the pole does not decay (real part not negative) or does not oscillate (imaginary part zero).
        """
        if not (s.real < 0.0 and s.imag != 0.0):
            raise ValueError(f"pole {s!r} rad/s is no resonance; expected a negative real part and an imaginary part")
        return cls(abs(s) / TWO_PI, -s.real / abs(s))

    @classmethod
    def from_discrete(cls, z: complex, rate_hz: float) -> Self:
        """Return the resonance of a discrete-time pole ``z = exp(s / rate)``; either of the pair will do.

        The damped frequency is taken to lie below ``rate_hz / 2``: sampling cannot tell it from its aliases.

        Raises
        ------
        ValueError
            When z does not decay (|z| >= 1 or z = 0) or does not oscillate (z is real), or the rate is not positive.
        """
        _require_positive("sample rate in Hz", rate_hz)
        if not (0.0 < abs(z) < 1.0 and z.imag != 0.0):
            raise ValueError(f"discrete pole {z!r} is no resonance; expected it inside the unit circle and not real")
        return cls.from_pole(cmath.log(z) * rate_hz)

    @classmethod
    def from_decay(cls, damped_frequency_hz: float, time_constant_s: float) -> Self:
        """Return the resonance whose free decay swings at `damped_frequency_hz` and falls to 1/e in `time_constant_s`.

        ``wn^2 = wd^2 + 1/tau^2``; both arguments must be positive.
        """
        _require_positive("damped frequency in Hz", damped_frequency_hz)
        _require_positive("time constant in seconds", time_constant_s)
        return cls.from_pole(complex(-1.0 / time_constant_s, TWO_PI * damped_frequency_hz))

    # ------------------------------------------------------------------------------------------ damping

    @property
    def q(self) -> float:
        """Quality factor 1/(2 zeta): by definition, at any damping."""
        return 0.5 / self.zeta

    @property
    def loss_factor(self) -> float:
        """Loss factor eta = 2 zeta = 1/Q (ISO 6721-1, from memory)."""
        return 2.0 * self.zeta

    @property
    def logarithmic_decrement(self) -> float:
        """Logarithm of the ratio of amplitudes one damped period apart: ``2 pi zeta / sqrt(1 - zeta^2)``."""
        return TWO_PI * self.zeta / self._damped_ratio

    @property
    def decay_rate(self) -> float:
        """Decay rate ``g = zeta wn = pi fn / Q`` of the free vibration's amplitude, 1/s."""
        return self.zeta * self.angular_frequency_rad_s

    @property
    def time_constant_s(self) -> float:
        """Time in which the amplitude of free vibration falls to 1/e: ``tau = 1/g``."""
        return 1.0 / self.decay_rate

    @property
    def cycles_to_1e(self) -> float:
        """Cycles in which a transient falls to 1/e: ``fn tau = Q/pi`` (common practice; exact in cycles of fn)."""
        return self.q / math.pi

    # ------------------------------------------------------------------------------------------ frequencies

    @property
    def angular_frequency_rad_s(self) -> float:
        """Undamped natural angular frequency wn = 2 pi fn, rad/s."""
        return TWO_PI * self.frequency_hz

    @property
    def damped_frequency_hz(self) -> float:
        """Frequency of free vibration, ``fn sqrt(1 - zeta^2)``, Hz."""
        return self.frequency_hz * self._damped_ratio

    @property
    def s(self) -> complex:
        """Pole ``-g + i wd`` of the upper half plane, rad/s; its conjugate is the other one."""
        return complex(-self.decay_rate, TWO_PI * self.damped_frequency_hz)

    def discrete(self, rate_hz: float) -> complex:
        """Return the pole ``z = exp(s / rate_hz)`` of the resonance as sampled; its conjugate is the other one."""
        _require_positive("sample rate in Hz", rate_hz)
        return cmath.exp(self.s / rate_hz)

    @property
    def displacement_peak_hz(self) -> float | None:
        """Frequency of the largest displacement under constant force, ``fn sqrt(1 - 2 zeta^2)``; None: no peak."""
        square = 1.0 - 2.0 * self.zeta**2
        return self.frequency_hz * math.sqrt(square) if square > 0.0 else None

    @property
    def velocity_peak_hz(self) -> float:
        """Frequency of the largest velocity under constant force: fn itself, at any damping."""
        return self.frequency_hz

    @property
    def acceleration_peak_hz(self) -> float | None:
        """Frequency of the largest acceleration under constant force, ``fn / sqrt(1 - 2 zeta^2)``; None: no peak."""
        square = 1.0 - 2.0 * self.zeta**2
        return self.frequency_hz / math.sqrt(square) if square > 0.0 else None

    # ------------------------------------------------------------------------------------------ half power

    @property
    def half_power_hz(self) -> tuple[float, float] | None:
        """Frequencies (Hz) where the displacement response has half the power of its peak, exactly; None: too damped.

        Setting ``(1 - r^2)^2 + 4 zeta^2 r^2`` to twice its least value ``4 zeta^2 (1 - zeta^2)`` gives
        ``r^2 = 1 - 2 zeta^2 ± 2 zeta sqrt(1 - zeta^2)`` for r = f/fn. Below r = 0 there is no lower one: from
        `ZETA_NO_LOWER_HALF_POWER` = sin(pi/8) = 0.3827 on.
        """
        middle, half = 1.0 - 2.0 * self.zeta**2, 2.0 * self.zeta * self._damped_ratio
        if middle <= half:
            return None
        return self.frequency_hz * math.sqrt(middle - half), self.frequency_hz * math.sqrt(middle + half)

    @property
    def half_power_width_hz(self) -> float | None:
        """Width between the exact half-power frequencies of the displacement response, Hz; None: too damped.

        Formed as ``(r2^2 - r1^2) / (r1 + r2)``, which does not cancel however small zeta is.
        """
        points = self.half_power_hz
        if points is None:
            return None
        return 4.0 * self.zeta * self._damped_ratio * self.frequency_hz**2 / (points[0] + points[1])

    @property
    def half_power_light_hz(self) -> tuple[float, float]:
        """Half-power frequencies (Hz) in the form for light damping, ``fn (1 ± zeta)``.

        The exact ones lie 1.5 zeta^2 fn lower, to second order. They part from this form by 1 % of it at zeta 0.0762
        (the lower) and 0.0873 (the upper), by 5 % at 0.156 and 0.211.
        """
        return self.frequency_hz * (1.0 - self.zeta), self.frequency_hz * (1.0 + self.zeta)

    @property
    def half_power_width_light_hz(self) -> float:
        """Half-power width in the form for light damping, ``2 zeta fn = fn/Q``, Hz.

        This is at any damping the exact width of the *velocity* response, see `velocity_half_power_hz`.
        """
        return 2.0 * self.zeta * self.frequency_hz

    @property
    def velocity_half_power_hz(self) -> tuple[float, float]:
        """Frequencies (Hz) where the velocity response has half its peak power, ``fn (sqrt(1 + zeta^2) ± zeta)``.

        From ``|1 - r^2| = 2 zeta r``; their geometric mean is fn and their distance fn/Q, exactly, at any damping.
        """
        root = math.hypot(1.0, self.zeta)
        return self.frequency_hz / (root + self.zeta), self.frequency_hz * (root + self.zeta)

    # ------------------------------------------------------------------------------------------ response

    @property
    def amplification_at_fn(self) -> float:
        """Displacement under a force of frequency fn over that under the same steady force: ``1/(2 zeta) = Q``."""
        return self.q

    @property
    def peak_amplification(self) -> float | None:
        """Largest displacement over the static one, ``1 / (2 zeta sqrt(1 - zeta^2))``; None: no peak."""
        if self.displacement_peak_hz is None:
            return None
        return self.q / self._damped_ratio

    def receptance(
        self, frequency_hz: ArrayLike, *, mass: float | None = None, stiffness: float | None = None
    ) -> NDArray[np.complex128]:
        """Return displacement over force, ``1 / (k (1 - r^2 + 2 i zeta r))`` with r = f/fn (ISO 7626-1, from memory).

        Parameters
        ----------
        frequency_hz
            Frequencies in Hz, any shape.
        mass, stiffness
            Modal mass (kg) or modal stiffness (N/m), at most one of them. With neither the stiffness is 1: unit
            static deflection, so that the value at fn is -i Q.

        Returns
        -------
        ndarray
            Complex, m/N, of the shape given.

        Raises
        ------
        ValueError
            When both mass and stiffness are given, or the one given is not positive.
        """
        frequency = np.asarray(frequency_hz, dtype=np.float64)
        stiff = self._stiffness(mass, stiffness)
        return np.asarray(1.0 / (stiff * self._dynamic_stiffness(frequency)), dtype=np.complex128)

    def mobility(
        self, frequency_hz: ArrayLike, *, mass: float | None = None, stiffness: float | None = None
    ) -> NDArray[np.complex128]:
        """Return velocity over force, ``i w`` times the receptance, (m/s)/N; arguments as for `receptance`."""
        jw = 1j * TWO_PI * np.asarray(frequency_hz, dtype=np.float64)
        return np.asarray(jw * self.receptance(frequency_hz, mass=mass, stiffness=stiffness))

    def accelerance(
        self, frequency_hz: ArrayLike, *, mass: float | None = None, stiffness: float | None = None
    ) -> NDArray[np.complex128]:
        """Return acceleration over force, ``-w^2`` times the receptance, (m/s²)/N; arguments as for `receptance`."""
        w = TWO_PI * np.asarray(frequency_hz, dtype=np.float64)
        return np.asarray(-(w**2) * self.receptance(frequency_hz, mass=mass, stiffness=stiffness))

    def phase_deg(self, frequency_hz: ArrayLike) -> NDArray[np.float64]:
        """Return the phase of the receptance in degrees, 0 to -180 for positive frequencies, of the shape given.

        Mobility leads it by 90 and accelerance by 180 degrees.
        """
        dynamic = self._dynamic_stiffness(np.asarray(frequency_hz, dtype=np.float64))
        return np.asarray(-np.degrees(np.arctan2(dynamic.imag, dynamic.real)), dtype=np.float64)

    # ------------------------------------------------------------------------------------------ inside

    @property
    def _damped_ratio(self) -> float:
        """wd/wn; as a product, since 1 - zeta^2 would cancel near critical damping."""
        return math.sqrt((1.0 - self.zeta) * (1.0 + self.zeta))

    def _dynamic_stiffness(self, frequency: NDArray[np.float64]) -> NDArray[np.complex128]:
        """``1 - r^2 + 2 i zeta r``, from the difference fn - f, which is exact near resonance."""
        r = frequency / self.frequency_hz
        real = (self.frequency_hz - frequency) / self.frequency_hz * (1.0 + r)
        return np.asarray(real + 2j * self.zeta * r, dtype=np.complex128)

    def _stiffness(self, mass: float | None, stiffness: float | None) -> float:
        if mass is not None and stiffness is not None:
            raise ValueError("both mass and stiffness given; expected one of them, the pole tells the other")
        if mass is not None:
            _require_positive("modal mass in kg", mass)
            return mass * self.angular_frequency_rad_s**2
        if stiffness is not None:
            _require_positive("modal stiffness in N/m", stiffness)
            return stiffness
        return 1.0


def _require_positive(what: str, value: float) -> None:
    if not (value > 0.0 and math.isfinite(value)):
        raise ValueError(f"{what} is {value!r}; expected a positive finite number")


# ---------------------------------------------------------------------------------------------- what Q is taken for


class QDefinition(StrEnum):
    """What the textbooks call Q besides 1/(2 zeta). All of them agree as zeta goes to 0, none at every zeta.

    Two more are 1/(2 zeta) at any damping and so are no members: the amplification at fn itself (not at the peak), and
    2 pi times the peak energy stored over the energy lost in a cycle of steady vibration *at fn*.
    """

    AMPLIFICATION = "amplification"  # largest displacement over the static one
    ENERGY = "energy"  # 2 pi energy stored / energy lost in the next damped period of a free decay
    HALF_POWER = "half_power"  # fn over the half-power width of the displacement response
    DECREMENT = "decrement"  # pi over the logarithmic decrement


def q_definitions(pole: Pole) -> dict[QDefinition, float | None]:
    """Return what each textbook definition calls the Q of a pole; None where it is not defined at such a damping.

    ======================  ====================================================
    amplification           ``Q / sqrt(1 - zeta^2)``
    energy                  ``2 pi / (1 - exp(-2 d))``, d the decrement
    half_power              ``fn / (f2 - f1)``, nearly ``Q / (1 + zeta^2)``
    decrement               ``pi / d = Q sqrt(1 - zeta^2)``
    ======================  ====================================================

    Energy falls by exp(-2 d) over one damped period exactly, whatever the phase at which it is taken.
    """
    width = pole.half_power_width_hz
    return {
        QDefinition.AMPLIFICATION: pole.peak_amplification,
        QDefinition.ENERGY: TWO_PI / -math.expm1(-2.0 * pole.logarithmic_decrement),
        QDefinition.HALF_POWER: None if width is None else pole.frequency_hz / width,
        QDefinition.DECREMENT: math.pi / pole.logarithmic_decrement,
    }


_LARGEST_PARTING = {
    QDefinition.AMPLIFICATION: math.sqrt(2.0) - 1.0,  # where the peak vanishes
    QDefinition.ENERGY: 2.0 * TWO_PI - 1.0,  # critical damping: all the energy goes in one period
    QDefinition.HALF_POWER: 1.0 - 1.0 / math.sqrt(1.0 + math.sqrt(2.0)),  # where the lower point vanishes
    QDefinition.DECREMENT: 1.0,  # critical damping
}


def parting_zeta(definition: QDefinition, fraction: float) -> float:
    """Return the damping ratio at which a definition differs from 1/(2 zeta) by `fraction` of it; below, by less.

    For 1 % and 5 %: energy 0.0016 and 0.0078, half power 0.099 and 0.210, amplification 0.140 and 0.305, decrement
    0.141 and 0.312. With f the fraction, solved from the forms in `q_definitions`:

    * amplification, too high: ``zeta^2 = 1 - 1/(1 + f)^2``;
    * decrement, too low: ``zeta^2 = 1 - (1 - f)^2``;
    * half power, too low: with w = 1/(1 - f) the widening, ``zeta^2 = (w^2 - 1) / (w^4 + 2 w^2 - 1)``;
    * energy, too high: no closed form; nearly ``f / (2 pi)``, so it parts first by far.

    Raises
    ------
    ValueError
        When the definition never differs by so much where it is defined at all.
    """
    largest = _LARGEST_PARTING[definition]
    if not 0.0 < fraction < largest:
        raise ValueError(f"{definition} never parts by {fraction!r}; expected a fraction in 0..{largest:.4g}")
    if definition is QDefinition.AMPLIFICATION:
        return math.sqrt(fraction * (2.0 + fraction)) / (1.0 + fraction)
    if definition is QDefinition.DECREMENT:
        return math.sqrt(fraction * (2.0 - fraction))
    if definition is QDefinition.HALF_POWER:
        excess = fraction * (2.0 - fraction) / (1.0 - fraction) ** 2  # w^2 - 1
        return math.sqrt(excess / ((excess + 1.0) ** 2 + 2.0 * excess + 1.0))
    return _parting_zeta_energy(fraction)


def _parting_zeta_energy(fraction: float) -> float:
    """Bisect for the zeta whose energy definition is 1 + fraction times Q; it grows with zeta throughout."""
    low, high = 0.0, 1.0
    while (middle := 0.5 * (low + high)) not in (low, high):
        if _energy_excess(middle) < fraction:
            low = middle
        else:
            high = middle
    return middle


def _energy_excess(zeta: float) -> float:
    """By what fraction ``2 pi / (1 - exp(-2 d))`` exceeds 1/(2 zeta)."""
    decrement = Pole(1.0, zeta).logarithmic_decrement
    return 2.0 * TWO_PI * zeta / -math.expm1(-2.0 * decrement) - 1.0
