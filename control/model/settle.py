"""Where a move of the fingers will take the part: quasi-static contact steps with friction.

The command is walked in small steps. In each, joints and part take the motion that least changes the servos' balance (eq. 6 of
docs/model.md): springs and stall torques of the servos, friction in their gears, contacts that only push, Coulomb friction at every contact
and between part and plate. Contacts are linear in one step, and a projected Gauss–Seidel iteration solves it (Jourdan, Alart & Jean,
"A Gauss-Seidel like algorithm to solve frictional contact problems", CMAME 1998). No inertia: the part goes nowhere on its own. Fingers do
not touch each other here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from control.model.contact import PartShape
from control.model.energy import Energy
from control.model.kinematics import HandArrays, HandModel, centre_lines_kernel
from control.model.touching import ACROSS, ALONG, GAP, MAX_CONTACTS, N_COLUMNS, NORMAL, PLACE, near_contacts
from hw_profiles.geometry import Array, Pose2
from hw_profiles.part import Part

GRAVITY_MM = 9806.65  # standard gravity [mm/s²]; g · mm/s² = µN
STEP_MM = 0.2  # how far a command's fingertips move in one step
N_SWEEPS = 300
N_RELAX = 150  # steps at the last command until nothing moves
STILL_MM = 5e-4
MAX_MOVE_MM = 0.8  # of any finger or the part in one step
LIGHT = 0.8  # how stiffly the part resists within one step, as a share of a fingertip: much lighter, and the iteration does not converge


@dataclass(frozen=True, eq=False)
class Settled:
    """Where it ends: pose of the part, joints (n_joints,), and whether it came to rest within the steps allowed."""

    pose: Pose2
    joints: Array
    is_at_rest: bool


@dataclass(frozen=True, eq=False)
class Settling:
    """Quasi-static prediction for one hand and one part."""

    hand: HandModel
    part: Part
    energy: Energy
    shape: PartShape

    @classmethod
    def of(cls, hand: HandModel, part: Part) -> Settling:
        """Ready for predictions."""
        return cls(hand, part, Energy(hand, part), PartShape.of(part))

    def after(self, pose: Pose2, command: Array, next_command: Array, joints: Array | None = None) -> Settled:
        """Where the part settles when the command goes from `command` to `next_command` (n_joints,) in a straight line.

        Parameters
        ----------
        pose : where the part lies at `command`.
        joints : (n_joints,) where the fingers stand, when known; else where `Energy.at` has them yield to.

        Raises
        ------
        CommandError
            If a command lies outside its joint's limits.

        Notes
        -----
        Eq. (6) of docs/model.md. Some 10 ms for a few mm.
        """
        start, end = self.energy.checked(command), self.energy.checked(next_command)
        q = (self.energy.at(start, pose).joints if joints is None else np.asarray(joints, dtype=float)).copy()
        lines = [centre_lines_kernel(self.hand.arrays, c) for c in (start, end)]
        n_steps = max(1, math.ceil(float(np.linalg.norm(lines[1] - lines[0], axis=2).max()) / STEP_MM))
        place = pose.as_array()
        left_mm = settle_kernel(
            self.hand.arrays,
            self.energy.springs,
            self._gear_friction,
            start,
            end,
            n_steps,
            self.shape.outline_mm,
            self.shape.radius_mm,
            self.part.friction,
            self._plate,
            q,
            place,
        )
        return Settled(Pose2.from_array(place), q, bool(left_mm < STILL_MM))

    @property
    def _gear_friction(self) -> Array:
        """Friction (n_joints,) [N·mm] or [N] in each joint's gears."""
        hand = self.hand.hand
        joints = [joint for finger in hand.fingers for joint in hand.chain_of(finger).joints]
        return np.array([hand.servos[joint.servo].gear_friction_nmm / joint.per_horn_rad for joint in joints])

    @property
    def _plate(self) -> Array:
        """(3,) greatest friction force [N] between part and plate, its lever [mm], and the part's stiffness in one step [N/mm].

        The lever of a disc that bears evenly is 2/3 of its radius (limit surface of Howe & Cutkosky, IJRR 1996).
        """
        force = self.part.plate_friction * self.part.mass_g * GRAVITY_MM * 1e-6
        reach = max(
            float(np.linalg.norm(np.diff(line, axis=0), axis=1).sum()) for line in centre_lines_kernel(self.hand.arrays, self.hand.home)
        )
        stiffness = np.where(self.hand.is_slide, self.hand.stiffness, self.hand.stiffness / reach**2)
        return np.array([force, 2.0 / 3.0 * self.part.circumradius_mm, LIGHT * float(stiffness.min())])


@njit(cache=True)
def settle_kernel(
    hand: HandArrays,
    springs: Array,
    gear: Array,
    start: Array,
    end: Array,
    n_steps: int,
    outline_mm: Array,
    disc_mm: float,
    friction: float,
    plate: Array,
    joints: Array,
    pose: Array,
) -> float:
    """Kernel of `Settling.after`: moves `joints` and `pose`; returns how far the last step still moved anything [mm]."""
    rows, owner = np.empty((MAX_CONTACTS, N_COLUMNS)), np.empty(MAX_CONTACTS, np.int64)
    moved = np.inf
    for step in range(n_steps + N_RELAX):
        share = min((step + 1.0) / n_steps, 1.0)
        lines = centre_lines_kernel(hand, joints)
        n = near_contacts(hand, joints, lines, pose, outline_mm, disc_mm, rows, owner)
        torque = np.empty(joints.shape[0])
        for j in range(joints.shape[0]):
            wanted = springs[j, 0] * (start[j] + share * (end[j] - start[j]) - joints[j])
            torque[j] = min(max(wanted, -springs[j, 1]), springs[j, 1])
        dq, dp = contact_step(hand, springs[:, 0], gear, torque, rows[:n], owner, friction, plate)
        moved = _take(hand, lines, dq, dp, plate[1], joints, pose)
        if step >= n_steps and moved < STILL_MM:
            break
    return moved


@njit(cache=True)
def _take(hand: HandArrays, lines_mm: Array, dq: Array, dp: Array, lever_mm: float, joints: Array, pose: Array) -> float:
    """Move by the step, shortened so that nothing goes further than MAX_MOVE_MM; returns how far [mm] it wanted to move anything."""
    far = max(math.hypot(dp[0], dp[1]), abs(dp[2]) * lever_mm)
    for f in range(lines_mm.shape[0]):
        for j in range(hand.first[f], hand.first[f + 1]):
            base = lines_mm[f, j - hand.first[f]]
            tip = lines_mm[f, hand.first[f + 1] - hand.first[f]]
            arm = 1.0 if hand.is_slide[j] else math.hypot(tip[0] - base[0], tip[1] - base[1])
            far = max(far, abs(dq[j]) * arm)
    share = min(1.0, MAX_MOVE_MM / max(far, 1e-12))
    for j in range(joints.shape[0]):
        joints[j] = min(max(joints[j] + share * dq[j], hand.low[j]), hand.high[j])
    for axis in range(3):
        pose[axis] += share * dp[axis]
    return far


@njit(cache=True)
def contact_step(
    hand: HandArrays, stiffness: Array, gear: Array, torque: Array, rows: Array, owner: NDArray[np.int64], friction: float, plate: Array
) -> tuple[Array, Array]:
    """Motions of joints (n_joints,) and part (3,) in one step, eq. (6): projected Gauss–Seidel over contacts, gears and plate."""
    n, n_joints = rows.shape[0], stiffness.shape[0]
    plate_n, lever_mm, light = plate[0], plate[1], plate[2]
    heavy = light * lever_mm * lever_mm  # resistance to turning
    dq, dp = torque / stiffness, np.zeros(3)
    push, rub, held, dragged = np.zeros(n), np.zeros(n), np.zeros(n_joints), np.zeros(3)
    give = np.empty((n, 2))
    for c in range(n):
        row, first = rows[c], hand.first[owner[c]]
        for way in range(2):
            nx, ny = (row[NORMAL], row[NORMAL + 1]) if way == 0 else (-row[NORMAL + 1], row[NORMAL])
            arm = row[PLACE] * ny - row[PLACE + 1] * nx
            give[c, way] = 1.0 / light + arm * arm / heavy
            for j in range(hand.first[owner[c] + 1] - first):
                give[c, way] += row[(ALONG if way == 0 else ACROSS) + j] ** 2 / stiffness[first + j]
    for _ in range(N_SWEEPS):
        change = 0.0
        for c in range(n):
            row, first, n_own = rows[c], hand.first[owner[c]], hand.first[owner[c] + 1] - hand.first[owner[c]]
            for way in range(2):
                nx, ny = (row[NORMAL], row[NORMAL + 1]) if way == 0 else (-row[NORMAL + 1], row[NORMAL])
                arm = row[PLACE] * ny - row[PLACE + 1] * nx
                column = ALONG if way == 0 else ACROSS
                slip = -nx * dp[0] - ny * dp[1] - arm * dp[2]
                for j in range(n_own):
                    slip += row[column + j] * dq[first + j]
                if way == 0:
                    force = max(push[c] - (row[GAP] + slip) / give[c, 0], 0.0)
                    added, push[c] = force - push[c], force
                else:
                    limit = friction * push[c]
                    force = min(max(rub[c] - slip / give[c, 1], -limit), limit)
                    added, rub[c] = force - rub[c], force
                if added != 0.0:
                    dp[0] -= nx * added / light
                    dp[1] -= ny * added / light
                    dp[2] -= arm * added / heavy
                    for j in range(n_own):
                        dq[first + j] += row[column + j] * added / stiffness[first + j]
                    change = max(change, abs(added) * give[c, way])
        for j in range(n_joints):
            force = min(max(held[j] - dq[j] * stiffness[j], -gear[j]), gear[j])
            dq[j] += (force - held[j]) / stiffness[j]
            held[j] = force
        drag_x, drag_y, drag_turn = dragged[0] - light * dp[0], dragged[1] - light * dp[1], dragged[2] - heavy * dp[2]
        size = math.sqrt(drag_x * drag_x + drag_y * drag_y + (drag_turn / lever_mm) ** 2)
        share = min(1.0, plate_n / max(size, 1e-12))
        dp[0] += (share * drag_x - dragged[0]) / light
        dp[1] += (share * drag_y - dragged[1]) / light
        dp[2] += (share * drag_turn - dragged[2]) / heavy
        dragged[0], dragged[1], dragged[2] = share * drag_x, share * drag_y, share * drag_turn
        if change < 1e-6:
            break
    return dq, dp
