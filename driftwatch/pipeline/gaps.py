"""Samples that are missing before a block: one incident each, with one begin and one end."""

from __future__ import annotations

import uuid
from typing import TYPE_CHECKING

from driftwatch.records import NS, Fault, Health, Phase, sample_time_ns

if TYPE_CHECKING:
    from driftwatch.stream.source import SourceFacts

WORDS = {
    Fault.GAP: "samples are missing",
    Fault.OVERFLOW: "the device says that it lost samples: the computer is too busy, or block_s too small",
    Fault.SLOW_CONSUMER: "the workers were too late and samples were lost: more workers, fewer or narrower modes",
    Fault.DEVICE: "the device gives no samples; it is opened again, by its name, as soon as it is there",
    Fault.PROCESS: "the process that reads the source died and was started again",
}
"""Why samples are missing, and what to do, by the fault that a gap carries."""


class Gaps:
    """The gaps of one source, in the order of the stream.

    A gap of a second and more begins with the first tick in it, so that it is known while it lasts; a shorter one
    when the samples are back.
    """

    def __init__(self, station: str, source: SourceFacts) -> None:
        self._station = station
        self._source = source
        self.position = source.first_sample  # stream index of the next sample
        self._open: Health | None = None

    @property
    def position_ns(self) -> int:
        """Stream time of the next sample."""
        return self._time_ns(self.position)

    def tick(self, cause: Fault) -> Health | None:
        """Let a second without samples pass; return the begin of the gap where it is not known yet."""
        return None if self._open else self._begin(cause)

    def block(self, first_sample: int, end: int, cause: Fault) -> list[Health]:
        """Let the samples from `first_sample` to before `end` come; return what ends, and begins, before them."""
        lost = first_sample - self.position
        found = [] if self._open or lost <= 0 else [self._begin(cause)]
        if self._open:
            found.append(self._end(max(lost, 0)))
        self.position = max(self.position, end)
        return found

    def finish(self, now_ns: int) -> Health | None:
        """Return the end of a gap in which the stream ends; `now_ns` is its stream time."""
        if self._open is None:
            return None
        return self._end(max(0, (now_ns - self._open.since_ns) * self._source.rate_hz // NS))

    def _time_ns(self, sample: int) -> int:
        return sample_time_ns(self._source.start_ns, sample, self._source.rate_hz)

    def _begin(self, cause: Fault) -> Health:
        since_ns = self.position_ns
        named = f"{self._station}/{self._source.name}/gap/{since_ns}"
        self._open = self._health(Phase.BEGIN, cause, str(uuid.uuid5(uuid.NAMESPACE_URL, named)), since_ns, 0)
        return self._open

    def _end(self, lost: int) -> Health:
        begin, self._open = self._open, None
        assert begin is not None  # noqa: S101 - for the type checker: an end follows a begin
        return self._health(Phase.END, begin.fault, begin.incident, begin.since_ns, lost)

    def _health(self, phase: Phase, fault: Fault, incident: str, since_ns: int, lost: int) -> Health:
        words = WORDS.get(fault, WORDS[Fault.GAP])
        return Health(
            channel=None,
            fault=fault,
            phase=phase,
            incident=incident,
            since_ns=since_ns,
            seconds=lost / self._source.rate_hz,
            first_sample=self.position,
            lost_samples=lost,
            value=None,
            limit=None,
            unit=None,
            detail=f"source {self._source.name}: {words}; windows that touch them are not used",
        )
