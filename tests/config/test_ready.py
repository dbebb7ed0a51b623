"""The configurations that a user copies are valid, served, and say what they promise."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from driftwatch.config import SimulatedSourceConfig, SoundcardSourceConfig, load, loads, unserved

FOLDER = Path(__file__).parents[2] / "config"
READY = ["bearing-housing", "demo", "first-try", "post-mortem", "resonator-in-chamber"]


def test_these_are_all_of_them() -> None:
    assert sorted(path.stem for path in FOLDER.glob("*.toml")) == READY


@pytest.mark.parametrize("name", READY)
def test_a_ready_configuration_loads_and_is_served(name: str) -> None:
    config = load(FOLDER / f"{name}.toml")
    assert unserved(config, live=name != "post-mortem") == []


@pytest.mark.parametrize("name", READY)
def test_a_ready_configuration_explains_itself(name: str) -> None:
    lines = (FOLDER / f"{name}.toml").read_text(encoding="utf-8").splitlines()
    assert lines[0].startswith("# ")
    assert any(f"config/{name}.toml" in line for line in lines[:12])
    assert max(map(len, lines)) <= 120


def with_the_card(text: str) -> str:
    """Return a configuration as its comment says: without its source tables, and with the one of a sound card."""
    (shown,) = re.findall(r'(?:^#     .*\n)*^#     kind = "soundcard".*\n(?:^#     .*\n)*', text, re.MULTILINE)
    card = "".join(line.removeprefix("#     ") for line in shown.splitlines(keepends=True))
    rest = re.sub(r"^\[\[source(?:\.\w+)?\]\].*\n(?:^(?!\[).*\n)*", "", text, flags=re.MULTILINE)
    return f"{rest}\n{card}"


@pytest.mark.parametrize("name", ["bearing-housing", "resonator-in-chamber"])
def test_the_sound_card_that_a_ready_configuration_shows_fits_in_for_its_source(name: str) -> None:
    config = loads(with_the_card((FOLDER / f"{name}.toml").read_text(encoding="utf-8")), FOLDER)
    (card,) = config.source
    assert isinstance(card, SoundcardSourceConfig)
    assert card.name == load(FOLDER / f"{name}.toml").source[0].name
    assert card.wait_for_device
    assert unserved(config) == []


def test_the_first_try_needs_no_more_than_a_default_input() -> None:
    (card,) = load(FOLDER / "first-try.toml").source
    assert isinstance(card, SoundcardSourceConfig)
    assert (card.device, card.inputs) == (None, None)


def test_the_demo_shows_a_drift_a_fall_of_q_and_a_mode_that_stays_within_a_minute() -> None:
    config = load(FOLDER / "demo.toml")
    (source,) = config.source
    assert isinstance(source, SimulatedSourceConfig)
    assert source.pace == 1.0
    assert source.seconds is None
    moved = [
        (one.frequency_hz[-1][1] / one.frequency_hz[0][1] - 1, one.q[-1][1] / one.q[0][1] - 1)
        for one in source.resonator
    ]
    assert sorted(moved) == [(pytest.approx(-15 / 415), 0.0), (0.0, pytest.approx(-70 / 110)), (0.0, 0.0)]
    corners = [seconds for one in source.resonator for seconds, _ in (*one.frequency_hz, *one.q) if seconds]
    assert min(corners) == 15.0
    assert max(corners) <= 40.0
    assert len(config.mode) == 3


def test_only_the_demos_two_moving_modes_leave_their_bands() -> None:
    config = load(FOLDER / "demo.toml")
    (source,) = config.source
    assert isinstance(source, SimulatedSourceConfig)
    outside = []
    for mode in config.mode:
        (band,) = mode.band
        (truth,) = [
            one for one in source.resonator if mode.search_hz.low < one.frequency_hz[0][1] < mode.search_hz.high
        ]
        course = truth.frequency_hz if band.quantity == "frequency" else truth.q
        low, high = band.low or 0.0, band.high or float("inf")
        assert low < course[0][1] < high
        if not low < course[-1][1] < high:
            outside.append((mode.name, band.name))
    assert outside == [("housing rocking", "bolts"), ("cover plate", "seal")]
