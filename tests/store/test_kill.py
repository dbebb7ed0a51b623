"""A committed row survives SIGKILL at any instant, and a busy daemon that is killed starts again by itself."""

from __future__ import annotations

from pathlib import Path

import pytest

from benchmarks.kills import LOST_S, killed

KILLS = 20
LANES = 2


@pytest.mark.timeout(300)
def test_whatever_was_published_is_stored_after_sigkill_and_the_daemon_starts_again(tmp_path: Path) -> None:
    """20 kills at random instants; each next start is on the database that the kill left, with nobody's help.

    Integrity is checked after each, no run has a hole, and no reading is lost that was known more than a second before.
    """
    lanes = killed(tmp_path, KILLS, LANES)
    assert sum(one.kills for one in lanes) == KILLS
    assert sum(one.published for one in lanes) > 20 * KILLS
    assert [one.missing for one in lanes] == [0] * LANES
    assert [one.holes for one in lanes] == [0] * LANES
    assert [one.damage for one in lanes] == [[]] * LANES
    assert max(seconds for one in lanes for seconds in one.lost_s) <= LOST_S
