"""The rig as fixtures: a virtual sound card for one test, or a maker of such cards."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import ExitStack
from typing import Any

import pytest

from soundrig import Rig, missing_packages


def need_rig() -> None:
    """Skip the test, by name, where the rig's packages are not installed."""
    missing = missing_packages()
    if missing:
        pytest.skip(f"the virtual sound card needs: apt-get install {' '.join(missing)}")


@pytest.fixture
def make_rig() -> Iterator[Callable[..., Rig]]:
    """Return a maker of virtual sound cards (its arguments are those of `Rig`); all end with the test."""
    need_rig()
    with ExitStack() as stack:

        def make(**arguments: Any) -> Rig:
            return stack.enter_context(Rig(**arguments))

        yield make


@pytest.fixture
def rig(make_rig: Callable[..., Rig]) -> Rig:
    """Return a virtual sound card of 48 kHz and 2 inputs."""
    return make_rig()
