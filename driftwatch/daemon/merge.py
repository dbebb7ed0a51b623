"""The readings of several workers in one order: that of the blocks, and within a block that of the workers.

Workers have channels in file order, so this is the order in which one process alone would have given them.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterable, Iterator
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from driftwatch.daemon.messages import MeasuredBlock
    from driftwatch.pipeline.reading import Reading


class Merge:
    """Holds what came from each worker until all have measured a block.

    Parameters
    ----------
    workers
        How many there are.
    """

    def __init__(self, workers: int) -> None:
        self._waiting: list[deque[MeasuredBlock]] = [deque() for _ in range(workers)]
        self._next = [0] * workers
        self._position = [0] * workers
        self.merged = 0  # number of the next block to be merged

    def next_of(self, worker: int) -> int:
        """Return the number of the next block that a worker has to give."""
        return self._next[worker]

    def position_of(self, worker: int) -> int:
        """Return the stream index up to which a worker has given its readings."""
        return self._position[worker]

    def add(self, worker: int, blocks: Iterable[MeasuredBlock]) -> None:
        """Take blocks of a worker in.

        Raises
        ------
        ValueError
            When they are not the next ones.
        """
        for block in blocks:
            if block.number != self._next[worker]:
                raise ValueError(f"worker {worker} gave block {block.number}; expected {self._next[worker]}")
            self._next[worker] += 1
            if block.count:
                self._position[worker] = block.first_sample + block.count
            self._waiting[worker].append(block)

    def ready(self) -> Iterator[tuple[MeasuredBlock, list[Reading]]]:
        """Yield each block that all workers have measured, with the readings of all."""
        while all(self._waiting):
            blocks = [waiting.popleft() for waiting in self._waiting]
            self.merged = blocks[0].number + 1
            yield blocks[0], [reading for block in blocks for reading in block.readings]
