"""What the fingers do next: hold still, look for a grasp, follow a path, carry."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from control.grasping.library import Option
from control.grasping.transfer import WAYS, retreat, transfer
from control.servoing import course
from control.servoing.blend import blend_weights
from control.servoing.carry import Carry, slewed
from control.servoing.controller import Controller
from control.servoing.memory import Follow, Memory, Motion, Seek, Sight, Still, Task
from hw_profiles.errors import CommandError
from hw_profiles.geometry import Array, Pose2
from hw_profiles.observation import NoPose, Observation

ARRIVED = np.array([0.5, 0.5, math.radians(0.5)])  # a stroke has ended when the ring is this near to where it was sent


def phase(motion: Motion) -> str:
    """What the fingers do, in a word."""
    return {Still: "still", Seek: "seek", Follow: "move", Carry: "carry"}[type(motion)]


def halted(motion: Motion) -> Motion:
    """Motion after its goal has ended: a grasp keeps hold, a path stops where it is."""
    return motion if isinstance(motion, Carry) else Still()


def woken(motion: Motion) -> Motion:
    """Motion when a new goal begins: fingers on their way into a grasp go on."""
    return Still() if isinstance(motion, Seek) else motion


def advance(controller: Controller, memory: Memory, observation: Observation | None, elapsed_s: float) -> Memory:
    """Memory with the posture to command now."""
    sight = memory.sight
    match memory.motion:
        case Follow():
            return _follow(controller, memory, memory.motion)
        case Carry() as carry if sight is not None:
            fresh = observation is not None and not isinstance(observation.sight, NoPose)
            if fresh:
                carry = carry.learn(sight.measured, sight.captured_at_us, elapsed_s)
            return _carry(controller, memory, carry, sight, elapsed_s)
        case Seek() as seek if sight is not None and sight.lost_since_us is None:
            return _seek(controller, memory, seek, sight)
        case Still() if sight is not None and sight.lost_since_us is None and memory.task is not None:
            options = course.options_toward(controller.library, sight.measured, memory.task, None)
            return replace(memory, motion=Seek(options, None))
    return memory


def _seek(controller: Controller, memory: Memory, seek: Seek, sight: Sight) -> Memory:
    """Try the next way: one a tick, for it costs milliseconds."""
    if memory.task is None or memory.joints is None:
        return replace(memory, motion=halted(seek.held or seek))
    if seek.n_tried >= len(WAYS) * len(seek.options):
        return _nowhere(controller, memory, memory.task, seek, sight)
    option = seek.options[seek.n_tried // len(WAYS)]
    library = controller.library
    held = None if seek.held is None else (library.reaches[seek.held.reach_index].grasp, seek.held.ring)
    path = transfer(
        library.bench,
        memory.joints,
        held,
        (library.reaches[option.reach_index].grasp, option.ring),
        Pose2.from_array(sight.measured),
        controller.rig.motion.squeeze_mm,
        controller.speeds,
        WAYS[seek.n_tried % len(WAYS)],
    )
    if path is None:
        return replace(memory, motion=replace(seek, n_tried=seek.n_tried + 1))
    task = replace(memory.task, n_regrasps=memory.task.n_regrasps + 1)
    return replace(memory, motion=Follow(path, memory.now_us, option), task=task, weights=())


def _nowhere(controller: Controller, memory: Memory, task: Task, seek: Seek, sight: Sight) -> Memory:
    """No way into another grasp from here: carry the part on to where there may be one, or go back to the loose cage."""
    library = controller.library
    if seek.held is None or memory.joints is None:
        return replace(memory, motion=Still(), why="no clear way into a grasp from here; trying again")
    reach = library.reaches[seek.held.reach_index]
    if library.roadmap is not None:
        blocked = task.blocked | library.roadmap.cells_about(seek.held.reach_index, reach.cell(seek.held.ring))
        remaining = library.roadmap.remaining(task.guide, blocked)
        if remaining.at(seek.held.reach_index, reach.cell(seek.held.ring)) < math.inf:
            return replace(memory, motion=seek.held, task=replace(task, blocked=blocked, remaining=remaining))
    path = retreat(
        library.bench, memory.joints, (reach.grasp, seek.held.ring), library.park, Pose2.from_array(sight.measured), controller.speeds
    )
    motion: Motion = seek.held if path is None else Follow(path, memory.now_us, None)
    return replace(memory, motion=motion, weights=(), why="no clear way into another grasp from here; backing off to the loose cage")


def _follow(controller: Controller, memory: Memory, follow: Follow) -> Memory:
    elapsed_s = (memory.now_us - follow.started_us) * 1e-6
    joints = follow.path.at(elapsed_s)
    settle_s = controller.limits.settle_s if follow.option is not None else 0.0
    if elapsed_s < follow.path.duration_s + settle_s or memory.sight is None:
        return replace(memory, joints=joints)
    if follow.option is None:
        return replace(memory, joints=joints, motion=Still())
    return replace(memory, joints=joints, motion=_taken_up(follow.option, memory.sight, memory.now_us))


def _taken_up(option: Option, sight: Sight, now_us: int) -> Carry:
    return Carry.begin(option.reach_index, option.ring, sight.measured, now_us)


def _carry(controller: Controller, memory: Memory, carry: Carry, sight: Sight, elapsed_s: float) -> Memory:
    task = memory.task
    wanted: Array | None = carry.ring
    if task is not None and sight.lost_since_us is None:
        direct = course.direct_ring(controller.library, carry, task)
        carry = replace(carry, heading=None) if direct is not None else _headed(controller, carry, task)
        wanted = carry.heading if direct is None else direct
        if direct is None and wanted is not None and np.all(np.abs(wanted - carry.ring) < ARRIVED):
            return _regrasp(controller, memory, carry, sight, task)
    wanted = carry.ring if wanted is None else wanted
    ring = slewed(carry.ring, wanted, controller.tip_speed_mm_per_s, controller.turn_speed_rad_per_s, elapsed_s)
    posture = _blended(controller, memory, carry.reach_index, ring)
    return replace(posture, motion=carry.steer(ring, memory.now_us))


def _headed(controller: Controller, carry: Carry, task: Task) -> Carry:
    """With a heading: the one it has until it is there, then the next; a heading of here and now means that the stroke is over."""
    if carry.heading is not None and np.any(np.abs(carry.heading - carry.ring) >= ARRIVED):
        return carry
    return replace(carry, heading=course.waypoint(controller.library, carry, task))


def _regrasp(controller: Controller, memory: Memory, carry: Carry, sight: Sight, task: Task) -> Memory:
    """The stroke has ended short of the goal: wait until the part has followed, then look for a grasp that carries it on."""
    since_us = next((at for at, ring in carry.trail if np.all(np.abs(ring - carry.ring) < ARRIVED)), memory.now_us)
    if memory.now_us - since_us < controller.limits.settle_s * 1e6:
        return replace(memory, motion=carry.steer(carry.ring, memory.now_us))
    carry = replace(carry, heading=None)
    options = course.options_toward(controller.library, sight.measured, task, carry)
    return replace(memory, motion=Seek(options, carry))


def _blended(controller: Controller, memory: Memory, reach_index: int, ring: Array) -> Memory:
    """The blend of primitives that comes closest to the pressed grasp at a ring pose."""
    reach = controller.library.reaches[reach_index]
    near = controller.hand.home if memory.joints is None else memory.joints
    wanted, _ = reach.grasp.joints(controller.hand, controller.library.bench.shape, ring, -controller.rig.motion.squeeze_mm, near)
    primitives = controller.library.primitives(reach_index, reach.held_cell_near(ring))
    weights = blend_weights(primitives.joints, wanted, controller.joint_scale)
    used = tuple((primitives.names[k], float(weights[k])) for k in np.flatnonzero(weights > 1e-6))
    return replace(memory, joints=weights @ primitives.joints, weights=used)


def blend_by_hand(controller: Controller, memory: Memory, weights: tuple[tuple[str, float], ...]) -> Memory:
    """Command the blend that a person asks for, over the primitives of the present cell.

    Raises
    ------
    CommandError
        Nothing is grasped, a name is not one of the present primitives, or a weight is negative, not finite, or all are 0.
    """
    carry = memory.motion
    if not isinstance(carry, Carry) or (memory.task is not None and memory.joints is None):
        raise CommandError("blend: nothing is grasped; allowed: after a goal has closed the fingers on the part")
    reach = controller.library.reaches[carry.reach_index]
    primitives = controller.library.primitives(carry.reach_index, reach.held_cell_near(carry.ring))
    values = np.zeros(len(primitives.names))
    for name, weight in weights:
        if name not in primitives.names:
            raise CommandError(f"blend: no primitive '{name}' here; allowed: {', '.join(primitives.names)}")
        if not 0.0 <= weight < math.inf:
            raise CommandError(f"blend: weight of '{name}' is {weight:g}; allowed: 0 or more")
        values[primitives.names.index(name)] = weight
    if values.sum() <= 0.0:
        raise CommandError("blend: all weights are 0; allowed: at least one above 0")
    values /= values.sum()
    used = tuple((primitives.names[k], float(values[k])) for k in np.flatnonzero(values))
    return replace(memory, joints=values @ primitives.joints, weights=used, task=None, why="blended by hand")
