"""Onsets of free decays in a mode's baseband stream: a sudden jump that no random excitation makes.

The envelope of a resonance under random force wanders over many decibels, so a level proves nothing; but it wanders
slowly, and from its own past the stream is predictable but for an innovation. With a stride s of about a reciprocal
bandwidth, past which noise that is flat in the band is uncorrelated, a predictor of order one will do:

    e[n] = y[n] - a y[n - s]

where a is the least-squares predictor of the row so far, or, during a free decay that stands out of the row, of the
last samples alone. That leaves flat noise as it is (a = 0), whitens a resonant response, and follows the decay of the
blow before. An onset is where the mean energy of e over the next W samples exceeds `THRESHOLD` times the usual one. Of
Gaussian noise of any correlation the ratio has an exponential tail, so that the threshold keeps noise out for a month
and more. A blow of 20 dB over the rms in the band may pass it only just where the noise is flat and the decay as short
as the band allows: so what exceeds `WATCH` is looked at again, as a decaying tone of any frequency in the band.

Energies are kept in blocks of s samples. Rows are judged one by one: only elementwise operations and sums along a row,
on real numbers, are used on many rows together, so a row's result has the same bits whatever rows are beside it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Reals = NDArray[np.float64]
THRESHOLD = 12.0
"""Mean energy of the innovations over the next W samples, over their usual one, that makes an onset."""

WATCH = 6.0
"""The same that makes an onset if the innovations then sound like a decaying tone."""

GAIN = 32.0
"""Gain in log-likelihood of a decaying tone that confirms such an onset."""

_PAST = 24  # blocks from which the own predictor and the usual energy of the last samples come
_AFTER = 3.0  # W, in reciprocal bandwidths
_RING = 13.0  # how far the band edge's ringing reaches, in reciprocal bandwidths
_DECAY = 4.0  # shortest time constant of a tone, in reciprocal bandwidths: six half-power widths a side
_WIDENED = 1.25  # width of flat noise in the stream, its edges included, over that of the search band
_STEP_SHARE = 0.1  # least power of a jump over the level just before it: a decay that is no pure exponential jitters
_RING_FIRST_DB = 20.0  # by how much the ringing lies below the jump where it begins to be told apart
_RING_LAST_DB = 55.0  # and where it ends
_SOFT = 8.0  # blocks this many times above the row's usual level weigh less in its predictor
_ALIEN = 100.0  # and this many times above hardly anything: they are a decay and its ringing, not the row
_ABOVE = 4.0  # by how much the power of a free decay must stand above the row's usual level
_FOLLOW = 0.5  # and what share of the energy its own predictor must leave
_NEAR = 4  # strides from which the predictor in a free decay comes
_RISING = 3.0  # power over that a stride before, of samples that hold an onset's rise and are no decay yet
_TINY = 1e-200  # keeps a quotient finite; far below the square of any sample


@dataclass(frozen=True, slots=True)
class Onset:
    """One sudden jump of the stream."""

    position: float  # baseband samples from the row's first
    jump: float  # amplitude of the jump, in the stream's unit
    strength: float  # mean energy of the innovations just after it, over the usual one; above `THRESHOLD`


@dataclass(frozen=True, slots=True)
class Detector:
    """Finds onsets in rows of a baseband stream; made by `detector`.

    Attributes
    ----------
    stride
        s, baseband samples.
    future
        W, in blocks of s samples.
    ring
        How far the band edge's ringing reaches, baseband samples.
    times
        Samples in a reciprocal bandwidth.
    """

    stride: int
    future: int
    ring: int
    times: float

    @property
    def before(self) -> int:
        """Samples of context a row needs before its core."""
        return (_PAST + 2) * self.stride + self.ring

    @property
    def after(self) -> int:
        """Samples of context a row needs after its core."""
        return (self.future + 1) * self.stride + self.ring + self.separation

    @property
    def separation(self) -> int:
        """Samples by which two onsets lie apart at least."""
        return 3 * self.stride

    def find(self, rows: NDArray[np.complex64]) -> list[list[Onset]]:
        """Return the onsets in the core of each row, in order of time.

        Parameters
        ----------
        rows
            Shape (rows, n): in each row `before` samples of context, the core, and `after` samples of context.
            Onsets up to `separation` past the core's end are returned too, lest one at the seam of two cores be lost;
            of two from successive cores that lie closer than `separation` one is a repetition (see `is_repetition`).

        Raises
        ------
        ValueError
            When a row is too short to have a core.
        """
        if rows.ndim != 2 or rows.shape[1] <= self.before + self.after:
            raise ValueError(
                f"rows of shape {rows.shape}: expected two axes and more than {self.before + self.after} samples a row"
            )
        blocks = _Blocks(rows, self.stride, self.future)
        ratio = blocks.after / blocks.usual
        found: list[list[Onset]] = [[] for _ in range(rows.shape[0])]
        for row in np.flatnonzero((ratio > WATCH).any(axis=1)):
            found[row] = self._in_row(rows[row].astype(np.complex128), blocks, ratio[row], int(row))
        return found

    def is_repetition(self, position: float, last: float | None) -> bool:
        """Say whether an onset is the same as the last one of the core before, both counted from the same sample."""
        return last is not None and position - last < self.separation

    def _in_row(self, y: NDArray[np.complex128], blocks: _Blocks, ratio: Reals, row: int) -> list[Onset]:
        s, n = self.stride, len(y)
        # An onset lies up to W after the first block that feels it.
        felt = np.concatenate((np.full(self.future, -np.inf), ratio))
        felt_by = np.lib.stride_tricks.sliding_window_view(felt, self.future + 1).max(axis=1)
        block = np.clip(np.arange(n) // s - blocks.first, 0, len(ratio) - 1)
        usual = blocks.usual[row][block]
        general = (blocks.predictor[0][row] + 1j * blocks.predictor[1][row])[block]
        a, power, level = _innovations(y, s, general, usual)
        near = (felt_by[block] > WATCH) & (power > np.maximum(WATCH * usual, _STEP_SHARE * level))
        onsets = []
        for peak in _peaks(np.where(near, power, 0.0), self.separation, self.ring):
            if not self.before <= peak < n - self.after + self.separation:
                continue
            strength = float(np.mean(power[peak : peak + self.future * s]) / usual[peak])
            sure = strength > THRESHOLD or (strength > WATCH and self._gain(y, peak, a[peak], usual[peak]) > GAIN)
            if sure:
                onsets.append(Onset(_half_way(power, peak), math.sqrt(power[peak]), strength))
        return onsets

    def _gain(self, y: NDArray[np.complex128], peak: int, a: complex, usual: float) -> float:
        """Highest gain of a tone that begins within a stride of the peak and decays as fast as a band may show.

        The noise at each frequency is what the same tones find elsewhere in the row (the median, that other blows do
        not raise it), or flat noise of the usual power, whichever is more.
        """
        s, length = self.stride, math.ceil(2.0 * _DECAY * self.times)
        time = np.arange(length)
        frequency = np.arange(-10, 11) / (16.0 * self.times)  # cycles a sample, a sixteenth of the band apart
        tone = np.exp((2j * math.pi * frequency[:, None] - 1.0 / (_DECAY * self.times)) * time)
        tone[:, s:] -= a * tone[:, :-s]
        tone /= np.sqrt(np.sum(np.abs(tone) ** 2, axis=1))[:, None]
        pieces = np.lib.stride_tricks.sliding_window_view(y[s:] - a * y[:-s], length)
        power = np.abs(pieces @ tone.conj().T) ** 2
        here = slice(peak - 2 * s, peak - s + 2)  # piece i begins at sample s + i
        around = slice(max(0, peak - s - length), peak - s + 3 * length)
        elsewhere = np.delete(power, around, axis=0)
        noise = np.maximum(np.median(elsewhere, axis=0) / math.log(2.0), usual * self.times / _WIDENED)
        return float(np.max(power[here] / noise))


def detector(rate_hz: float, search_hz: tuple[float, float]) -> Detector:
    """Return the detector for a stream at `rate_hz` whose band passes `search_hz` and has smooth edges outside."""
    width = search_hz[1] - search_hz[0]
    if not 0.0 < width <= rate_hz:
        raise ValueError(f"search band {search_hz} at a baseband rate of {rate_hz} Hz: expected 0 < width <= rate")
    times = rate_hz / width
    stride = math.ceil(times)
    return Detector(stride, math.ceil(_AFTER * times / stride), math.ceil(_RING * times), times)


class _Blocks:
    """Energies of the innovations of all rows in blocks of a stride, each a mean per sample.

    Arrays have the shape (rows, columns); column i stands for block ``first + i`` of each row.
    """

    def __init__(self, rows: NDArray[np.complex64], stride: int, future: int) -> None:
        count = rows.shape[1] // stride
        self.first = _PAST + 2  # one block of lag, one of gap
        self.columns = count - self.first - future + 1
        real, imaginary = _as_reals(rows[:, : count * stride])
        s = stride
        power = _block_mean(real * real + imaginary * imaginary, s)
        # lagged product y[n] conj(y[n - s]) of each block with the one before; the first block has none
        cross = (
            _block_mean(real[:, s:] * real[:, :-s] + imaginary[:, s:] * imaginary[:, :-s], s),
            _block_mean(imaginary[:, s:] * real[:, :-s] - real[:, s:] * imaginary[:, :-s], s),
        )
        self._sums = [_running_sum(part) for part in (power, *cross)]
        self._choose(power, cross)
        self.after = self._innovation_energy(0, future)
        half = _PAST // 2
        # The quieter half of the past: so an onset just before hides no other.
        lately = np.minimum(self._innovation_energy(half + 1, half), self._innovation_energy(_PAST + 1, half))
        rounding = 1e-12 * np.max(power, axis=1) + np.finfo(np.float64).tiny  # of single precision
        self.usual = np.maximum(np.maximum(lately, self._so_far()), rounding[:, None])

    def _choose(self, power: Reals, cross: tuple[Reals, Reals]) -> None:
        """The predictor of the row so far; or of the last samples, where they are a free decay that stands out."""
        window = self._window(_PAST + 1, _PAST)
        general = self._general(power, cross)
        scale = 1.0 / np.maximum(window[1], _TINY)
        own = (window[2] * scale, window[3] * scale)
        level = window[0]
        self._ordinary = _left(window, general)
        steady = (level > _ABOVE * _harmonic(level)) & (level < _RISING * window[1])
        follow = steady & (_left(window, own) < _FOLLOW * self._ordinary)
        self.predictor = (np.where(follow, own[0], general[0]), np.where(follow, own[1], general[1]))
        self.recent = level

    def _general(self, power: Reals, cross: tuple[Reals, Reals]) -> tuple[Reals, Reals]:
        """Least-squares predictor of all blocks so far but the last; blocks weigh alike whatever their level."""
        smooth = power[:, 4:] + power[:, 3:-1] + power[:, 2:-2] + power[:, 1:-3] + power[:, :-4]
        usual = _harmonic(smooth) + _TINY
        excess = np.minimum(smooth / (_ALIEN * usual), 1e9)
        weight = 1.0 / ((smooth + _SOFT * usual) * (1.0 + excess * excess))
        columns = slice(self.first - 5, self.first - 5 + self.columns)
        lagged = np.cumsum(weight * power[:, 3:-1], axis=1)[:, columns]
        scale = 1.0 / np.maximum(lagged, _TINY)
        real = np.cumsum(weight * cross[0][:, 3:], axis=1)[:, columns] * scale
        imaginary = np.cumsum(weight * cross[1][:, 3:], axis=1)[:, columns] * scale
        return real, imaginary

    def _window(self, back: int, length: int) -> tuple[Reals, Reals, Reals, Reals]:
        """Mean over `length` blocks, begun `back` before each, of |y|^2, |y(-s)|^2, and the lagged product."""
        begin = self.first - back

        def mean(sums: Reals, start: int) -> Reals:
            stop = start + length
            return (sums[:, stop : stop + self.columns] - sums[:, start : start + self.columns]) * (1.0 / length)

        power, real, imaginary = self._sums
        return mean(power, begin), mean(power, begin - 1), mean(real, begin - 1), mean(imaginary, begin - 1)

    def _innovation_energy(self, back: int, length: int) -> Reals:
        return _left(self._window(back, length), self.predictor)

    def _so_far(self) -> Reals:
        """Harmonic mean of what the general predictor left so far: earlier onsets hardly count."""
        return _harmonic(self._ordinary)


def _harmonic(values: Reals) -> Reals:
    """Harmonic mean of the values up to each."""
    return np.arange(1, values.shape[1] + 1) / np.cumsum(1.0 / np.maximum(values, _TINY), axis=1)


def _innovations(
    y: NDArray[np.complex128], s: int, general: NDArray[np.complex128], usual: Reals
) -> tuple[NDArray[np.complex128], Reals, Reals]:
    """The predictor and |e|^2 of each sample of one row, and the level just before it.

    Where the last samples stand out of the usual and do not rise they are a free decay, and predict what follows
    better than the row does.
    """
    lagged = np.abs(y) ** 2
    cross = y[s:] * y[:-s].conj()
    span = _NEAR * s
    first = span + 2 * s  # the first sample with a whole span a gap before it
    pairs = np.concatenate(([0.0], np.cumsum(cross)))
    levels = np.concatenate(([0.0], np.cumsum(lagged)))
    count = len(y) - first
    sums = pairs[span : span + count] - pairs[:count], levels[span : span + count] - levels[:count]
    power = levels[span + s : span + s + count] - levels[s : s + count]
    decays = (sums[1] > _ABOVE * span * usual[first:]) & (power < _RISING * sums[1])
    a = general.copy()
    a[first:] = np.where(decays, sums[0] / np.maximum(sums[1], _TINY), general[first:])
    innovation = lagged.copy()
    innovation[s:] = np.abs(y[s:] - a[s:] * y[:-s]) ** 2
    level = np.zeros_like(lagged)
    level[2 * s :] = (levels[s : len(y) - s] - levels[: len(y) - 2 * s]) / s
    return a, innovation, level


def _left(window: tuple[Reals, Reals, Reals, Reals], a: tuple[Reals, Reals]) -> Reals:
    """Mean of |y - a y(-s)|^2."""
    power, lagged, real, imaginary = window
    return power + (a[0] * a[0] + a[1] * a[1]) * lagged - 2.0 * (a[0] * real + a[1] * imaginary)


def _as_reals(rows: NDArray[np.complex64]) -> tuple[Reals, Reals]:
    return rows.real.astype(np.float64), rows.imag.astype(np.float64)


def _block_mean(values: Reals, stride: int) -> Reals:
    total = values[:, ::stride].copy()
    for offset in range(1, stride):
        total += values[:, offset::stride]
    return total * (1.0 / stride)


def _running_sum(values: Reals) -> Reals:
    sums = np.zeros((values.shape[0], values.shape[1] + 1))
    np.cumsum(values, axis=1, out=sums[:, 1:])
    return sums


def _peaks(values: Reals, near: int, ring: int) -> list[int]:
    """Indices of the local maxima that are no ringing of a higher one, in order of time."""
    offsets = np.abs(np.arange(-ring, ring + 1))
    fall_db = _RING_FIRST_DB + (_RING_LAST_DB - _RING_FIRST_DB) * (offsets - near) / max(1, ring - near)
    mask = np.where(offsets <= near, 1.0, 10.0 ** (-fall_db / 10.0))
    floor = np.zeros(len(values) + 2 * ring)
    peaks: list[int] = []
    for index in np.argsort(-values, kind="stable"):
        if values[index] <= 0.0:
            break
        if values[index] > floor[index + ring]:
            peaks.append(int(index))
            around = slice(index, index + 2 * ring + 1)
            floor[around] = np.maximum(floor[around], mask * values[index])
    return sorted(peaks)


def _half_way(power: Reals, peak: int) -> float:
    """Where, before a peak, the innovation's amplitude passes half the peak's: there the jump is."""
    amplitude = np.sqrt(power[: peak + 1])
    half = amplitude[peak] / 2.0
    below = np.flatnonzero(amplitude < half)
    if len(below) == 0:
        return float(peak)
    last = int(below[-1])
    return last + float((half - amplitude[last]) / (amplitude[last + 1] - amplitude[last]))
