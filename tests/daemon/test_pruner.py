"""Pruning beside the live run takes one step at a time, and looks again an hour after it found nothing."""

from __future__ import annotations

from pathlib import Path

import pytest
from driftwatch.daemon import pruner as room
from driftwatch.daemon.pruner import LOOK_EVERY_S, Pruner
from driftwatch.store.writer import Writer


def test_a_step_a_call_while_there_is_something_old_then_one_an_hour(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    left = [True, True, False, False]
    asked: list[tuple[float, int]] = []

    def prune(_writer: Writer, keep_days: float, now_ns: int) -> bool:
        asked.append((keep_days, now_ns))
        return left[len(asked) - 1]

    monkeypatch.setattr(room, "prune", prune)
    with Writer.open(tmp_path / "a.db", "s") as writer:
        pruner = Pruner(writer, 7.0, lambda: 123)
        for now in (10.0, 11.0, 12.0, 13.0, 12.0 + LOOK_EVERY_S - 1.0, 12.0 + LOOK_EVERY_S):
            pruner.step(now)
    assert asked == [(7.0, 123)] * 4
