"""Consecutive samples of a stream, addressed by their index in it."""

from __future__ import annotations

from typing import Generic, TypeVar

import numpy as np
from numpy.typing import DTypeLike, NDArray

_Scalar = TypeVar("_Scalar", bound=np.generic)

BORROWED = 1 << 16
"""Samples from which on an array is kept as it is instead of being copied."""


class SampleBuffer(Generic[_Scalar]):
    """A stretch of a stream that grows at its end and is forgotten from its begin.

    What comes in small pieces is copied together. A large array is borrowed until it is given back; of the usual one
    only its end is then still wanted, and copied.

    Parameters
    ----------
    dtype
        Of the samples.
    first
        Stream index of the first sample to come.
    """

    def __init__(self, dtype: DTypeLike, first: int) -> None:
        self._own: NDArray[_Scalar] = np.empty(0, dtype=dtype)
        self._origin = first  # stream index of _own[0]
        self._own_end = first  # stream index behind what was copied
        self._loan: NDArray[_Scalar] = self._own  # what is borrowed, from _own_end on
        self._keep = first  # what lies before may be dropped

    @property
    def end(self) -> int:
        """Stream index behind the last sample."""
        return self._own_end + len(self._loan)

    @property
    def kept(self) -> int:
        """Stream index of the first sample that is still here."""
        return self._keep

    @property
    def seam(self) -> int:
        """Stream index between what was copied and what is borrowed: a view across it is a copy."""
        return self._own_end

    def append(self, samples: NDArray[_Scalar]) -> None:
        """Add samples behind the last one; they must not change any more."""
        self.give_back()
        if len(samples) >= BORROWED and samples.flags.c_contiguous:
            self._loan = samples
        else:
            self._room(len(samples))[:] = samples

    def append_zeros(self, count: int) -> None:
        """Add `count` zeros behind the last sample."""
        self.give_back()
        self._room(count)[:] = 0

    def give_back(self) -> None:
        """Copy what is still wanted of what is borrowed, and let go of it."""
        loan, begin = self._loan, self._own_end
        self._loan = self._own[:0]
        if self._keep > begin and len(loan):  # nothing of the own is wanted any more
            loan = loan[self._keep - begin :]
            self._origin = self._own_end = self._keep
        if len(loan):
            self._room(len(loan))[:] = loan

    def view(self, first: int, end: int) -> NDArray[_Scalar]:
        """Return the samples from index `first` to before `end`, not to be written to: valid until the next change.

        Raises
        ------
        IndexError
            When they are not all here any more, or not yet.
        """
        if not self._keep <= first <= end <= self.end:
            raise IndexError(f"samples {first} to {end} are not in the buffer; it holds {self._keep} to {self.end}")
        if first >= self._own_end:
            return self._loan[first - self._own_end : end - self._own_end]
        own = self._own[first - self._origin : min(end, self._own_end) - self._origin]
        return own if end <= self._own_end else np.concatenate((own, self._loan[: end - self._own_end]))

    def forget(self, before: int) -> None:
        """Let go of the samples before index `before`."""
        self._keep = min(max(self._keep, before), self.end)

    def _room(self, count: int) -> NDArray[_Scalar]:
        """Return the place for `count` samples behind the last one."""
        if self._own_end - self._origin + count > len(self._own):
            self._move(count)
        room = self._own[self._own_end - self._origin : self._own_end - self._origin + count]
        self._own_end += count
        return room

    def _move(self, count: int) -> None:
        """Drop what was forgotten; take a larger array only where that is not enough."""
        kept = self._own[self._keep - self._origin : self._own_end - self._origin]
        needed = len(kept) + count
        if needed > len(self._own) or len(kept) > self._keep - self._origin:
            larger = np.empty(max(needed + needed // 2, len(self._own)), dtype=self._own.dtype)
            larger[: len(kept)] = kept
            self._own = larger
        else:
            self._own[: len(kept)] = kept
        self._origin = self._keep
