"""Zoom: one forward FFT per overlap-save block of a channel, one short inverse FFT per mode.

Block k of a stream is about the samples ``[k hop - lead, k hop - lead + hop)`` and takes ``edge`` more on either
side. Its real FFT is taken once; each band takes its own slice of bins, weights it with a smooth band edge, turns it
into a quantity whose resonance peaks at fn (velocity), and goes back by a short inverse FFT. The outer ``edge``
samples, which the block's ends disturb, are dropped; what remains of successive blocks joins without a seam. The
blocks lie on a fixed grid, so the result does not depend on how the samples arrived.

A band's baseband stream is

    y[n] = (analytic signal of the band, times (i w / wc)^k) exp(-i wc t),    t = n decimation / rate

with amplitude 2 for a real cosine of amplitude 2, that is ``Re(y exp(i wc t))`` is the band's signal.

The band edge is a cumulated Kaiser window: of all shapes of a given width its impulse response dies away soonest
(Kaiser 1974, in "Selected papers in digital signal processing II"; length for 100 dB after Kaiser & Schafer 1980).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray
from scipy import fft

VELOCITY_POWER = {
    "displacement": 1,
    "velocity": 0,
    "acceleration": -1,
    "force": 0,
    "pressure": 0,
    "voltage": 0,
}
"""Power k of (i w) that turns a quantity into one that peaks at fn under white force; force, pressure and voltage
are taken as proportional to a velocity (radiated sound, an induction coil)."""

_EDGE_ATTENUATION_DB = 100.0
_EDGE_BETA = 0.1102 * (_EDGE_ATTENUATION_DB - 8.7)  # Kaiser & Schafer 1980
_EDGE_PRODUCT = (_EDGE_ATTENUATION_DB - 7.95) / 14.36 / 2  # half the impulse response's length times the edge's width
_EDGE_SHARE = 0.35  # an edge's width over the search band's, at least
_EDGE_OF_WINDOW = 0.125  # the edge delay over the window's length, at most
_HOP_SHARE = 0.75  # of a block that is new, at least
_ODD_COST = 0.07  # what each doubling of the odd part of a length adds to its FFT's cost
_MOST_SHAPES = 1_000_000  # of blocks that are compared
_HOP_S = 1.0  # a hop is about this long at least: longer costs less, shorter answers sooner


@dataclass(frozen=True, slots=True)
class BandRequest:
    """What is wanted of one band."""

    search_hz: tuple[float, float]  # passed unchanged
    window_s: float  # length of a window
    step_s: float  # from one window to the next
    velocity_power: int = 0  # k of (i w)^k, see `VELOCITY_POWER`


@dataclass(frozen=True, slots=True)
class Band:
    """One band as the zoom delivers it."""

    search_hz: tuple[float, float]  # passed unchanged
    velocity_power: int
    centre_hz: float  # the stream's zero frequency
    decimation: int  # samples per baseband sample
    rate_hz: float  # of the baseband stream
    window: int  # baseband samples in a window
    step: int  # baseband samples from one window to the next


class Zoom:
    """The zoom of one channel.

    Parameters
    ----------
    rate_hz
        Sample rate of the channel.
    requests
        The bands, one for each mode.
    phase
        Where sample 0 lies in block 0, as a share of the hop, 0 to below 1: zooms of different phases have their work
        at different times.

    Attributes
    ----------
    fft_length, hop, edge
        Samples in a block, samples by which blocks advance, samples dropped at either end.
    lead
        Samples from the begin of block 0 to sample 0.
    bands
        The bands, in the order of the requests.

    Raises
    ------
    ValueError
        When a search band is not inside 0 .. rate/2, or no band is asked for.
    """

    def __init__(self, rate_hz: int, requests: Sequence[BandRequest], phase: float = 0.0) -> None:
        if not requests:
            raise ValueError("a zoom needs at least one band")
        for request in requests:
            _check(rate_hz, request)
        self.rate_hz = rate_hz
        self.hop: int
        self.edge: int
        widths = [_edge_widths(rate_hz, request) for request in requests]
        decimations = _decimations(rate_hz, requests, widths)
        unit = math.lcm(*decimations)
        self.edge = _ceil_to(_EDGE_PRODUCT / min(min(pair) for pair in widths) * rate_hz, unit)
        self.hop, self.edge = _block_shape(rate_hz, self.edge, unit)
        self.lead: int = int(phase * self.hop) // unit * unit
        self.fft_length = self.hop + 2 * self.edge
        slices = [
            _Slice(rate_hz, self.fft_length, request, width, decimation)
            for request, width, decimation in zip(requests, widths, decimations, strict=True)
        ]
        self._slices = slices
        self.bands = tuple(part.band for part in slices)

    def first_of(self, index: int) -> int:
        """Return the stream index of the first sample that a block is about."""
        return index * self.hop - self.lead

    def block_of(self, sample: int) -> int:
        """Return the number of the block that is about a sample."""
        return (sample + self.lead) // self.hop

    def known_at(self, sample: int) -> int:
        """Return the stream index at which all baseband before a sample is known: a block's end and its edge."""
        return self.first_of(-(-(sample + self.lead) // self.hop)) + self.edge

    def blocks(self, samples: NDArray[np.float32], index: int, count: int = 1) -> list[NDArray[np.complex64]]:
        """Return each band's baseband samples of `count` blocks from block `index` on.

        Several blocks at a time cost less than one by one, and give the same to the last bit: each is transformed by
        itself.

        Parameters
        ----------
        samples
            Shape (fft_length + (count - 1) * hop,), the stream's samples from ``first_of(index) - edge`` on.
        index
            Number of the first block, from 0.
        count
            How many blocks.

        Returns
        -------
        list of complex64 arrays
            Shape (count * hop / decimation,), for the stream's samples from ``first_of(index)`` on.
        """
        rows = np.lib.stride_tricks.sliding_window_view(samples, self.fft_length)[:: self.hop]
        if len(rows) != count:
            raise ValueError(f"{len(samples)} samples hold {len(rows)} blocks; expected {count}")
        spectra = fft.rfft(rows, axis=1)
        starts = [self.first_of(number) - self.edge for number in range(index, index + count)]
        return [part.take(spectra, starts, self.edge, self.hop) for part in self._slices]

    def stream(self, samples: NDArray[np.float32]) -> list[NDArray[np.complex64]]:
        """Return each band's baseband stream of a whole recording, taken as zero before and after it."""
        count = -(-(self.lead + len(samples)) // self.hop)
        padded = np.zeros(count * self.hop + 2 * self.edge, dtype=np.float32)
        begin = self.edge + self.lead
        padded[begin : begin + len(samples)] = samples
        cuts = [
            slice(self.lead // band.decimation, (self.lead + len(samples)) // band.decimation) for band in self.bands
        ]
        return [stream[cut] for stream, cut in zip(self.blocks(padded, 0, count), cuts, strict=True)]


class _Slice:
    """One band's weights and its way back to time."""

    def __init__(
        self, rate_hz: int, length: int, request: BandRequest, widths: tuple[float, float], decimation: int
    ) -> None:
        low, high = request.search_hz
        self.length = length
        self.count = length // decimation
        self.centre = round((low - widths[0] + high + widths[1]) / 2 * length / rate_hz)
        self.band = Band(
            search_hz=request.search_hz,
            velocity_power=request.velocity_power,
            centre_hz=self.centre * rate_hz / length,
            decimation=decimation,
            rate_hz=rate_hz / decimation,
            window=max(1, round(request.window_s * rate_hz / decimation)),
            step=max(1, round(request.step_s * rate_hz / decimation)),
        )
        # line j of the short inverse stands for bin centre + j, and centre + j - count from the middle on
        offsets = np.arange(self.count)
        offsets[self.count - self.count // 2 :] -= self.count
        bins = self.centre + offsets
        inside = (bins > 0) & (bins < length // 2)
        self.bins = np.where(inside, bins, 0)
        hz = np.where(inside, bins, self.centre) * rate_hz / length
        shape = _edge((hz - (low - widths[0])) / widths[0]) * _edge(((high + widths[1]) - hz) / widths[1])
        velocity = (1j * hz / self.band.centre_hz) ** request.velocity_power
        # the factor 2 makes the analytic signal; dividing by the decimation keeps amplitudes over the shorter inverse
        self.weight = np.asarray(2.0 / decimation * inside * shape * velocity, dtype=np.complex64)

    def take(self, spectra: NDArray[np.complex64], starts: Sequence[int], edge: int, hop: int) -> NDArray[np.complex64]:
        """Return the joined baseband of blocks with these spectra that begin at these stream indices."""
        turned = [(self.centre * start) % self.length for start in starts]  # integers: the phase is right for ever
        phase = np.exp(-2j * np.pi / self.length * np.array(turned)).astype(np.complex64)
        base = fft.ifft(spectra[:, self.bins] * self.weight, axis=1)
        step = self.band.decimation
        return np.asarray((base[:, edge // step : (edge + hop) // step] * phase[:, None]).ravel(), dtype=np.complex64)


def _check(rate_hz: int, request: BandRequest) -> None:
    low, high = request.search_hz
    if not 0.0 < low < high < rate_hz / 2:
        raise ValueError(
            f"search band {low} to {high} Hz; expected 0 < low < high < {rate_hz / 2} Hz, half the sample rate"
        )


def _edge_widths(rate_hz: int, request: BandRequest) -> tuple[float, float]:
    """Return the widths in Hz of the lower and the upper band edge."""
    low, high = request.search_hz
    wanted = max(_EDGE_SHARE * (high - low), _EDGE_PRODUCT / (_EDGE_OF_WINDOW * request.window_s))
    return min(wanted, low / 2), min(wanted, rate_hz / 2 - high)


def _decimations(rate_hz: int, requests: Sequence[BandRequest], widths: Sequence[tuple[float, float]]) -> list[int]:
    """Return a decimation for each band: near the largest that does not alias, with a small common multiple.

    Where one divides the window and the step, the windows come out exactly as asked for. The odd part of their
    common multiple is part of every block's length and is kept small, for the FFT's sake.
    """
    chosen: list[int] = []
    common = 1
    for request, pair in zip(requests, widths, strict=True):
        low, high = request.search_hz
        most = max(1, int(rate_hz / (high - low + sum(pair))))
        grid = math.gcd(round(request.window_s * rate_hz), round(request.step_s * rate_hz))
        candidates = [d for d in range(max(1, most // 2), most + 1) if _smooth(d)]
        best = max(candidates, key=partial(_merit, most=most, grid=grid, common=common, longest=rate_hz // 8))
        common = math.lcm(common, best)
        chosen.append(best)
    return chosen


def _merit(decimation: int, *, most: int, grid: int, common: int, longest: int) -> tuple[bool, bool, float]:
    """Return what speaks for a decimation, foremost first: exact windows, short blocks, low cost."""
    together = math.lcm(common, decimation)
    return grid % decimation == 0, together <= longest, decimation / most - _ODD_COST * math.log2(_odd_part(together))


def _block_cost(hop: int, edge: int) -> float:
    """Return the cost of a block's FFT per new sample, in arbitrary units (odd factors are slower: measured)."""
    length = hop + 2 * edge
    return length / hop * math.log2(length) * (1 + _ODD_COST * math.log2(_odd_part(length)))


def _block_shape(rate_hz: int, edge: int, unit: int) -> tuple[int, int]:
    """Return hop and edge, both multiples of `unit`, for the block of the least cost about one second long."""
    least = max(_HOP_S * rate_hz, 2 * edge * _HOP_SHARE / (1 - _HOP_SHARE))
    step = unit
    while 0.3 * least / step * 0.5 * edge / step > _MOST_SHAPES:  # a long edge need not be cut so fine
        step *= 2
    edge = _ceil_to(edge, step)
    shortest = _ceil_to(least, step)
    shapes = [
        (hop, edge + more)
        for hop in range(shortest, int(1.3 * shortest) + step + 1, step)
        for more in range(0, edge // 2 + step, step)
        if _smooth(hop + 2 * (edge + more)) and hop % 2 == 0
    ]
    if not shapes:
        return shortest * 2, edge
    return min(shapes, key=lambda shape: _block_cost(*shape))


def _odd_part(number: int) -> int:
    return number // (number & -number)


def _smooth(number: int) -> bool:
    """Say whether 2, 3, 5 and 7 are the only prime factors: then the FFT is fast."""
    for prime in (2, 3, 5, 7):
        while number % prime == 0:
            number //= prime
    return number == 1


def _ceil_to(value: float, unit: int) -> int:
    return max(1, math.ceil(value / unit)) * unit


def _edge(share: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the band edge, 0 at `share` <= 0 and 1 at `share` >= 1: the running integral of a Kaiser window."""
    grid = np.linspace(0.0, 1.0, 2049)
    window = np.i0(_EDGE_BETA * np.sqrt(np.clip(1.0 - (2.0 * grid - 1.0) ** 2, 0.0, None)))
    rise = np.concatenate(([0.0], np.cumsum((window[1:] + window[:-1]) / 2)))
    return np.asarray(np.interp(share, grid, rise / rise[-1]), dtype=np.float64)
