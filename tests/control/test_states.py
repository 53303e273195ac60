"""The transition table: what must hold for any event in any state."""

import pytest

from control.servoing.states import PULSES_ON, TRANSITIONS, Event, State, after, diagram
from hw_profiles.errors import CommandError


@pytest.mark.parametrize("state", list(State))
def test_stop_and_fault_work_in_every_state_and_end_without_pulses(state: State) -> None:
    for event in (Event.STOP, Event.FAULT):
        assert after(state, event) not in PULSES_ON


@pytest.mark.parametrize("state", list(State))
def test_reset_never_starts_motion(state: State) -> None:
    if (state, Event.RESET) in TRANSITIONS:
        assert after(state, Event.RESET) is State.DISARMED


@pytest.mark.parametrize("state", [State.STOPPED, State.FAULTED])
def test_latched_states_are_left_only_by_reset(state: State) -> None:
    ways_out = {event for (a, event), b in TRANSITIONS.items() if a is state and b not in (State.STOPPED, State.FAULTED)}
    assert ways_out == {Event.RESET}


def test_pulses_come_on_only_by_arming() -> None:
    switched_on = {event for (a, event), b in TRANSITIONS.items() if a not in PULSES_ON and b in PULSES_ON}
    assert switched_on == {Event.ARM}


def test_impossible_event_is_refused_with_what_is_allowed() -> None:
    with pytest.raises(CommandError, match=r"begin is not possible while disarmed; allowed: arm, disarm, stop, fault"):
        after(State.DISARMED, Event.BEGIN)


def test_diagram_draws_every_transition() -> None:
    assert diagram().count("-->") == len(TRANSITIONS) + 1
