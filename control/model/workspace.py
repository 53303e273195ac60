"""The theoretical workspace: every pose at which the fingers can be placed about the part with a certified cage.

At each pose rings of fingers are tried: the contact centres stand around the part, over its outline, at bearings from their bases' own or
evenly spread, turned by a phase, at several openings. A pose counts when one ring is within reach, clear of the part, keeps the fingers
apart and shows a cage margin. More rings could only add poses, so the answer is a lower bound. docs/model.md, section 7.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit

from control.model.caging import Ring, RingArrays, ring_margin
from control.model.contact import PartShape, fingers_apart, touches
from control.model.energy import PoseGrid
from control.model.kinematics import HandArrays, HandModel, centre_lines_kernel, place_all
from hw_profiles.geometry import Array
from hw_profiles.part import Disc, Part

PHASES_RAD = np.radians(np.arange(-90.0, 91.0, 15.0))
OPENINGS_MM = np.array([0.6, 3.0, 7.0, 13.0])  # from the outline to the contact's surface
LEFT_MM = 1.0  # how far a contact may miss its place
CLEAR_MM = 0.5  # between fingers and part
APART_MM = 1.0  # between fingers


@dataclass(frozen=True, eq=False)
class Workspace:
    """Which poses of a grid can be caged: the best margin [mm] found, −inf for none; read-only (n_x, n_y, n_yaw)."""

    grid: PoseGrid
    margin_mm: Array

    @property
    def share(self) -> float:
        """Share of the grid's poses that can be caged."""
        return float(np.mean(self.margin_mm > 0.0))


def theoretical_workspace(hand: HandModel, part: Part, grid: PoseGrid, margin_mm: float = 0.0) -> Workspace:
    """The workspace over a grid; a pose is given up as soon as a ring shows `margin_mm`.

    A disc is asked at one yaw and the answer repeated. Cost: some 20 µs a ring tried, at most 208 rings a pose.
    """
    shape, ring = PartShape.of(part), Ring(hand, part)
    yaws = grid.yaw_rad[:1] if isinstance(part.shape, Disc) else grid.yaw_rad
    best = np.full((*grid.shape[:2], len(yaws)), -np.inf)
    turns = np.where(hand.is_jaw, 0.5 * math.pi, np.nan)
    workspace_kernel(
        hand.arrays, ring.arrays, shape.outline_mm, shape.radius_mm, hand.home, turns, grid.x_mm, grid.y_mm, yaws, margin_mm, best
    )
    full = np.ascontiguousarray(np.broadcast_to(best, grid.shape))
    full.setflags(write=False)
    return Workspace(grid, full)


@njit(cache=True)
def workspace_kernel(
    hand: HandArrays,
    ring: RingArrays,
    outline_mm: Array,
    disc_mm: float,
    home: Array,
    turns: Array,
    x_mm: Array,
    y_mm: Array,
    yaw_rad: Array,
    enough_mm: float,
    best: Array,
) -> None:
    """Kernel of `theoretical_workspace`; `turns` (n_fingers,): from a ray to a jaw's direction, nan for round tips."""
    pose = np.empty(3)
    for i in range(x_mm.shape[0]):
        for j in range(y_mm.shape[0]):
            for k in range(yaw_rad.shape[0]):
                pose[0], pose[1], pose[2] = x_mm[i], y_mm[j], yaw_rad[k]
                best[i, j, k] = best_ring(hand, ring, outline_mm, disc_mm, home, turns, pose, enough_mm)


@njit(cache=True)
def best_ring(
    hand: HandArrays, ring: RingArrays, outline_mm: Array, disc_mm: float, home: Array, turns: Array, pose: Array, enough_mm: float
) -> float:
    """Best cage margin [mm] of the rings tried about one pose, −inf for none; stops at the first that is enough."""
    n, best = hand.base_mm.shape[0], -np.inf
    bases = np.empty(n)
    for f in range(n):
        bases[f] = math.atan2(hand.base_mm[f, 1] - pose[1], hand.base_mm[f, 0] - pose[0])
    order = np.argsort(bases)
    for even in range(2):
        for opening in OPENINGS_MM:
            for phase in PHASES_RAD:
                for side in range(2 if not np.isnan(turns).all() else 1):
                    bearings = bases + phase
                    if even:
                        for place in range(n):
                            bearings[order[place]] = bases[order[0]] + phase + 2.0 * math.pi * place / n
                    margin = _ring_at(hand, ring, outline_mm, disc_mm, home, turns * (1.0 - 2.0 * side), pose, bearings, opening)
                    best = max(best, margin)
                    if best > enough_mm:
                        return best
    return best


@njit(cache=True)
def _ring_at(
    hand: HandArrays,
    ring: RingArrays,
    outline_mm: Array,
    disc_mm: float,
    home: Array,
    turns: Array,
    pose: Array,
    bearings: Array,
    opening_mm: float,
) -> float:
    """Cage margin of one ring if its fingers reach, clear the part and keep apart; −inf otherwise."""
    n = bearings.shape[0]
    centres, left_mm, touch, gaps = np.empty((n, 2)), np.empty(n), np.empty((n, 5)), np.empty(n)
    for f in range(n):
        out = reach_along(outline_mm, disc_mm, bearings[f] - pose[2]) + hand.contact_radius_mm[f] + opening_mm
        centres[f, 0], centres[f, 1] = pose[0] + out * math.cos(bearings[f]), pose[1] + out * math.sin(bearings[f])
    joints = place_all(hand, centres, bearings + turns, home, left_mm)
    if left_mm.max() > LEFT_MM:
        return -np.inf
    lines = centre_lines_kernel(hand, joints)
    margin = ring_margin(hand, ring, lines, pose, gaps)
    if margin <= 0.0 or fingers_apart(hand, lines) < APART_MM:
        return -np.inf
    touches(hand, lines, pose, outline_mm, disc_mm, touch)
    return margin if touch[:, 4].min() >= CLEAR_MM else -np.inf


@njit(cache=True)
def reach_along(outline_mm: Array, disc_mm: float, bearing: float) -> float:
    """How far the part reaches from its origin along a bearing [mm]."""
    if disc_mm > 0.0:
        return disc_mm
    ux, uy, far = math.cos(bearing), math.sin(bearing), 0.0
    n = outline_mm.shape[0]
    for i in range(n):
        a, b = outline_mm[i], outline_mm[(i + 1) % n]
        side_a, side_b = ux * a[1] - uy * a[0], ux * b[1] - uy * b[0]
        if (side_a > 0.0) != (side_b > 0.0):
            share = side_a / (side_a - side_b)
            far = max(far, ux * (a[0] + share * (b[0] - a[0])) + uy * (a[1] + share * (b[1] - a[1])))
    return far
