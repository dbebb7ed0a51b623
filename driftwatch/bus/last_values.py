"""The last message of each topic, to be sent again to whoever comes late."""

from __future__ import annotations

import math

from driftwatch.bus.wire import as_repeated

MOST_TOPICS = 4096
"""Topics of which the last message is held, about 4 MB; past that, those that were silent for longest go. Topics come
from the configuration: a mode has two, an alert one, so that this is enough for a thousand modes."""

REPEAT_EVERY_S = 1.0
"""Least time between two rounds of repeats, seconds: what one subscriber asks for, others hear as well."""


class LastValues:
    """Holds the last message of each topic, and tells which are due to be sent again.

    It reads no clock and knows no socket: instants are parameters, seconds of one monotonic clock.
    """

    def __init__(self) -> None:
        self._last: dict[bytes, bytes] = {}  # in the order in which they were sent
        self._wanted: set[bytes] = set()
        self._next_round = -math.inf

    def sent(self, topic: bytes, message: bytes) -> None:
        """Take in what was just sent, as one line of JSON; whoever wanted the topic has it by that."""
        self._wanted.discard(topic)
        self._last.pop(topic, None)
        self._last[topic] = message
        if len(self._last) > MOST_TOPICS:
            oldest = next(iter(self._last))
            del self._last[oldest]
            self._wanted.discard(oldest)

    def want(self, *prefixes: bytes) -> None:
        """Take in that somebody subscribed to the topics that begin so; one look at each topic for all of them."""
        self._wanted.update(topic for topic in self._last if topic.startswith(prefixes))

    def due(self, now: float) -> list[tuple[bytes, bytes]]:
        """Return topics and messages that are to be sent again now, in the order of their sequences."""
        if not self._wanted or now < self._next_round:
            return []
        self._next_round = now + REPEAT_EVERY_S
        wanted, self._wanted = self._wanted, set()
        return [(topic, as_repeated(message)) for topic, message in self._last.items() if topic in wanted]
