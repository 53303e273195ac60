"""Choosing how to get the part to a target: which grasp, how far it can carry, when to grasp anew."""

from __future__ import annotations

import math

import numpy as np

from control.grasping.library import Library, Option
from control.grasping.reach import Reach
from control.servoing.carry import ROLL, Carry
from hw_profiles.geometry import Array, Pose2

N_SAMPLES = 24  # of a straight way through a reach
CENTRE_MM = 10.0  # strokes of a long turn are made this near to the palm centre


def way_is_held(reach: Reach, start: Array, end: Array) -> bool:
    """Whether the grasp can hold all along the straight way between two ring poses (3,)."""
    return all(reach.holds(start + s * (end - start)) for s in np.linspace(0.0, 1.0, N_SAMPLES))


def farthest_held(reach: Reach, start: Array, end: Array) -> Array:
    """The last ring pose (3,) on the straight way from `start` that can still be held."""
    last = start
    for s in np.linspace(0.0, 1.0, 4 * N_SAMPLES):
        point = start + s * (end - start)
        if not reach.holds(point):
            break
        last = point
    return last


def next_ring(library: Library, carry: Carry, guide: Array) -> tuple[Array, bool]:
    """The ring pose (3,) to go to next toward `guide` (3,), and whether that is the guide's own.

    When the grasp cannot carry the part all the way: the position first, then as far round as it can; strokes of a turn are made near
    the palm centre, where the reach is widest.
    """
    reach = library.reaches[carry.reach_index]
    wanted = carry.ring_for(guide)
    if way_is_held(reach, carry.ring, wanted):
        return wanted, True
    for waypoint in (np.array([wanted[0], wanted[1], carry.ring[2]]), np.array([carry.ring[0], carry.ring[1], wanted[2]])):
        if way_is_held(reach, carry.ring, waypoint) and way_is_held(reach, waypoint, wanted):
            return (waypoint, False) if np.abs(waypoint - carry.ring).max() > 1e-6 else (wanted, True)
    xy = carry.ring[:2]
    distance = float(np.linalg.norm(xy))
    central = xy * min(1.0, CENTRE_MM / distance) if distance > 0.0 else xy
    turned = np.array([*central, wanted[2]])
    here = np.array([*central, carry.ring[2]])
    if distance > CENTRE_MM + 1.0 and way_is_held(reach, carry.ring, here):
        return here, False
    return farthest_held(reach, carry.ring, turned), False


def options_toward(library: Library, part: Array, guide: Array, held: Carry | None) -> tuple[Option, ...]:
    """Ways to take the part up at `part` (3,), the one that promises most on the way to `guide` (3,) first.

    First those that can carry it all the way, by their cage margin there; then by how far round they can take it.
    """
    ranked = []
    for option in library.options(Pose2(float(part[0]), float(part[1]), math.remainder(float(part[2]), 2.0 * math.pi))):
        if held is not None and option.reach_index == held.reach_index and np.abs(option.ring - held.ring).max() < math.radians(8.0):
            continue
        ranked.append((_promise(library, option, part, guide), option))
    ranked.sort(key=lambda pair: -pair[0])
    return tuple(option for _, option in ranked)


def _promise(library: Library, option: Option, part: Array, guide: Array) -> float:
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
