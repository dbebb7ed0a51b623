"""The life of an alert by stream time: delays at their exact edges, held timers, and no transition without cause."""

from itertools import pairwise

import pytest
from driftwatch.alert.machine import (
    ROWS,
    UNKNOWN,
    Delays,
    Event,
    Finding,
    Life,
    Timer,
    acknowledge,
    after,
    step,
)
from driftwatch.records import NS, AlertState
from hypothesis import given
from hypothesis import strategies as st

NORMAL, ACTIVE, RETURNED = (
    AlertState.NORMAL,
    AlertState.UNACKNOWLEDGED,
    AlertState.RETURNED_UNACKNOWLEDGED,
)
DELAYS = Delays(on_ns=10 * NS, off_ns=30 * NS)
V, R, N, X = Finding.VIOLATED, Finding.RETURNED, Finding.NEITHER, Finding.CANNOT_TELL


def live(findings, delays=DELAYS, life=UNKNOWN):
    """Return (time, life, event) after each (time in s, finding)."""
    out = []
    for seconds, finding in findings:
        life, event = step(life, finding, round(seconds * NS), delays)
        out.append((seconds, life, event))
    return out


def events(findings, delays=DELAYS):
    return [(seconds, event) for seconds, _, event in live(findings, delays) if event is not None]


def test_the_table_says_where_each_event_leads():
    assert after(NORMAL, Event.VIOLATED) is ACTIVE
    assert after(ACTIVE, Event.RETURNED) is RETURNED
    assert after(RETURNED, Event.VIOLATED) is ACTIVE


@pytest.mark.parametrize("state", list(AlertState))
@pytest.mark.parametrize("event", list(Event))
def test_an_event_that_means_nothing_in_a_state_changes_nothing(state, event):
    if (state, event) not in ROWS:
        assert after(state, event) is state


def test_it_fires_at_the_first_judgement_at_which_the_delay_has_passed():
    assert events([(t, V) for t in range(20)]) == [(10, Event.VIOLATED)]
    assert events([(t * 0.7, V) for t in range(20)]) == [(15 * 0.7, Event.VIOLATED)]


def test_a_nanosecond_short_of_the_delay_it_does_not_fire():
    life, _ = step(UNKNOWN, V, 0, DELAYS)
    life, event = step(life, V, 10 * NS - 1, DELAYS)
    assert event is None
    assert step(life, V, 10 * NS, DELAYS)[1] is Event.VIOLATED


def test_without_a_delay_one_judgement_suffices():
    assert events([(5, V), (6, R), (7, V)], Delays(0, 0)) == [
        (5, Event.VIOLATED),
        (6, Event.RETURNED),
        (7, Event.VIOLATED),
    ]


@pytest.mark.parametrize("between", [R, N])
def test_any_judgement_that_is_no_violation_begins_the_delay_anew(between):
    assert events([(0, V), (9, V), (9.5, between), (10, V), (19, V)]) == []
    assert events([(0, V), (9, V), (9.5, between), (10, V), (20, V)]) == [(20, Event.VIOLATED)]


@pytest.mark.parametrize("between", [V, N])
def test_any_judgement_that_is_no_return_begins_the_off_delay_anew(between):
    fired = [(0, V), (10, V)]
    assert events([*fired, (11, R), (40.9, R)])[1:] == []
    assert events([*fired, (11, R), (41, R)])[1:] == [(41, Event.RETURNED)]
    assert events([*fired, (11, R), (40, between), (41, R), (70, R)])[1:] == []
    assert events([*fired, (11, R), (40, between), (41, R), (71, R)])[1:] == [(71, Event.RETURNED)]


def test_timers_hold_while_nobody_can_tell():
    """6 s of violation, 1000 s of not knowing, 4 s of violation: it fires, for 10 s were seen; 3.9 s would not do."""
    unknown = [(7, X), (500, X), (1006, X)]
    assert events([(0, V), (6, V), *unknown, (1007, V), (1010.9, V)]) == []
    assert events([(0, V), (6, V), *unknown, (1007, V), (1011, V)]) == [(1011, Event.VIOLATED)]


def test_the_off_timer_holds_as_well():
    fired = [(0, V), (10, V)]
    assert events([*fired, (20, R), (40, R), (41, X), (1000, R), (1009, R)])[1:] == []
    assert events([*fired, (20, R), (40, R), (41, X), (1000, R), (1010, R)])[1:] == [(1010, Event.RETURNED)]


def test_a_held_violation_that_is_found_gone_begins_anew():
    assert events([(0, V), (9, V), (10, X), (20, R), (21, V), (30, V)]) == []


def test_determinate_follows_what_can_be_told():
    told = [life.determinate for _, life, _ in live([(0, X), (1, V), (2, N), (3, X), (4, R)])]
    assert told == [False, True, True, False, True]


def test_what_changes_nothing_returns_the_same_life():
    life, _ = step(UNKNOWN, R, 0, DELAYS)
    assert step(life, R, NS, DELAYS)[0] is life
    assert step(life, N, NS, DELAYS)[0] is life


def test_an_acknowledged_alert_returns_to_normal_and_fires_anew():
    """The walk of IEC 62682 / ISA-18.2: unacknowledged, acknowledged, normal; or returned first, then acknowledged."""
    fired = live([(0, V), (10, V)])[-1][1]
    acknowledged = acknowledge(fired)
    assert acknowledged.state is AlertState.ACKNOWLEDGED
    walk = live([(11, V), (50, V), (51, R), (81, R), (82, V), (92, V)], life=acknowledged)
    assert [(seconds, event) for seconds, _, event in walk if event] == [(81, Event.RETURNED), (92, Event.VIOLATED)]
    assert [life.state for _, life, event in walk if event] == [NORMAL, ACTIVE]
    returned = live([(0, V), (10, V), (11, R), (41, R)])[-1][1]
    assert acknowledge(returned).state is NORMAL


def test_to_acknowledge_judges_nothing():
    """Timers go on, what cannot be told stays so, and where nothing stands nothing changes."""
    fired = live([(0, V), (10, V), (20, R), (40, R)])[-1][1]
    life = acknowledge(fired)
    assert (life.on, life.off, life.determinate) == (fired.on, fired.off, fired.determinate)
    assert step(life, R, 50 * NS, DELAYS)[1] is Event.RETURNED
    for state in (NORMAL, AlertState.ACKNOWLEDGED, AlertState.SHELVED):
        assert acknowledge(Life(state)) == Life(state)
    blind = Life(ACTIVE, determinate=False)
    assert acknowledge(blind) == Life(AlertState.ACKNOWLEDGED, determinate=False)


def test_stream_time_that_repeats_or_goes_back_counts_nothing():
    timer = Timer().advance(10).advance(10).advance(5)
    assert timer == Timer(0, 10)
    assert timer.advance(12).elapsed_ns == 2


WALKS = st.lists(st.tuples(st.integers(0, 20 * NS), st.sampled_from(list(Finding))), min_size=1, max_size=80)
DELAY = st.integers(0, 40 * NS)


@given(WALKS, DELAY, DELAY)
def test_no_transition_without_its_cause(walk, on_ns, off_ns):
    """Whatever comes: a move up needs a violation now and violations judged for the on delay since the last judgement
    that said otherwise; a move back the same of returns; and what cannot be told moves nothing."""
    delays, life, now_ns, seen = Delays(on_ns, off_ns), UNKNOWN, 0, []
    for wait_ns, finding in walk:
        now_ns += wait_ns
        seen.append((now_ns, finding))
        before, (life, event) = life, step(life, finding, now_ns, delays)
        assert life.determinate is (finding is not X)
        assert (event is None) == (life.state is before.state)
        if event is not None:
            wanted = V if event is Event.VIOLATED else R
            assert finding is wanted
            assert judged_ns(seen, wanted) >= (on_ns if wanted is V else off_ns)


def judged_ns(seen, wanted):
    """Return for how long the wanted finding was judged at both ends of an interval, back to one that contradicts."""
    total = 0
    for (t0, before), (t1, after_) in reversed(list(pairwise(seen))):
        if after_ not in (wanted, X):
            break
        if before is wanted and after_ is wanted:
            total += t1 - t0
    return total


@given(WALKS, DELAY)
def test_a_violation_and_a_return_are_treated_alike(walk, delay_ns):
    """Mirrored findings from the mirrored state give the mirrored states at the same times."""
    mirrored = {V: R, R: V, N: N, X: X}
    mirror_state = {RETURNED: ACTIVE, ACTIVE: RETURNED}
    delays = Delays(delay_ns, delay_ns)
    one, other, now_ns = Life(ACTIVE), Life(RETURNED), 0
    for wait_ns, finding in walk:
        now_ns += wait_ns
        one, _ = step(one, finding, now_ns, delays)
        other, _ = step(other, mirrored[finding], now_ns, delays)
        assert other.state is mirror_state[one.state]
        assert (other.on, other.off, other.determinate) == (one.off, one.on, one.determinate)


@given(WALKS)
def test_once_it_has_left_normal_nothing_but_an_acknowledgement_could_bring_it_back(walk):
    now_ns, life = 0, UNKNOWN
    left = False
    for wait_ns, finding in walk:
        now_ns += wait_ns
        life, _ = step(life, finding, now_ns, Delays(NS, NS))
        left = left or life.state is not NORMAL
        assert (life.state is not NORMAL) == left
