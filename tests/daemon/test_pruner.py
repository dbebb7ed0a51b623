"""Pruning beside the live run takes one step at a time, and looks again an hour after it found nothing."""

from __future__ import annotations

import sqlite3
from contextlib import closing
from pathlib import Path

import pytest
from driftwatch.daemon import pruner as room
from driftwatch.daemon.pruner import AFTER_FAILURE_S, LOOK_EVERY_S, Pruner
from driftwatch.store.errors import CommitError
from driftwatch.store.lock import WriterLock
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


def test_a_step_that_fails_is_tried_again_a_minute_later(tmp_path: Path) -> None:
    path = tmp_path / "a.db"
    with Writer.open_live(path, WriterLock(path, "s")) as writer:
        pruner = Pruner(writer, 7.0, lambda: 123)
        with closing(sqlite3.connect(path, isolation_level=None)) as other:
            other.execute("BEGIN IMMEDIATE")
            with pytest.raises(CommitError, match="locked"):
                pruner.step(10.0)
            pruner.step(10.0 + AFTER_FAILURE_S - 0.1)
            other.execute("ROLLBACK")
        assert not pruner.is_done
        pruner.step(10.0 + AFTER_FAILURE_S)
        assert pruner.is_done
