"""Onsets of free decays in a mode's baseband stream: a sudden jump that no random excitation makes.

The envelope of a resonance under random force wanders over many decibels, so a level proves nothing; but it wanders
slowly, and from its own past the stream is predictable but for an innovation. With a stride s of about a reciprocal
bandwidth, past which noise that is flat in the band is uncorrelated, a predictor of order one will do:

    e[n] = y[n] - a y[n - s]

where a is the least-squares predictor of the row so far, or, during a free decay that stands out of the row, of the
last samples alone. That leaves flat noise as it is (a = 0), whitens a resonant response, and follows the decay of the
blow before. First stage, on every sample: the mean energy of e over the next W samples against the usual one. Second
stage, where the first exceeds `WATCH`: the gain in log-likelihood of a tone that begins there, over all frequencies of
the band, decaying as fast as a band of six half-power widths to either side may show. Of Gaussian noise of any
correlation either statistic has an exponential tail; together they keep it out for a month and more, while a blow of
20 dB over the rms in the band raises the gain to about twice what is asked.

Energies are kept in blocks of 2 s samples. Rows are judged one by one: only elementwise operations and sums along a
row, on real numbers, are used on many rows together, so a row's result has the same bits whatever rows are beside it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Reals = NDArray[np.float64]

WATCH = 5.0
"""First stage: mean energy of the innovations over the next W samples, over their usual one."""

GAIN = 35.0
"""Second stage: gain in log-likelihood of a decaying tone that begins here."""

_PAST = 12  # blocks from which the own predictor and the usual energy of the last samples come
_FUTURE = 2  # W, in blocks
_RING = 13.0  # how far the band edge's ringing reaches, in reciprocal bandwidths
_DECAY = 4.0  # shortest time constant of a tone, in reciprocal bandwidths: six half-power widths a side
_WIDENED = 1.3  # width of flat noise in the first stage, its edges included, over that of the search band
_STEP_SHARE = 0.1  # least power of a jump over the level just before it: a decay that is no pure exponential jitters
_RING_FIRST_DB = 20.0  # by how much the ringing lies below the jump where it begins to be told apart
_RING_LAST_DB = 55.0  # and where it ends
_SOFT = 2.7  # blocks this many times above the row's usual level weigh less in its predictor
_ALIEN = 33.0  # and this many times above hardly anything: they are a decay and its ringing, not the row
_ABOVE = 4.0  # by how much the power of a free decay must stand above the row's usual level
_FOLLOW = 0.5  # and what share of the energy its own predictor must leave
_NEAR = 4  # strides from which the predictor in a free decay comes
_RISING = 3.0  # power over that a stride before, of samples that hold an onset's rise and are no decay yet
_SILENCE = 1e-6  # energy of a stride over a jump's, below which it counts as silence
_SETTLED = 0.05  # innovations after an onset out of silence over the jump's
_QUIETER = 1.2  # mean energy of noise over that of the quieter of two halves
_TINY = 1e-200  # keeps a quotient finite; far below the square of any sample
_LARGEST_PREDICTOR = 4.0  # of a stationary or decaying stream it is 1 at most, but for chance


@dataclass(frozen=True, slots=True)
class Onset:
    """One sudden jump of the stream."""

    position: float  # baseband samples from the row's first
    jump: float  # amplitude of the jump, in the stream's unit
    gain: float  # in log-likelihood, of a decaying tone that begins here; above `GAIN`


@dataclass(frozen=True, slots=True)
class Detector:
    """Finds onsets in rows of a baseband stream; made by `detector`.

    Attributes
    ----------
    stride
        s, baseband samples.
    ring
        How far the band edge's ringing reaches, baseband samples.
    times
        Samples in a reciprocal bandwidth.
    """

    stride: int
    ring: int
    times: float

    @property
    def before(self) -> int:
        """Samples of context a row needs before its core."""
        return 2 * (_PAST + 2) * self.stride + self.ring

    @property
    def after(self) -> int:
        """Samples of context a row needs after its core."""
        return 2 * (_FUTURE + 1) * self.stride + self.ring + self.separation

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
        rows = np.ascontiguousarray(rows, dtype=np.complex64)
        blocks = _Blocks(rows, self.stride, _FUTURE)
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
        felt = np.concatenate((np.full(_FUTURE, -np.inf), ratio))
        felt_by = np.lib.stride_tricks.sliding_window_view(felt, _FUTURE + 1).max(axis=1)
        block = np.clip(np.arange(n) // blocks.size - blocks.first, 0, len(ratio) - 1)
        usual = blocks.usual[row][block]
        general = (blocks.predictor[0, row] + 1j * blocks.predictor[1, row])[block]
        a, power, level = _innovations(y, s, general, usual)
        near = (felt_by[block] > WATCH) & (power > np.maximum(WATCH * usual, _STEP_SHARE * level))
        onsets = []
        for peak in _peaks(np.where(near, power, 0.0), self.separation, self.ring):
            if not self.before <= peak < n - self.after + self.separation:
                continue
            gain = self._gain(y, peak, complex(a[peak]), float(usual[peak]))
            if gain > GAIN and self._dies_away(y, power, peak):
                onsets.append(Onset(_half_way(power, peak), math.sqrt(power[peak]), gain))
        return onsets

    def _dies_away(self, y: NDArray[np.complex128], power: Reals, peak: int) -> bool:
        """After silence noise begins as suddenly as a decay; but of a decay no innovation follows the first."""
        s = self.stride
        past = np.abs(y[peak - 2 * (_PAST + 2) * s : peak - 2 * s]) ** 2
        quietest = float(past.reshape(-1, s).mean(axis=1).min())
        follows = float(np.median(power[peak + self.separation : peak + 10 * s]))
        return quietest > _SILENCE * float(power[peak]) or follows < _SETTLED * float(power[peak])

    def _gain(self, y: NDArray[np.complex128], peak: int, a: complex, usual: float) -> float:
        """Highest gain of a tone that begins within a stride of the peak and decays as fast as a band may show.

        The noise at each frequency is what the same tones find elsewhere in the row (the lower quartile, that other
        blows do not raise it), or flat noise of the usual power, whichever is more.
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
        noise = np.maximum(
            np.quantile(elsewhere, 0.25, axis=0) / math.log(4.0 / 3.0),
            usual * self.times / _WIDENED,
        )
        return float(np.max(power[here] / noise))


def detector(rate_hz: float, search_hz: tuple[float, float]) -> Detector:
    """Return the detector for a stream at `rate_hz` whose band passes `search_hz` and has smooth edges outside."""
    width = search_hz[1] - search_hz[0]
    if not 0.0 < width <= rate_hz:
        raise ValueError(f"search band {search_hz} at a baseband rate of {rate_hz} Hz: expected 0 < width <= rate")
    times = rate_hz / width
    stride = math.ceil(times)
    return Detector(stride, math.ceil(_RING * times), times)


class _Blocks:
    """Energies of the innovations of all rows in blocks of two strides, each a mean per sample.

    Arrays have the shape (rows, columns); column i stands for block ``first + i`` of each row.
    """

    def __init__(self, rows: NDArray[np.complex64], stride: int, future: int) -> None:
        self.size = 2 * stride
        self.first = _PAST + 2  # the first block has no lagged product, and one block is the gap
        moments = _moments(rows, stride)
        self.columns = moments.shape[2] - self.first - future + 1
        self._sums = np.zeros((*moments.shape[:2], moments.shape[2] + 1))
        np.cumsum(moments, axis=2, out=self._sums[:, :, 1:])
        self._choose(moments)
        self.after = _left(self._window(0, future), self.predictor)
        # The quieter half of the past: so an onset just before hides no other.
        half = _PAST // 2
        later = _left(self._window(half + 1, half), self.predictor)
        earlier = _left(self._window(_PAST + 1, half), self.predictor)
        lately = np.minimum(later, earlier)
        rounding = 1e-12 * np.max(moments[0], axis=1) + _TINY  # of single precision
        # The harmonic mean of what was left so far hardly counts earlier onsets. Of noise a quieter half is too little.
        self.usual = np.maximum(np.maximum(lately, _QUIETER * _harmonic(lately)), rounding[:, None])

    def _window(self, back: int, length: int) -> Reals:
        """Means of the moments over `length` blocks, begun `back` before each; shape (4, rows, columns)."""
        start, stop = self.first - back, self.first - back + length
        total = self._sums[:, :, stop : stop + self.columns] - self._sums[:, :, start : start + self.columns]
        total *= 1.0 / length
        return total

    def _choose(self, moments: Reals) -> None:
        """The predictor of the row so far; or of the last samples, where they are a free decay that stands out."""
        smooth = moments[0, :, 2:] + moments[0, :, 1:-1] + moments[0, :, :-2]  # over the block and both neighbours
        usual = _harmonic(smooth)
        general = self._general(moments, smooth, usual)
        window = self._window(_PAST + 1, _PAST)
        level, lagged = window[0], window[1]
        ordinary = _left(window, general)
        own = _bounded(window[2:] * (1.0 / (lagged + _TINY)))
        now = usual[:, self.first - 4 : self.first - 4 + self.columns] * (_ABOVE / 3.0)
        follow = (level > now) & (level < _RISING * lagged)
        follow &= _left(window, own) < _FOLLOW * ordinary
        self.predictor = np.where(follow, own, general)

    def _general(self, moments: Reals, smooth: Reals, usual: Reals) -> Reals:
        """Least-squares predictor of all blocks up to the gap; loud blocks weigh little more than others."""
        excess = smooth * (1.0 / _ALIEN) / usual
        np.minimum(excess, 1e9, out=excess)
        excess *= excess
        excess += 1.0
        excess *= smooth + _SOFT * usual
        sums = np.cumsum(moments[1:, :, 1:-1] / excess, axis=2)
        # smooth begins with block 1 and reaches one block on: the last that ends before the gap is first - 3
        sums = sums[:, :, self.first - 4 : self.first - 4 + self.columns]
        return _bounded(np.asarray(sums[1:] * (1.0 / (sums[0] + _TINY))))


def _bounded(predictor: Reals) -> Reals:
    """Return a predictor no larger than a stream can ask for: after zeros it is a quotient of rounding errors."""
    return np.clip(predictor, -_LARGEST_PREDICTOR, _LARGEST_PREDICTOR)


def _moments(rows: NDArray[np.complex64], s: int) -> Reals:
    """Means over blocks of two strides of |y|^2, |y(-s)|^2 and y conj(y(-s)), real and imaginary.

    Shape (4, rows, blocks). The first block has no lagged product and repeats its own power as the lagged one.
    """
    count = rows.shape[1] // (2 * s)
    real, imaginary = (part[:, : count * 2 * s].astype(np.float64) for part in (rows.real, rows.imag))
    if s > 2:  # wide band edges: a mean of two samples keeps half of their noise out
        real, imaginary = _smoothed(real), _smoothed(imaginary)
    power = _stride_sum(real * real + imaginary * imaginary, s)
    cross = np.zeros((2, rows.shape[0], 2 * count))
    cross[0, :, 1:] = _stride_sum(real[:, s:] * real[:, :-s] + imaginary[:, s:] * imaginary[:, :-s], s)
    cross[1, :, 1:] = _stride_sum(imaginary[:, s:] * real[:, :-s] - real[:, s:] * imaginary[:, :-s], s)
    moments = np.empty((4, rows.shape[0], count))
    np.add(power[:, ::2], power[:, 1::2], out=moments[0])
    moments[1, :, 0] = moments[0, :, 0]
    np.add(power[:, 1:-1:2], power[:, 2::2], out=moments[1, :, 1:])
    np.add(cross[:, :, ::2], cross[:, :, 1::2], out=moments[2:])
    moments *= 1.0 / (2 * s)
    return moments


def _smoothed(values: Reals) -> Reals:
    """Mean of each sample and the one before; the first alone."""
    smooth = values.copy()
    smooth[:, 1:] += values[:, :-1]
    smooth[:, 1:] *= 0.5
    return smooth


def _stride_sum(values: Reals, stride: int) -> Reals:
    total = values[:, ::stride].copy()
    for offset in range(1, stride):
        total += values[:, offset::stride]
    return total


def _harmonic(values: Reals) -> Reals:
    """Harmonic mean of the values up to each."""
    return np.arange(1.0, values.shape[1] + 1.0) / np.cumsum(1.0 / (values + _TINY), axis=1)


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


def _left(window: Reals, a: Reals) -> Reals:
    """Mean of |y - a y(-s)|^2, from the moments of a window and the predictor's real and imaginary part."""
    square = a * a
    left = (square[0] + square[1]) * window[1]
    product = a * window[2:]
    product[0] += product[1]
    product[0] *= 2.0
    left += window[0]
    left -= product[0]
    return np.asarray(left)


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
