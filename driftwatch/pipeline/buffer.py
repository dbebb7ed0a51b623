"""Consecutive samples of a stream, addressed by their index in it."""

from __future__ import annotations

from typing import Generic, TypeVar

import numpy as np
from numpy.typing import DTypeLike, NDArray

_Scalar = TypeVar("_Scalar", bound=np.generic)


class SampleBuffer(Generic[_Scalar]):
    """A stretch of a stream that grows at its end and is forgotten from its begin.

    Parameters
    ----------
    dtype
        Of the samples.
    first
        Stream index of the first sample to come.
    """

    def __init__(self, dtype: DTypeLike, first: int) -> None:
        self._data: NDArray[_Scalar] = np.empty(0, dtype=dtype)
        self._origin = first  # stream index of _data[0]
        self._keep = first  # what lies before may be dropped
        self.first = first
        self.end = first

    def append(self, samples: NDArray[_Scalar]) -> None:
        """Add samples behind the last one; they are copied."""
        self._room(len(samples))[:] = samples

    def append_zeros(self, count: int) -> None:
        """Add `count` zeros behind the last sample."""
        self._room(count)[:] = 0

    def view(self, first: int, end: int) -> NDArray[_Scalar]:
        """Return the samples from index `first` to before `end`, without copying: valid until the next `append`.

        Raises
        ------
        IndexError
            When they are not all here any more, or not yet.
        """
        if not self._keep <= first <= end <= self.end:
            raise IndexError(f"samples {first} to {end} are not in the buffer; it holds {self._keep} to {self.end}")
        return self._data[first - self._origin : end - self._origin]

    def forget(self, before: int) -> None:
        """Let go of the samples before index `before`."""
        self._keep = min(max(self._keep, before), self.end)

    @property
    def kept(self) -> int:
        """Stream index of the first sample that is still here."""
        return self._keep

    def _room(self, count: int) -> NDArray[_Scalar]:
        """Return the place for `count` samples behind the last one."""
        if self.end - self._origin + count > len(self._data):
            self._move(count)
        room = self._data[self.end - self._origin : self.end - self._origin + count]
        self.end += count
        return room

    def _move(self, count: int) -> None:
        """Drop what was forgotten; take a larger array only where that is not enough."""
        kept = self._data[self._keep - self._origin : self.end - self._origin]
        needed = len(kept) + count
        if needed > len(self._data) or len(kept) > self._keep - self._origin:
            larger = np.empty(max(needed + needed // 2, len(self._data)), dtype=self._data.dtype)
            larger[: len(kept)] = kept
            self._data = larger
        else:
            self._data[: len(kept)] = kept
        self._origin = self._keep
