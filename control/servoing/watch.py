"""What the loop must not overlook: stale frames, a silent board, a part that is lost or out of the cage, a goal without hope."""

from __future__ import annotations

import math

import numpy as np

from control.servoing.controller import Controller
from control.servoing.memory import Memory
from control.servoing.report import Inputs
from control.servoing.states import PULSES_ON, State


def faults(controller: Controller, memory: Memory, inputs: Inputs) -> tuple[str, ...]:
    """Reasons to latch `faulted` now; each says what was seen, the limit, and what to do."""
    if memory.state not in PULSES_ON:
        return ()
    found = [reason for reason in (_stale(controller, memory), _lost(controller, memory), _left(controller, memory)) if reason]
    board, limits = inputs.board, controller.limits
    if memory.now_us - memory.armed_at_us < limits.wake_ms * 1e3:
        board = None  # it may still speak of the time before it was armed
    if board is not None and board.silent_ms > limits.silent_ms:
        found.append(
            f"the servo board has been silent for {board.silent_ms:.0f} ms, allowed {limits.silent_ms:.0f}: check its cable and supply"
        )
    elif board is not None and board.latched:
        found.append("the servo board's watchdog has tripped and its pulses are off: reset, then arm again")
    return tuple(found)


def _stale(controller: Controller, memory: Memory) -> str:
    if memory.sight is None:
        return ""
    age_ms, limit_ms = (memory.now_us - memory.sight.frame_at_us) * 1e-3, controller.limits.stale_ms
    if age_ms <= limit_ms:
        return ""
    return f"the newest camera frame is {age_ms:.0f} ms old, allowed {limit_ms:.0f}: check the camera and its cable"


def _lost(controller: Controller, memory: Memory) -> str:
    sight = memory.sight
    if memory.state is not State.SERVOING or sight is None or sight.lost_since_us is None:
        return ""
    lost_s = (memory.now_us - sight.lost_since_us) * 1e-6
    if lost_s <= controller.limits.lost_s:
        return ""
    return f"the camera has not seen the part for {lost_s:.1f} s, allowed {controller.limits.lost_s:g}: {sight.lost_why}"


def _left(controller: Controller, memory: Memory) -> str:
    """The part's centre beyond the fingers' bases is no longer in the hand."""
    if memory.sight is None:
        return ""
    distance = float(np.hypot(*memory.sight.measured[:2]))
    limit = float(np.linalg.norm(controller.hand.base_mm, axis=1).max())
    if distance <= limit:
        return ""
    return f"the part is {distance:.0f} mm from the palm centre, beyond the fingers' bases at {limit:.0f}: put it back by hand"


def hopeless(controller: Controller, memory: Memory) -> str:
    """Why the goal under way is given up; empty while there is hope."""
    task = memory.task
    if task is None:
        return ""
    elapsed_s = (memory.now_us - task.started_us) * 1e-6
    if elapsed_s > task.goal.timeout_s:
        return f"goal {task.goal.id} took longer than its {task.goal.timeout_s:g} s; {memory.why}"
    turns = abs(task.target[2] - (memory.sight.measured[2] if memory.sight is not None else 0.0)) / (2.0 * math.pi)
    allowed = controller.limits.max_regrasps_per_turn * (1.0 + (0.0 if math.isnan(turns) else turns))
    if task.n_regrasps > allowed + 24:
        return f"goal {task.goal.id}: no progress after {task.n_regrasps} grasps"
    return ""
