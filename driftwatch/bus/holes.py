"""What a listener missed: told by the numbers that every message carries."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from driftwatch.bus.wire import HEARTBEAT, is_repeated

if TYPE_CHECKING:
    from collections.abc import Mapping


@dataclass(frozen=True, slots=True)
class Hole:
    """Records that were published and did not come."""

    topic: str | None  # on which topic; None: on any
    after: int  # sequence of the last record that came
    before: int  # sequence of the first that is known not to have been missed

    def __str__(self) -> str:
        """One line for people."""
        where = "" if self.topic is None else f" on {self.topic}"
        return f"missed records{where} after sequence {self.after} and before {self.before}"


class HoleFinder:
    """Compares the numbers of successive messages.

    Parameters
    ----------
    everything
        True where all topics are subscribed to: ``sequence`` must then count without holes, and a heartbeat tells
        what should have come before it. False: ``previous`` ties the records of each topic together.
    """

    def __init__(self, *, everything: bool) -> None:
        self._everything = everything
        self._run: str | None = None
        self._last: int | None = None
        self._of_topic: dict[str, int] = {}

    def seen(self, topic: str, message: Mapping[str, Any]) -> Hole | None:
        """Take in a message and return what was missed before it, if anything was.

        A message that was sent again says nothing of what came between: it is neither a hole nor progress.
        """
        if is_repeated(message):
            return None
        if message["run"] != self._run:  # another run counts anew
            self._run, self._last, self._of_topic = message["run"], None, {}
        sequence: int = message["sequence"]
        if message["kind"] == HEARTBEAT:
            return self._advance(sequence, sequence + 1)
        if self._everything:
            return self._advance(sequence, sequence)
        last, self._of_topic[topic] = self._of_topic.get(topic), sequence
        missed = last is not None and message["previous"] != last
        return Hole(topic, last, sequence) if missed and last is not None else None

    def _advance(self, sequence: int, before: int) -> Hole | None:
        """Move to `sequence`; everything below `before` should have come by now."""
        last, self._last = self._last, max(sequence, self._last or 0)
        missed = self._everything and last is not None and last + 1 < before
        return Hole(None, last, before) if missed and last is not None else None
