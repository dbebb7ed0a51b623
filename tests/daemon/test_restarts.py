"""A process that died is started again soon, later if it dies often, and one that dies for ever is told to."""

from __future__ import annotations

import pytest
from driftwatch.daemon.restarts import LOOPS, WITHIN_S, Restarts
from hypothesis import given
from hypothesis import strategies as st


def test_each_death_doubles_the_wait_up_to_two_seconds() -> None:
    restarts = Restarts()
    waits = [restarts.died(float(now)) for now in range(9)]
    assert waits == pytest.approx([0.1, 0.2, 0.4, 0.8, 1.6, 2.0, 2.0, 2.0, 2.0])


def test_a_process_that_lived_a_minute_is_started_at_once_again() -> None:
    restarts = Restarts()
    for now in range(20):
        restarts.died(float(now))
    assert restarts.died(19.0 + WITHIN_S) == pytest.approx(0.1)


def test_five_deaths_in_a_minute_are_a_loop_and_four_are_none() -> None:
    restarts = Restarts()
    for death in range(4):
        restarts.died(death * 10.0)
        assert not restarts.is_looping(death * 10.0)
    restarts.died(40.0)
    assert restarts.is_looping(40.0)
    assert restarts.is_looping(59.0)
    assert not restarts.is_looping(60.0)  # the first of the five is a minute ago


def test_five_deaths_over_a_longer_time_are_no_loop() -> None:
    restarts = Restarts()
    for death in range(50):
        restarts.died(death * 16.0)
        assert not restarts.is_looping(death * 16.0)


def test_deaths_are_counted_as_far_as_they_matter() -> None:
    restarts = Restarts()
    counts = []
    for death in range(7):
        restarts.died(float(death))
        counts.append(restarts.deaths)
    assert counts == [1, 2, 3, 4, 5, 5, 5]
    assert LOOPS == 5


@given(st.lists(st.floats(0.0, 100.0), min_size=1, max_size=40))
def test_however_it_dies_samples_can_flow_within_five_seconds(lives: list[float]) -> None:
    """The wait is never over 2 s, which leaves three for the start, and never under 0.1 s, which would be a storm."""
    restarts, now = Restarts(), 0.0
    for life in lives:
        now += life
        wait = restarts.died(now)
        assert 0.1 <= wait <= 2.0
        now += wait
