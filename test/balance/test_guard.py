"""The guard runs on its table: what leads from one state to the next, and what share of the torque each may send."""

from __future__ import annotations

import itertools

import pytest

from ballbal_ros.balance.guard import (
    BALANCING,
    ENGAGING,
    EVENTS,
    HELD,
    READY,
    RELEASED,
    RESET,
    STANDBY,
    STATES,
    STOP,
    STOPPING,
    TRANSITIONS,
    TRIP,
    TRIPPED,
    UNCONFIGURED,
    Guard,
)
from helpers.balancing import balance

PERIOD = 0.002


@pytest.mark.parametrize(("state", "event"), list(itertools.product(STATES, EVENTS)))
def test_every_event_in_every_state_does_what_the_table_says(state: str, event: str):
    """An entry is followed, and an event without one changes neither state nor reason."""
    guard = Guard(balance(), state)
    before = guard.reason
    happened = guard.fire(event, "because")
    wanted = TRANSITIONS.get((state, event))
    assert happened is (wanted is not None)
    assert (guard.state, guard.reason) == ((wanted, "because") if wanted else (state, before))


@pytest.mark.parametrize("state", STATES)
def test_no_state_sends_more_than_its_share(state: str):
    """Whatever is missing or held, the share that comes back is within that of the state."""
    for missing, held in itertools.product(("", "something"), (True, False)):
        guard = Guard(balance(), state)
        for tick in range(400):
            before = guard.state
            share = guard.update(tick * PERIOD, missing, held)
            least, most = STATES[before].share
            assert 0.0 <= share <= most
            # What balances was let in by way of engaging; made to stand there, it ramps all the same.
            assert share >= least or tick * PERIOD <= balance().ramp_time + PERIOD or not STATES[guard.state].sends


def test_torque_goes_off_for_good_only_to_states_that_a_person_must_reset():
    """From released and tripped only a reset (or taking the loop down) leads on: latched, as ISO 13850 has it."""
    for state in (RELEASED, TRIPPED):
        assert {event for origin, event in TRANSITIONS if origin == state} == {RESET, "clean_up"}


def test_nothing_that_sends_torque_ignores_a_stop_or_a_trip():
    """Every state that sends torque can be stopped (or is stopping), and tripped."""
    for name, state in STATES.items():
        if state.sends:
            assert (name, TRIP) in TRANSITIONS
            assert name == STOPPING or TRANSITIONS[name, STOP] == STOPPING
    assert not STATES[UNCONFIGURED].sends


def test_engaging_takes_all_conditions_for_a_while_and_ramps_without_a_step():
    """One tick with something missing begins the wait anew; the torque comes in by equal parts."""
    guard, limits = Guard(balance()), balance().limits
    ticks = round(limits.engage_time / PERIOD)
    for tick in range(ticks):
        guard.update(tick * PERIOD, "", True)
    guard.update(ticks * PERIOD, "no IMU data", True)
    assert (guard.state, guard.reason) == (STANDBY, "no IMU data")
    shares, now = [], ticks
    while guard.state != BALANCING:
        now += 1
        shares.append(guard.update(now * PERIOD, "", True))
        assert now < 1000
    steps = [after - before for before, after in itertools.pairwise(shares)]
    assert max(steps) <= PERIOD / balance().ramp_time + 1e-9 and min(steps) >= 0.0


def test_a_stop_while_it_engages_makes_no_step_either():
    """The share that had come in goes on rising as before; it does not jump to the whole."""
    guard = Guard(balance(), ENGAGING)
    shares = [guard.update(tick * PERIOD, "", False) for tick in range(30)]
    assert guard.stop("emergency stop") and guard.state == STOPPING
    after = guard.update(30 * PERIOD, "", False)
    assert 0.0 < after - shares[-1] <= PERIOD / balance().ramp_time + 1e-9


def test_a_controlled_stop_lets_go_once_held_and_goes_on_when_reset():
    """Held: torque off and latched. Reset while it still balances: on, with the torque that it has."""
    guard = Guard(balance(), BALANCING)
    for tick in range(200):
        guard.update(tick * PERIOD, "", False)
    guard.stop("emergency stop")
    assert guard.update(0.4, "", False) == 1.0
    assert guard.reset() and guard.update(0.402, "", False) == 1.0 and guard.state == BALANCING
    guard.stop("emergency stop")
    assert guard.update(0.404, "", True) == 0.0 and guard.state == RELEASED
    assert guard.reset() and guard.state == STANDBY


def test_the_page_names_every_event_and_state():
    """Each has a meaning, and every state can be reached."""
    assert all(EVENTS.values()) and all(state.meaning for state in STATES.values())
    assert {*TRANSITIONS.values()} == {*STATES}
    assert {READY, HELD} <= {event for _, event in TRANSITIONS}
