"""States of the control loop and the one table of what leads from which to which."""

from __future__ import annotations

from enum import StrEnum

from hw_profiles.errors import CommandError


class State(StrEnum):
    """What the loop is doing."""

    DISARMED = "disarmed"  # no pulses
    READY = "ready"  # pulses on, targets held
    SERVOING = "servoing"  # working on a goal
    HOLDING = "holding"  # goal reached, still correcting
    STOPPED = "stopped"  # latched by request, no pulses
    FAULTED = "faulted"  # latched with reasons, no pulses


class Event(StrEnum):
    """What can happen to the loop."""

    ARM = "arm"
    DISARM = "disarm"
    BEGIN = "begin"  # a goal is accepted
    REACHED = "reached"
    END = "end"  # the goal is over without being held: cancelled, timed out, given up
    STOP = "stop"
    FAULT = "fault"
    RESET = "reset"


TRANSITIONS: dict[tuple[State, Event], State] = {
    (State.DISARMED, Event.ARM): State.READY,
    (State.DISARMED, Event.DISARM): State.DISARMED,
    (State.READY, Event.BEGIN): State.SERVOING,
    (State.READY, Event.DISARM): State.DISARMED,
    (State.SERVOING, Event.BEGIN): State.SERVOING,
    (State.SERVOING, Event.REACHED): State.HOLDING,
    (State.SERVOING, Event.END): State.READY,
    (State.SERVOING, Event.DISARM): State.DISARMED,
    (State.HOLDING, Event.BEGIN): State.SERVOING,
    (State.HOLDING, Event.END): State.READY,
    (State.HOLDING, Event.DISARM): State.DISARMED,
    **{(state, Event.STOP): State.STOPPED for state in State if state is not State.FAULTED},
    (State.FAULTED, Event.STOP): State.FAULTED,  # already without pulses; its reasons are kept
    **{(state, Event.FAULT): State.FAULTED for state in State},
    (State.STOPPED, Event.RESET): State.DISARMED,
    (State.FAULTED, Event.RESET): State.DISARMED,
}

PULSES_ON = frozenset({State.READY, State.SERVOING, State.HOLDING})


def after(state: State, event: Event) -> State:
    """The state that an event leads to.

    Raises
    ------
    CommandError
        If the event is not allowed in this state; nothing has changed then.
    """
    target = TRANSITIONS.get((state, event))
    if target is None:
        allowed = ", ".join(e for e in Event if (state, e) in TRANSITIONS)
        raise CommandError(f"{event} is not possible while {state}; allowed: {allowed}")
    return target


def diagram() -> str:
    """The table as a Mermaid state diagram, for the docs."""
    lines = [f"    {a} --> {b}: {event}" for (a, event), b in TRANSITIONS.items()]
    return "\n".join(["stateDiagram-v2", "    [*] --> disarmed", *lines, ""])
