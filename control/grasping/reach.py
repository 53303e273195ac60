"""Which poses a grasp can hold: its reach, on a lattice of ring poses flooded outward from where the grasp was found."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from control.grasping.grasp import Grasp
from control.grasping.hold import Bench, flood_kernel
from hw_profiles.geometry import Array

PITCH = np.array([7.5, 7.5, math.radians(7.5)])  # lattice steps: mm, mm, rad
N_HALF = (11, 11, 20)  # steps either way of the origin
CORNERS = np.array(list(itertools.product((0, 1), repeat=3)))  # of a lattice cell, (8, 3)

Node = tuple[int, int, int]


@dataclass(frozen=True, eq=False)
class Reach:
    """A grasp and the poses hand_from_grasp at which it can hold.

    Attributes
    ----------
    origin : (3,) pose of lattice node (0, 0, 0): mm, mm, rad; yaw is not wrapped.
    margin_mm : (n_x, n_y, n_yaw) cage margin at each node; −inf where the grasp cannot hold.
    open_margin_mm : the same with the fingers opened a little, as a change of grasp needs it.
    joints : (n_x, n_y, n_yaw, n_joints) of the touching grasp there; nan where it cannot hold.
    held : (n_x − 1, n_y − 1, n_yaw − 1) cells that the grasp may be used in: every corner can be held, and the rest of what the hand
        can do with the part is connected to it.
    """

    grasp: Grasp
    origin: Array
    margin_mm: Array
    open_margin_mm: Array
    joints: Array
    held: NDArray[np.bool_]

    def cell(self, pose: Array) -> Node:
        """Lattice cell that holds a pose (3,) with unwrapped yaw."""
        return tuple(int(k) for k in np.floor((pose - self.origin) / PITCH + 1e-9))  # type: ignore[return-value]

    def cell_margin_mm(self, pose: Array) -> float:
        """Least cage margin over the corners of the cell around a pose (3,); −inf where it cannot be held."""
        if not self.holds(pose):
            return -math.inf
        i, j, k = self.cell(pose)
        return float(self.margin_mm[i : i + 2, j : j + 2, k : k + 2].min())

    def openable(self, margin_mm: float) -> NDArray[np.bool_]:
        """Which cells can be held, and let go of with a cage margin left (n_x − 1, n_y − 1, n_yaw − 1)."""
        return self.held & (_least_over_corners(self.open_margin_mm) >= margin_mm)

    def holds(self, pose: Array) -> bool:
        """Whether the cell around a pose (3,) can be held."""
        return self.holds_all(pose[None, :])

    def holds_all(self, poses: Array) -> bool:
        """Whether the cells around all poses (n, 3) can be held."""
        index = np.floor((poses - self.origin) / PITCH + 1e-9).astype(np.int64)
        held = self.held
        if (index < 0).any() or (index >= held.shape).any():
            return False
        return bool(held[index[:, 0], index[:, 1], index[:, 2]].all())

    def held_cell_near(self, pose: Array) -> Node:
        """The cell that holds a pose (3,), or the nearest one around it that can be held."""
        cell = np.array(self.cell(pose))
        around = cell + np.array(list(itertools.product((0, -1, 1), repeat=3)))
        inside = around[((around >= 0) & (around < self.held.shape)).all(axis=1)]
        held = inside[self.held[inside[:, 0], inside[:, 1], inside[:, 2]]]
        if not len(held):
            i, j, k = np.clip(cell, 0, np.array(self.held.shape) - 1)
            return int(i), int(j), int(k)
        place = (pose - self.origin) / PITCH - 0.5
        i, j, k = held[int(np.argmin(np.abs(held - place).max(axis=1)))]
        return int(i), int(j), int(k)

    def yaw_near(self, yaw_rad: float) -> float:
        """The same direction, unwrapped to lie within half a turn of the lattice's middle."""
        middle = self.origin[2] + PITCH[2] * (self.margin_mm.shape[2] - 1) / 2.0
        return float(middle + math.remainder(yaw_rad - middle, 2.0 * math.pi))

    def yaw_span(self, x_mm: float, y_mm: float, yaw_rad: float) -> tuple[float, float]:
        """Least and greatest yaw that can be held at (x, y) without leaving, starting from `yaw_rad` (which must be held)."""
        i, j, k = self.cell(np.array([x_mm, y_mm, yaw_rad]))
        held = self.held[i, j]
        low, high = k, k + 1
        while low > 0 and held[low - 1]:
            low -= 1
        while high < len(held) and held[high]:
            high += 1
        return float(self.origin[2] + low * PITCH[2]), float(self.origin[2] + high * PITCH[2])


def _least_over_corners(values: Array) -> Array:
    n_x, n_y, n_yaw = values.shape
    shifted = [values[a : n_x - 1 + a, b : n_y - 1 + b, c : n_yaw - 1 + c] for a, b, c in CORNERS]
    return np.asarray(np.minimum.reduce(shifted))


def flood(bench: Bench, grasp: Grasp, start: Array) -> Reach:
    """The connected set of poses that a grasp can hold, outward from a ring pose (3,) that it can hold.

    Each node starts its inverse kinematics from the neighbour it was reached from, so that no finger flips over.
    """
    shape = tuple(2 * n + 1 for n in N_HALF)
    origin = start - PITCH * np.array(N_HALF)
    margins, open_margins = np.full(shape, -np.inf), np.full(shape, -np.inf)
    joints = np.full((*shape, bench.hand.n_joints), np.nan)
    flood_kernel(
        bench.hand.arrays,
        bench.shape.outline_mm,
        bench.shape.radius_mm,
        bench.demands,
        grasp.points_mm,
        grasp.normals,
        grasp.jaw_turn_rad,
        origin,
        PITCH,
        np.array(N_HALF),
        bench.hand.home,
        margins,
        open_margins,
        joints,
    )
    held = _least_over_corners(margins) > -np.inf
    for array in (origin, margins, open_margins, joints, held):
        array.setflags(write=False)
    return Reach(grasp, origin, margins, open_margins, joints, held)
