"""What tests of the live daemon share: a folder on the path for their helpers, and the recording that they play."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parent))  # import-mode=importlib puts no folder of tests there

from card_files import Floats, two_modes, write_wav

from soundrig.fixtures import need_rig

PLAYED_S = 70
"""Length of the recording, longer than any scenario."""

AT_ONCE = 4
"""Scenarios that run at the same time: they mostly wait."""


@pytest.fixture(scope="session")
def played() -> Floats:
    """Return the samples that are played, shape (samples, 2)."""
    return two_modes(PLAYED_S)


@pytest.fixture(scope="session")
def wav(played: Floats, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return them as a file."""
    return write_wav(tmp_path_factory.mktemp("played") / "two-modes.wav", np.asarray(played))


@pytest.fixture(scope="module")
def pool() -> Iterator[ThreadPoolExecutor]:
    """Return what runs scenarios side by side; those that nobody asked for yet are not begun at the end."""
    need_rig()
    executor = ThreadPoolExecutor(AT_ONCE)
    yield executor
    executor.shutdown(wait=True, cancel_futures=True)


@pytest.fixture
def importable(monkeypatch: pytest.MonkeyPatch) -> None:
    """Let the daemon's processes import what stands in this folder."""
    monkeypatch.setenv("PYTHONPATH", str(Path(__file__).parent))
