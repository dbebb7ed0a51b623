"""How a simulated quantity runs over time: straight lines between corner points, constant before and after."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class Course:
    """A piecewise linear function of stream seconds."""

    seconds: NDArray[np.float64]  # corner points, rising, the first at most 0
    values: NDArray[np.float64]
    areas: NDArray[np.float64]  # integral from the first corner point to each
    slopes: NDArray[np.float64]  # after each corner point; the last is 0

    @classmethod
    def of(cls, corners: Sequence[tuple[float, float]]) -> Course:
        """Return the course through corner points (seconds, value), in rising order, at least one."""
        if corners[0][0] > 0:
            corners = [(0.0, corners[0][1]), *corners]
        seconds, values = np.array(corners, np.float64).T
        steps = np.diff(seconds)
        areas = np.concatenate([[0.0], np.cumsum(steps * (values[1:] + values[:-1]) / 2)])
        slopes = np.concatenate([np.diff(values) / steps, [0.0]])
        return cls(seconds, values, areas, slopes)

    @property
    def constant(self) -> bool:
        """Whether it never changes."""
        return bool(np.all(self.values == self.values[0]))

    def at(self, seconds: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the values at `seconds`, of the same shape."""
        return np.interp(seconds, self.seconds, self.values)

    def integral(self, seconds: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the integral from the first corner point to `seconds` (none before it), exactly."""
        corner = np.searchsorted(self.seconds, seconds, side="right") - 1
        since = seconds - self.seconds[corner]
        return self.areas[corner] + since * (self.values[corner] + self.slopes[corner] * since / 2)
