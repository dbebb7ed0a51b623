"""Which samples of a stream are missing."""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

LARGEST = 1e18
"""Samples of this size and more, full scale being 1, count as no numbers: the squares of their transforms would
overflow in single precision, and nothing but a broken file holds them."""


@dataclass(frozen=True, slots=True)
class Missing:
    """A run of samples that never came or cannot be used."""

    first: int  # stream index of the first
    end: int  # of the first good one after it
    reason: str  # a word of `records.REASONS`


class MissingList:
    """The runs of missing samples that still matter, in order."""

    def __init__(self) -> None:
        self._runs: list[Missing] = []

    def add(self, run: Missing) -> None:
        """Add a run behind the others; one that joins the last and has its reason prolongs it."""
        if self._runs and self._runs[-1].end == run.first and self._runs[-1].reason == run.reason:
            self._runs[-1] = replace(self._runs[-1], end=run.end)
        else:
            self._runs.append(run)

    def within(self, first: int, end: int) -> list[Missing]:
        """Return the runs that touch the samples from `first` to before `end`."""
        return [run for run in self._runs if run.first < end and run.end > first]

    def forget(self, before: int) -> None:
        """Let go of the runs that end before index `before`."""
        if self._runs and self._runs[0].end < before:
            self._runs = [run for run in self._runs if run.end >= before]


def unfinite_runs(samples: NDArray[np.float32]) -> Iterator[tuple[int, int, bool]]:
    """Yield (begin, end, all are numbers) of the longest runs that are all numbers, or all none."""
    if not len(samples):
        return
    # a sum of squares is small only if every sample is a small number; where it is not, the slow way decides
    with np.errstate(over="ignore", invalid="ignore"):
        total = np.dot(samples, samples)
    if total < LARGEST**2:
        yield 0, len(samples), True
        return
    finite = np.abs(samples) < LARGEST
    edges = [0, *(np.flatnonzero(np.diff(finite)) + 1).tolist(), len(samples)]
    for begin, end in itertools.pairwise(edges):
        yield begin, end, bool(finite[begin])


class Incident:
    """Tells when an incident begins and ends: it ends after a quiet time, so that scattered faults are one incident.

    Parameters
    ----------
    quiet
        Good samples after which it is over.
    """

    def __init__(self, quiet: int) -> None:
        self._quiet = quiet
        self.first: int | None = None  # stream index of its first bad sample; None: no incident
        self.end = 0  # index after the last bad one
        self.lost = 0  # bad samples so far

    def bad(self, first: int, end: int) -> bool:
        """Count a bad run; return whether it begins an incident."""
        begins = self.first is None
        if self.first is None:
            self.first, self.lost = first, 0
        self.end, self.lost = end, self.lost + end - first
        return begins

    def is_over(self, position: int) -> bool:
        """Say whether the incident is over at stream index `position`."""
        return self.first is not None and position - self.end >= self._quiet
