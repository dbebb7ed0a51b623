"""A listener that is ended and killed again and again ends with every record of the store, each exactly once."""

from __future__ import annotations

from pathlib import Path

import pytest

from benchmarks.listeners import RESTARTS_SMALL, restarted


@pytest.mark.timeout(300)
def test_ten_restarts_of_a_listener_and_two_of_its_daemon_lose_and_repeat_nothing(tmp_path: Path) -> None:
    """Real processes throughout; seeds 0 to 9 choose when each listener goes, and whether it is killed."""
    found = restarted(tmp_path, RESTARTS_SMALL)
    assert found.lines == found.stored[: len(found.lines)]
    assert len(found.lines) >= found.known
    assert (found.missing, found.repeated, found.strange) == (0, 0, 0)
    assert found.runs == 3
    assert 0 < found.killed < RESTARTS_SMALL
