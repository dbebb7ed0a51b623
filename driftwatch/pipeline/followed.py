"""One mode over time: its measurements and the silences between them in, track points out."""

from __future__ import annotations

from typing import TYPE_CHECKING

from driftwatch.measure.ambient import SHARED_Q
from driftwatch.track.mode_tracker import ModeTracker

if TYPE_CHECKING:
    from driftwatch.config import ModeConfig
    from driftwatch.records import Measurement, Track


class FollowedMode:
    """Follows one mode through measurements and silences.

    Parameters
    ----------
    mode
        What is followed.
    step_s
        Time between two windows as the grid has it, seconds.
    start_ns
        Stream time at which it begins.
    """

    def __init__(self, mode: ModeConfig, step_s: float, start_ns: int) -> None:
        self.channel, self.name = mode.channel, mode.name
        self._tracker = ModeTracker(
            mode.channel, mode.name, (mode.search_hz.low, mode.search_hz.high), mode.window_s, step_s, shared_q=SHARED_Q
        )
        self._now_ns = start_ns  # time of the last track point or tick
        self._silent_ns = start_ns  # time of the last tick

    def measured(self, body: Measurement, end_ns: int) -> tuple[Track, int]:
        """Take a measurement whose samples end at `end_ns`; return the track point after it, and its stream time.

        What was measured before a silence and is known after it counts, but does not wake a track that the silence has
        ended: until new samples are measured the mode is held or lost.
        """
        self._now_ns = max(self._now_ns, end_ns)
        track = self._tracker.update(body, end_ns, self._now_ns)
        silent = self._tracker.tick(self._silent_ns) if end_ns < self._silent_ns else None
        return silent or track, self._now_ns

    def tick(self, time_ns: int) -> Track | None:
        """Let a second without samples pass; return a track point if the status changes."""
        self._now_ns = self._silent_ns = max(self._now_ns, time_ns)
        return self._tracker.tick(time_ns)
