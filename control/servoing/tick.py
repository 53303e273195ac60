"""One tick of the control loop: what was seen and asked in, pulses and a report out. Pure."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace

import numpy as np

from control.grasping.transfer import Path
from control.model.caging import RingCertificate
from control.servoing import motion, watch
from control.servoing.carry import Carry
from control.servoing.controller import Controller
from control.servoing.goals import (
    Arm,
    Blend,
    Cancel,
    Disarm,
    Ending,
    Goal,
    GoTo,
    Kind,
    Nudge,
    Outcome,
    Request,
    Reset,
    Stop,
)
from control.servoing.memory import Follow, Memory, Still, Task, seen, unseen
from control.servoing.report import Command, Inputs, Report
from control.servoing.states import PULSES_ON, Event, State, after
from hw_profiles.errors import CommandError
from hw_profiles.geometry import Array, Pose2
from hw_profiles.observation import NoPose


@dataclass
class Notes:
    """What happened within one tick, for its report."""

    outcomes: list[Outcome] = field(default_factory=list)
    refusals: list[str] = field(default_factory=list)


def tick(controller: Controller, memory: Memory, inputs: Inputs) -> tuple[Memory, Command, Report]:
    """Advance the loop by one tick.

    Parameters
    ----------
    memory : what the last tick returned; `Memory()` for the first.
    inputs : time, newest observation, requests, board health.

    Returns
    -------
    memory for the next tick, the command for the board, and the report.

    Raises nothing: requests that are not possible are refused in the report, faults latch the state `faulted`.
    """
    notes = Notes()
    elapsed_s = min(max((inputs.now_us - memory.now_us) * 1e-6, 1e-3), 0.1)
    memory = _look(replace(memory, now_us=inputs.now_us), inputs)
    for request in inputs.requests:
        memory = _answer(controller, memory, request, notes)
    memory = _watch(controller, memory, inputs, notes)
    if memory.state in PULSES_ON:
        memory = motion.advance(controller, memory, inputs.observation, elapsed_s)
        memory = _judge(controller, memory, inputs, notes)
    return memory, _command(controller, memory, inputs), _report(controller, memory, notes)


def _look(memory: Memory, inputs: Inputs) -> Memory:
    """Take in the newest frame."""
    observation = inputs.observation
    if observation is None:
        return memory
    if isinstance(observation.sight, NoPose):
        if memory.sight is None:
            return memory
        return replace(memory, sight=unseen(memory.sight, observation.captured_at_us, observation.sight.reason))
    return replace(memory, sight=seen(memory.sight, observation.sight, observation.captured_at_us))


def _answer(controller: Controller, memory: Memory, request: Request, notes: Notes) -> Memory:
    """Carry out a request, or refuse it and change nothing."""
    try:
        match request:
            case Arm():
                return _arm(controller, memory)
            case Disarm():
                memory = _end(memory, Ending.CANCELLED, "disarmed", notes)
                return _relaxed(replace(memory, state=after(memory.state, Event.DISARM), why="disarmed"))
            case Stop(reason):
                state = after(memory.state, Event.STOP)
                memory = _end(memory, Ending.CANCELLED, reason, notes)
                return _relaxed(replace(memory, state=state, why=reason))
            case Reset():
                return replace(memory, state=after(memory.state, Event.RESET), why="reset; arm to go on", faults=())
            case GoTo(goal):
                return _begin(controller, memory, goal, notes)
            case Cancel():
                state = after(memory.state, Event.END)
                memory = _end(memory, Ending.CANCELLED, "cancelled by request", notes)
                return replace(memory, state=state, why="goal cancelled", motion=motion.halted(memory.motion))
            case Nudge():
                return _begin(controller, memory, _nudged(memory, request), notes)
            case Blend(weights):
                return motion.blend_by_hand(controller, memory, weights)
    except CommandError as error:
        notes.refusals.append(str(error))
    return memory


def _arm(controller: Controller, memory: Memory) -> Memory:
    state = after(memory.state, Event.ARM)
    start = controller.library.park if memory.joints is None else memory.joints
    moving: Follow | Still = Still()
    if memory.joints is not None:
        joints = np.stack([start, controller.library.park])
        duration_s = float((np.abs(joints[1] - joints[0]) / (0.25 * controller.hand.speed)).max())
        if duration_s > 0.0:
            moving = Follow(Path(np.array([0.0, duration_s]), joints, -math.inf), memory.now_us, None)
    why = "armed; the fingers form the loose cage"
    return replace(memory, state=state, why=why, joints=start, motion=moving, armed_at_us=memory.now_us)


def _begin(controller: Controller, memory: Memory, goal: Goal, notes: Notes) -> Memory:
    state = after(memory.state, Event.BEGIN)
    if memory.sight is None:
        raise CommandError(f"goal {goal.id}: the camera has not seen the part yet; allowed: once a frame shows it")
    task = resolve(goal, memory.sight.predicted(memory.now_us), memory.now_us)
    unreachable = _unreachable(controller, task)
    if unreachable is not None:  # what is under way goes on
        notes.outcomes.append(unreachable)
        return memory
    if controller.library.roadmap is not None and (not controller.library.is_round or goal.kind is Kind.POSITION):
        task = replace(task, remaining=controller.library.roadmap.remaining(task.guide))
    memory = _end(memory, Ending.CANCELLED, f"replaced by goal {goal.id}", notes)
    return replace(memory, state=state, why=f"working on goal {goal.id}", task=task, motion=motion.woken(memory.motion))


def resolve(goal: Goal, part: Array, now_us: int) -> Task:
    """The task that a goal is, for a part at `part` (3,), yaw unwrapped: shortest way round unless a turn is asked."""
    x_mm, y_mm, yaw = goal.pose.as_array()
    if goal.kind is Kind.TURN:
        target = np.array([part[0], part[1], part[2] + yaw])
        return Task(goal, now_us, np.array([np.nan, np.nan, target[2]]), target)
    near_yaw = part[2] + math.remainder(yaw - part[2], 2.0 * math.pi)
    target = {
        Kind.POSITION: np.array([x_mm, y_mm, np.nan]),
        Kind.ANGLE: np.array([np.nan, np.nan, near_yaw]),
        Kind.POSE: np.array([x_mm, y_mm, near_yaw]),
    }[goal.kind]
    guide = np.where(np.isnan(target), [part[0], part[1], np.nan], target)
    return Task(goal, now_us, target, guide)


def _unreachable(controller: Controller, task: Task) -> Outcome | None:
    library, goal = controller.library, task.goal
    wanted = Pose2(float(task.guide[0]), float(task.guide[1]), goal.pose.yaw_rad)
    if goal.kind is Kind.POSITION or goal.kind is Kind.TURN:
        held = library.can_hold_at(wanted.x_mm, wanted.y_mm)
    else:
        held = library.can_hold(wanted)
    if held:
        return None
    nearest = library.nearest(wanted, angle_matters=goal.kind in (Kind.ANGLE, Kind.POSE))
    where = f"x {wanted.x_mm:.1f} mm, y {wanted.y_mm:.1f} mm"
    if goal.kind in (Kind.ANGLE, Kind.POSE):
        where += f", {math.degrees(wanted.yaw_rad):.1f} deg"
    advice = "no pose can be held with a certified cage"
    if nearest is not None:
        advice = f"nearest that can: x {nearest.x_mm:.1f} mm, y {nearest.y_mm:.1f} mm, {math.degrees(nearest.yaw_rad):.1f} deg"
    part, hand = controller.rig.part.name, controller.rig.hand.name
    reason = f"goal {goal.id}: no grasp of {hand} holds {part} at {where}; {advice}"
    return Outcome(goal.id, Ending.UNREACHABLE, reason, nearest=nearest)


def _nudged(memory: Memory, nudge: Nudge) -> Goal:
    if memory.sight is None:
        raise CommandError("nudge: the camera has not seen the part yet; allowed: once a frame shows it")
    start = memory.sight.predicted(memory.now_us)
    if memory.task is not None:
        start = np.where(np.isnan(memory.task.guide), start, memory.task.guide)
    x_mm, y_mm, yaw = start + np.array([nudge.dx_mm, nudge.dy_mm, nudge.dyaw_rad])
    pose = Pose2(float(x_mm), float(y_mm), math.remainder(float(yaw), 2.0 * math.pi))
    return Goal(f"nudge-{memory.now_us}", Kind.POSE, pose, timeout_s=60.0)


def _watch(controller: Controller, memory: Memory, inputs: Inputs, notes: Notes) -> Memory:
    faults = watch.faults(controller, memory, inputs)
    if not faults:
        return memory
    memory = _end(memory, Ending.FAULTED, "; ".join(faults), notes)
    return _relaxed(replace(memory, state=after(memory.state, Event.FAULT), why=faults[0], faults=faults))


def _judge(controller: Controller, memory: Memory, inputs: Inputs, notes: Notes) -> Memory:
    """Is the goal reached, out of time, or beyond hope?"""
    task, sight = memory.task, memory.sight
    if task is None or sight is None or memory.state is not State.SERVOING:
        return memory
    if sight.captured_at_us <= task.started_us and inputs.now_us - task.started_us < task.goal.timeout_s * 1e6:
        return memory
    error_mm, error_rad = task.error(sight.measured)
    is_met = task.is_met(sight.measured) and sight.lost_since_us is None and isinstance(memory.motion, Carry)
    since = (task.within_since_us if task.within_since_us is not None else inputs.now_us) if is_met else None
    memory = replace(memory, task=replace(task, within_since_us=since))
    if since is not None and inputs.now_us - since >= task.goal.hold_s * 1e6:
        notes.outcomes.append(Outcome(task.goal.id, Ending.REACHED, "held within tolerance", error_mm, error_rad))
        return replace(memory, state=after(memory.state, Event.REACHED), why=f"holding goal {task.goal.id}")
    hopeless = watch.hopeless(controller, memory)
    if hopeless:
        notes.outcomes.append(Outcome(task.goal.id, Ending.TIMED_OUT, hopeless, error_mm, error_rad))
        state = after(memory.state, Event.END)
        return replace(memory, state=state, why=hopeless, task=None, motion=motion.halted(memory.motion))
    return memory


def _end(memory: Memory, ending: Ending, reason: str, notes: Notes) -> Memory:
    """End the goal under way, if any; one that is held has been reported already."""
    if memory.task is not None and memory.state is State.SERVOING:
        error_mm, error_rad = (math.nan, math.nan) if memory.sight is None else memory.task.error(memory.sight.measured)
        notes.outcomes.append(Outcome(memory.task.goal.id, ending, reason, error_mm, error_rad))
    return replace(memory, task=None)


def _relaxed(memory: Memory) -> Memory:
    return replace(memory, motion=Still(), weights=())


def _command(controller: Controller, memory: Memory, inputs: Inputs) -> Command:
    if memory.state not in PULSES_ON or memory.joints is None:
        return Command(None)
    rearm = any(isinstance(request, Arm) for request in inputs.requests)
    return Command(controller.pulses.pulses_us(memory.joints), rearm)


def certificate(controller: Controller, memory: Memory) -> RingCertificate | None:
    """Cage certificate of the commanded posture about the part where it is expected now; None while unseen or without pulses."""
    if memory.sight is None or memory.joints is None or memory.state not in PULSES_ON:
        return None
    return controller.library.bench.ring.certify(memory.joints, memory.sight.predicted(memory.now_us))


def _report(controller: Controller, memory: Memory, notes: Notes) -> Report:
    sight, task = memory.sight, memory.task
    error_mm, error_rad = (math.nan, math.nan) if sight is None or task is None else task.error(sight.predicted(memory.now_us))
    is_seen = sight is not None and sight.lost_since_us is None
    return Report(
        state=memory.state,
        phase=motion.phase(memory.motion),
        why=memory.why,
        pose=sight.pose(memory.now_us) if sight is not None and is_seen else None,
        measured=Pose2.from_array(sight.measured) if sight is not None and is_seen else None,
        age_ms=math.nan if sight is None else (memory.now_us - sight.frame_at_us) * 1e-3,
        goal=None if task is None else task.goal,
        error_mm=error_mm,
        error_rad=error_rad,
        weights=memory.weights,
        joints=memory.joints if memory.state in PULSES_ON else None,
        cage=certificate(controller, memory),
        outcomes=tuple(notes.outcomes),
        refusals=tuple(notes.refusals),
        faults=memory.faults,
    )
