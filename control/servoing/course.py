"""Choosing how to get the part to a target: which grasp, how far it can carry, when to grasp anew."""

from __future__ import annotations

import math
from itertools import product

import numpy as np

from control.grasping.library import Library, Option
from control.grasping.reach import PITCH, Node, Reach
from control.grasping.roadmap import Remaining
from control.servoing.carry import ROLL, Carry
from control.servoing.memory import Task
from hw_profiles.geometry import Array, Pose2

SAMPLES_PER_CELL = 6  # on a straight way through a reach
N_STEPS = 96  # of the search for its end
CORRECTION = np.array([4.0, 4.0, math.radians(4.0)])
CENTRE_MM = 10.0  # strokes of a long turn are made this near to the palm centre
TURNED_RAD = math.radians(8.0)
WORTH_S = 0.3  # a regrasp must bring the goal nearer by this beyond its own cost


def way_is_held(reach: Reach, start: Array, end: Array) -> bool:
    """Whether the grasp can hold all along the straight way between two ring poses (3,)."""
    n_samples = 4 + int(np.abs((end - start) / PITCH).max() * SAMPLES_PER_CELL)
    return reach.holds_all(start + np.linspace(0.0, 1.0, n_samples)[:, None] * (end - start))


def farthest_held(reach: Reach, start: Array, end: Array) -> Array:
    """The last ring pose (3,) on the straight way from `start` that can still be held."""
    last = start
    for s in np.linspace(0.0, 1.0, N_STEPS):
        point = start + s * (end - start)
        if not reach.holds(point):
            break
        last = point
    return last


def direct_ring(library: Library, carry: Carry, task: Task) -> Array | None:
    """The ring pose (3,) that brings the part to the task's guide, if this grasp can carry it straight there.

    The last small correction may leave the held cells for one beside them: the offset learnt meanwhile moves the ring a little past
    where the goal itself would need it.
    """
    reach = library.reaches[carry.reach_index]
    wanted = carry.ring_for(task.guide)
    if way_is_held(reach, carry.ring, wanted):
        return wanted
    is_small = bool(np.all(np.abs(wanted - carry.ring) <= CORRECTION))
    return wanted if is_small and reach.held[reach.held_cell_near(wanted)] else None


def waypoint(library: Library, carry: Carry, task: Task) -> Array:
    """Where to carry the part when the straight way is not held: round one corner, else as near as this grasp brings it.

    A ring that a correction has taken out of the held cells goes back into the nearest one first.
    """
    reach = library.reaches[carry.reach_index]
    if not reach.holds(carry.ring):
        return np.asarray(reach.origin + PITCH * (np.array(reach.held_cell_near(carry.ring)) + 0.5))
    wanted = carry.ring_for(task.guide)
    for corner in (np.array([wanted[0], wanted[1], carry.ring[2]]), np.array([carry.ring[0], carry.ring[1], wanted[2]])):
        if way_is_held(reach, carry.ring, corner) and way_is_held(reach, corner, wanted):
            return corner
    return _round_stroke(reach, carry, wanted) if task.remaining is None else _downhill(reach, carry, task.remaining)


def _downhill(reach: Reach, carry: Carry, remaining: Remaining) -> Array:
    """Follow the cells of this reach from which the goal is nearer and nearer; the farthest that the straight way is held to."""
    cell = reach.cell(carry.ring)
    best = remaining.at(carry.reach_index, cell)
    target = carry.ring
    while True:
        nearer = min(_around(cell), key=lambda other: remaining.at(carry.reach_index, other))
        if remaining.at(carry.reach_index, nearer) >= best - 1e-9:
            return target
        best, cell = remaining.at(carry.reach_index, nearer), nearer
        middle = reach.origin + PITCH * (np.array(cell) + 0.5)
        if not way_is_held(reach, carry.ring, middle):
            return target
        target = middle


def _around(cell: Node) -> list[Node]:
    i, j, k = cell
    return [(i + a, j + b, k + c) for a, b, c in product((-1, 0, 1), repeat=3) if abs(a) + abs(b) + abs(c) == 1]


def _round_stroke(reach: Reach, carry: Carry, wanted: Array) -> Array:
    """For a disc: the position first near the palm centre, where the reach is widest, then as far round as it can."""
    xy = carry.ring[:2]
    distance = float(np.linalg.norm(xy))
    central = xy * min(1.0, CENTRE_MM / distance) if distance > 0.0 else xy
    here = np.array([*central, carry.ring[2]])
    if distance > CENTRE_MM + 1.0 and way_is_held(reach, carry.ring, here):
        return here
    return farthest_held(reach, carry.ring, np.array([*central, wanted[2]]))


def options_toward(library: Library, part: Array, task: Task, held: Carry | None) -> tuple[Option, ...]:
    """Ways to take the part up at `part` (3,), the one that promises most on the way to the task's guide first."""
    options = library.options(Pose2(float(part[0]), float(part[1]), math.remainder(float(part[2]), 2.0 * math.pi)))
    if task.remaining is not None:
        return _nearest_first(library, options, task.remaining, held)
    ranked = [(_promise(library, option, part, task.guide), option) for option in options if _is_another(option, held)]
    ranked.sort(key=lambda pair: -pair[0])
    return tuple(option for _, option in ranked)


def _nearest_first(library: Library, options: list[Option], remaining: Remaining, held: Carry | None) -> tuple[Option, ...]:
    limit = math.inf
    if held is not None:
        limit = remaining.at(held.reach_index, library.reaches[held.reach_index].cell(held.ring)) - WORTH_S
    timed = [(remaining.at(o.reach_index, library.reaches[o.reach_index].cell(o.ring)) - 0.02 * min(o.margin_mm, 5.0), o) for o in options]
    timed = [(seconds, o) for seconds, o in timed if seconds < limit and _is_another(o, held)]
    timed.sort(key=lambda pair: pair[0])
    return tuple(option for _, option in timed)


def _is_another(option: Option, held: Carry | None) -> bool:
    """Whether an option differs from the grasp that is held: another one, or the same well turned."""
    return held is None or option.reach_index != held.reach_index or bool(np.abs(option.ring - held.ring).max() >= TURNED_RAD)


def _promise(library: Library, option: Option, part: Array, guide: Array) -> float:
    """First what can carry the part all the way, by its cage margin there; then by how far round it can take it."""
    reach = library.reaches[option.reach_index]
    wanted = option.ring + np.where(np.isnan(guide), 0.0, guide - part) / ROLL
    if way_is_held(reach, option.ring, wanted):
        return 1000.0 + min(reach.cell_margin_mm(wanted), option.margin_mm, 10.0) + 0.1 * _room(reach, wanted)
    turned = np.array([option.ring[0], option.ring[1], wanted[2]])
    gained = abs(float(farthest_held(reach, option.ring, turned)[2] - option.ring[2]))
    moved = farthest_held(reach, option.ring, wanted) - option.ring
    return math.degrees(gained) + float(np.hypot(moved[0], moved[1])) + 0.3 * min(option.margin_mm, 10.0)


def _room(reach: Reach, ring: Array) -> float:
    """Degrees to the nearer end of what can be held at this position."""
    low, high = reach.yaw_span(float(ring[0]), float(ring[1]), float(ring[2]))
    return math.degrees(min(ring[2] - low, high - ring[2]))
