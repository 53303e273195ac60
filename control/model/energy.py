"""Elastic energy of a hand about a part: how hard the servos are pushed off their targets to make room for it.

E(pose | command) = Σ over fingers of the least joint energy of a posture that clears the part (eq. 1 of docs/model.md). A joint pushed d
off its target costs H(d) = k d²/2 up to the stall torque τ = k d, then τ |d| − τ²/2k (eq. 2). Fingers may pass through each other here, so
where fingers would overlap E is a lower bound; `contact.fingers_apart` tells of the command itself.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit

from control.model.finger_energy import RADIUS, finger_chain, finger_least, is_far, working_room
from control.model.kinematics import MAX_LINKS, HandArrays, HandModel, centre_lines_kernel
from control.model.pieces import Pieces, pieces_of
from hw_profiles.errors import CommandError
from hw_profiles.geometry import Array, Pose2
from hw_profiles.part import Part


@dataclass(frozen=True, eq=False)
class PoseGrid:
    """Poses of the part on a regular grid: x, y [mm] and yaw [rad], each read-only and ascending."""

    x_mm: Array
    y_mm: Array
    yaw_rad: Array

    @classmethod
    def square(cls, half_mm: float, n: int, yaw_rad: float | Array = 0.0) -> PoseGrid:
        """n × n positions out to ±half_mm, at one yaw or several."""
        ticks = np.linspace(-half_mm, half_mm, n)
        yaws = np.atleast_1d(np.asarray(yaw_rad, dtype=float))
        for array in (ticks, yaws):
            array.setflags(write=False)
        return cls(ticks, ticks, yaws)

    @property
    def shape(self) -> tuple[int, int, int]:
        """(n_x, n_y, n_yaw)."""
        return len(self.x_mm), len(self.y_mm), len(self.yaw_rad)

    def pose(self, index: tuple[int, int, int]) -> Pose2:
        """The pose of one cell."""
        i, j, k = index
        return Pose2(float(self.x_mm[i]), float(self.y_mm[j]), float(self.yaw_rad[k]))


@dataclass(frozen=True, eq=False)
class Yielding:
    """How a hand at a command yields to the part at a pose: energy [mJ], and the joints (n_joints,) it is pushed to."""

    energy_mj: float
    joints: Array


class Energy:
    """Elastic energy of one hand about one part."""

    def __init__(self, hand: HandModel, part: Part) -> None:
        self.hand = hand
        self.part = part
        self.pieces = pieces_of(part)
        self.reach_mm = part.circumradius_mm

    def at(self, command: Array, pose: Pose2) -> Yielding:
        """Energy and posture for one pose; the energy is inf, the joints the command's, where no posture clears the part.

        Raises
        ------
        CommandError
            If a command lies outside its joint's limits.
        """
        joints = np.empty(self.hand.n_joints)
        energy = energy_at(self.hand.arrays, self.springs, self.checked(command), pose.as_array(), self.pieces, self.reach_mm, joints)
        return Yielding(float(energy), joints)

    def over(self, command: Array, grid: PoseGrid) -> Array:
        """Energies (n_x, n_y, n_yaw) [mJ] over a grid of poses, read-only; inf where no posture clears the part.

        Raises
        ------
        CommandError
            If a command lies outside its joint's limits.

        Notes
        -----
        Eq. (1) of docs/model.md. Cost O(cells · fingers · edges), and a few more for each joint beyond the first.
        """
        values = np.empty(grid.shape)
        energy_over(
            self.hand.arrays,
            self.springs,
            self.checked(command),
            grid.x_mm,
            grid.y_mm,
            grid.yaw_rad,
            self.pieces,
            self.reach_mm,
            values,
        )
        values.setflags(write=False)
        return values

    def gradient(self, command: Array, pose: Pose2) -> Array:
        """∂E/∂(x, y, yaw) (3,) [mJ/mm, mJ/mm, mJ/rad] by central differences; minus it is the push on the part [N, N, N·mm]."""
        middle, steps = pose.as_array(), (GRADIENT_MM, GRADIENT_MM, GRADIENT_MM / self.reach_mm)
        gradient = np.empty(3)
        for axis, step in enumerate(steps):
            shift = np.zeros(3)
            shift[axis] = step
            ahead, behind = (self.at(command, Pose2(*(middle + sign * shift))).energy_mj for sign in (1.0, -1.0))
            gradient[axis] = (ahead - behind) / (2.0 * step)
        return gradient

    @property
    def springs(self) -> Array:
        """(n_joints, 2) stiffness and stall of every joint."""
        return np.stack([self.hand.stiffness, self.hand.stall], axis=1)

    def checked(self, command: Array) -> Array:
        """The command (n_joints,) itself, if it lies within the limits."""
        command = np.asarray(command, dtype=float)
        if command.shape != (self.hand.n_joints,):
            raise CommandError(f"command has shape {command.shape}; allowed: ({self.hand.n_joints},), one value a joint")
        for index, value in enumerate(command):
            low, high = self.hand.low[index], self.hand.high[index]
            if not low - 1e-9 <= value <= high + 1e-9:
                raise CommandError(f"joint {index} of hand '{self.hand.hand.name}': {value:.4f} is outside {low:.4f} … {high:.4f}")
        return np.clip(command, self.hand.low, self.hand.high)


GRADIENT_MM = 0.05


@njit(cache=True)
def energy_at(hand: HandArrays, springs: Array, command: Array, pose: Array, pieces: Pieces, reach_mm: float, joints: Array) -> float:
    """Kernel of `Energy.at`; fills `joints`."""
    lines = centre_lines_kernel(hand, command)
    joints[:] = command
    total, shifts = 0.0, np.zeros(MAX_LINKS)
    for f in range(hand.base_mm.shape[0]):
        a, b = hand.first[f], hand.first[f + 1]
        if is_far(lines[f], b - a, max(hand.link_radius_mm[a:b].max(), hand.tip_radius_mm[f]), pose, reach_mm):
            continue
        chain, spans = finger_chain(hand, springs, command, f), working_room(b - a, pieces)
        total += finger_least(chain, hand.base_mm[f], hand.base_yaw_rad[f], pose, pieces, spans, shifts)
        if total == np.inf:
            joints[:] = command
            return total
        joints[a:b] += shifts[: b - a]
    return total


@njit(cache=True)
def energy_over(
    hand: HandArrays,
    springs: Array,
    command: Array,
    x_mm: Array,
    y_mm: Array,
    yaw_rad: Array,
    pieces: Pieces,
    reach_mm: float,
    values: Array,
) -> None:
    """Kernel of `Energy.over`."""
    lines = centre_lines_kernel(hand, command)
    values[:] = 0.0
    for f in range(hand.base_mm.shape[0]):
        add_finger(hand, finger_chain(hand, springs, command, f), lines[f], f, x_mm, y_mm, yaw_rad, pieces, reach_mm, values)


@njit(cache=True)
def add_finger(
    hand: HandArrays,
    chain: Array,
    line_mm: Array,
    f: int,
    x_mm: Array,
    y_mm: Array,
    yaw_rad: Array,
    pieces: Pieces,
    reach_mm: float,
    values: Array,
) -> None:
    """Add the energy of one finger, at a command whose centre line is given, to `values` over a grid."""
    n = chain.shape[0]
    spans, pose, shifts = working_room(n, pieces), np.empty(3), np.zeros(MAX_LINKS)
    thickest = max(chain[:, RADIUS].max(), hand.tip_radius_mm[f])
    for i in range(x_mm.shape[0]):
        for j in range(y_mm.shape[0]):
            pose[0], pose[1] = x_mm[i], y_mm[j]
            if is_far(line_mm, n, thickest, pose, reach_mm):
                continue
            for k in range(yaw_rad.shape[0]):
                pose[2] = yaw_rad[k]
                if values[i, j, k] < np.inf:
                    values[i, j, k] += finger_least(chain, hand.base_mm[f], hand.base_yaw_rad[f], pose, pieces, spans, shifts)
