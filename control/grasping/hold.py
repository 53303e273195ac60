"""Does a grasp hold at a ring pose? The one test behind the search for grasps and their reach, compiled."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

from control.grasping.contacts import closure
from control.grasping.grasp import Grasp
from control.grasping.placing import place_about
from control.model.caging import Ring, RingArrays, ring_margin
from control.model.contact import Clearances, PartShape, fingers_apart
from control.model.kinematics import HandArrays, HandModel, centre_lines_kernel
from hw_profiles.geometry import Array
from hw_profiles.part import Part

MIN_CLOSURE = 0.05
LEFT_MM = 0.8  # greatest distance by which a finger may miss its place: it is compliant
FINGERS_APART_MM = 1.0
OPEN_MM = 1.5  # how far fingers open, at least, to change grasp
OPEN_MARGIN_MM = 1.0  # least cage margin while they are open, where a cage is required


class Demands(NamedTuple):
    """What a hold must show, as the kernel takes it.

    margin_mm : cage margin, −inf for none. friction, lever_mm : for the closure of the contacts as they are; friction < 0 for flat
    jaws, which take moments that point contacts do not.
    """

    ring: RingArrays
    margin_mm: float
    friction: float
    lever_mm: float


@dataclass(frozen=True, slots=True, eq=False)
class Hold:
    """A grasp in place: joints (n_joints,), cage margin [mm], closure ε of the contacts as they are."""

    joints: Array
    margin_mm: float
    closure: float


@dataclass(frozen=True, eq=False)
class Bench:
    """The hand and part under question, with the compiled tests on them."""

    hand: HandModel
    part: Part
    shape: PartShape
    ring: Ring
    clearances: Clearances
    demands: Demands

    @classmethod
    def of(cls, hand: HandModel, part: Part, margin_mm: float) -> Bench:
        """Tests for a hand and a part; `margin_mm` is what the cage certificate must show, −inf for none."""
        shape, ring = PartShape.of(part), Ring(hand, part)
        friction = -1.0 if hand.is_jaw.all() else part.friction
        demands = Demands(ring.arrays, margin_mm, friction, part.circumradius_mm)
        return cls(hand, part, shape, ring, Clearances(hand, shape), demands)

    def hold(self, grasp: Grasp, ring: Array, near: Array) -> Hold | None:
        """The grasp touching at a ring pose (3,), if its fingers reach, keep apart, close on the part and cage it as asked."""
        joints, margin_mm, quality = hold_kernel(
            self.hand.arrays,
            self.shape.outline_mm,
            self.shape.radius_mm,
            self.demands,
            grasp.points_mm,
            grasp.normals,
            grasp.jaw_turn_rad,
            ring,
            near,
        )
        return None if quality < 0.0 else Hold(joints, margin_mm, quality)


@njit(cache=True)
def hold_kernel(
    hand: HandArrays,
    outline_mm: Array,
    disc_mm: float,
    demands: Demands,
    contacts_mm: Array,
    normals: Array,
    turns_rad: Array,
    ring: Array,
    near: Array,
) -> tuple[Array, float, float]:
    """Joints, cage margin and closure of a grasp touching at a ring pose; closure −1 where it does not hold."""
    joints, left_mm, touch = place_about(hand, outline_mm, disc_mm, contacts_mm, normals, turns_rad, ring, 0.0, near)
    if left_mm > LEFT_MM:
        return joints, 0.0, -1.0
    lines = centre_lines_kernel(hand, joints)
    gaps = np.empty(hand.base_mm.shape[0])
    margin_mm = ring_margin(hand, demands.ring, lines, ring, gaps)
    if margin_mm < demands.margin_mm or fingers_apart(hand, lines) < FINGERS_APART_MM:
        return joints, margin_mm, -1.0
    quality = 1.0
    if demands.friction >= 0.0:
        quality = closure(touch[:, :2], touch[:, 2:4], demands.friction, demands.lever_mm)
    return joints, margin_mm, quality if quality > MIN_CLOSURE else -1.0


@njit(cache=True)
def flood_kernel(
    hand: HandArrays,
    outline_mm: Array,
    disc_mm: float,
    demands: Demands,
    contacts_mm: Array,
    normals: Array,
    turns_rad: Array,
    origin: Array,
    pitch: Array,
    start: NDArray[np.int64],
    home: Array,
    margins_mm: Array,
    open_margins_mm: Array,
    joints: Array,
) -> None:
    """Fill margins (n_x, n_y, n_yaw) and joints (n_x, n_y, n_yaw, n_joints) outward from a start node; unheld nodes stay as given.

    The open margins are those with every finger OPEN_MM off the part: what a regrasp goes through.
    """
    n_x, n_y, n_yaw = margins_mm.shape
    seen = np.zeros((n_x, n_y, n_yaw), np.bool_)
    queue = np.empty((n_x * n_y * n_yaw, 6), np.int64)  # node, and the neighbour whose joints to start from
    queue[0, :3], queue[0, 3] = start, -1
    seen[start[0], start[1], start[2]] = True
    head, tail = 0, 1
    pose, gaps = np.empty(3), np.empty(hand.base_mm.shape[0])
    while head < tail:
        i, j, k = queue[head, 0], queue[head, 1], queue[head, 2]
        near = home if queue[head, 3] < 0 else joints[queue[head, 3], queue[head, 4], queue[head, 5]]
        head += 1
        pose[0], pose[1], pose[2] = origin[0] + pitch[0] * i, origin[1] + pitch[1] * j, origin[2] + pitch[2] * k
        found, margin_mm, quality = hold_kernel(hand, outline_mm, disc_mm, demands, contacts_mm, normals, turns_rad, pose, near)
        if quality < 0.0:
            continue
        margins_mm[i, j, k] = margin_mm
        joints[i, j, k] = found
        opened, _, _ = place_about(hand, outline_mm, disc_mm, contacts_mm, normals, turns_rad, pose, OPEN_MM, found)
        open_margins_mm[i, j, k] = ring_margin(hand, demands.ring, centre_lines_kernel(hand, opened), pose, gaps)
        for axis in range(3):
            for step in (-1, 1):
                a, b, c = i + (step if axis == 0 else 0), j + (step if axis == 1 else 0), k + (step if axis == 2 else 0)
                if 0 <= a < n_x and 0 <= b < n_y and 0 <= c < n_yaw and not seen[a, b, c]:
                    seen[a, b, c] = True
                    queue[tail, 0], queue[tail, 1], queue[tail, 2] = a, b, c
                    queue[tail, 3], queue[tail, 4], queue[tail, 5] = i, j, k
                    tail += 1
