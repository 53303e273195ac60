"""Moving the fingers while the part lies still: approach, close, open, and from one grasp to the next."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from control.grasping.grasp import Grasp
from control.grasping.templates import LEFT_MM, Bench
from control.model.kinematics import contact_centres, link_yaws, place_contacts
from hw_profiles.geometry import Array, Pose2

STEP_MM = 2.0  # between checked postures
CLEAR_MM = 0.5  # least distance to the part while moving around it
FINGERS_APART_MM = 1.0
STAND_OFFS_MM = (1.5, 3.0, 6.0, 10.0)  # tried in this order: the least opening that works


@dataclass(frozen=True, slots=True, eq=False)
class Path:
    """Postures (k, n_joints) to pass through at times (k,) [s] from the start; `margin_mm`: the least cage margin along it."""

    times_s: Array
    joints: Array
    margin_mm: float

    def at(self, elapsed_s: float) -> Array:
        """Posture (n_joints,) after a time; the last one from the end on."""
        return np.array([np.interp(elapsed_s, self.times_s, column) for column in self.joints.T])

    @property
    def duration_s(self) -> float:
        """Time until the last posture."""
        return float(self.times_s[-1])


@dataclass(frozen=True, slots=True)
class Speeds:
    """How fast fingers may move when they carry nothing [mm/s] and when they close in on the part [mm/s]."""

    free_mm_per_s: float = 150.0
    closing_mm_per_s: float = 50.0


def transfer(
    bench: Bench,
    start: Array,
    held: tuple[Grasp, Array] | None,
    wanted: tuple[Grasp, Array],
    part_pose: Pose2,
    squeeze_mm: float,
    speeds: Speeds,
) -> Path | None:
    """From the commanded posture `start` to `wanted` (grasp and its ring pose (3,)), pressed; None when no way is clear.

    `held` is what the fingers hold now: they open along its normals first. The part is taken to lie still at `part_pose`. Every
    posture clears the part and the other fingers, and shows the bench's cage margin.
    """
    for stand_off_mm in STAND_OFFS_MM:
        path = _try(bench, start, held, wanted, part_pose, squeeze_mm, speeds, stand_off_mm)
        if path is not None:
            return path
    return None


def _try(
    bench: Bench,
    start: Array,
    held: tuple[Grasp, Array] | None,
    wanted: tuple[Grasp, Array],
    part_pose: Pose2,
    squeeze_mm: float,
    speeds: Speeds,
    stand_off_mm: float,
) -> Path | None:
    postures, times = [start], [0.0]
    if held is not None:
        opened = _shift(bench, *held, start, np.linspace(0.0, stand_off_mm, math.ceil(stand_off_mm) + 1))
        if opened is None:
            return None
        _append(postures, times, opened, speeds.closing_mm_per_s * 2.0, bench)
    grasp, ring = wanted
    around = _around(bench, postures[-1], grasp, ring, part_pose, stand_off_mm)
    if around is None:
        return None
    _append(postures, times, around, speeds.free_mm_per_s, bench)
    n_free = len(postures)
    closed = _shift(bench, grasp, ring, postures[-1], np.linspace(stand_off_mm, -squeeze_mm, math.ceil(stand_off_mm + squeeze_mm) + 1)[1:])
    if closed is None:
        return None
    _append(postures, times, closed, speeds.closing_mm_per_s, bench)
    margin_mm = _least_margin(bench, postures, n_free, part_pose)
    if margin_mm < bench.margin_mm:
        return None
    return Path(np.array(times), np.array(postures), margin_mm)


def _shift(bench: Bench, grasp: Grasp, ring: Array, near: Array, clearances_mm: Array) -> list[Array] | None:
    """Postures of a grasp at one clearance after the other."""
    postures = []
    for clearance_mm in clearances_mm:
        near, left_mm = grasp.joints(bench.hand, Pose2.from_array(ring), float(clearance_mm), near)
        if left_mm > LEFT_MM and clearance_mm > 0.0:
            return None
        postures.append(near)
    return postures


def _around(bench: Bench, start: Array, grasp: Grasp, ring: Array, part_pose: Pose2, stand_off_mm: float) -> list[Array] | None:
    """Postures from `start` to the grasp at its stand-off; each contact runs about the part's centre, bearing and radius together."""
    centres, yaws = grasp.placement(bench.hand, Pose2.from_array(ring), stand_off_mm)
    begin = contact_centres(bench.hand, start) - part_pose.xy_mm
    end = centres - part_pose.xy_mm
    from_radius, to_radius = np.linalg.norm(begin, axis=1), np.linalg.norm(end, axis=1)
    from_bearing = np.arctan2(begin[:, 1], begin[:, 0])
    turn = np.arctan2(end[:, 1], end[:, 0]) - from_bearing
    turn = np.angle(np.exp(1j * turn))
    start_yaws = _link_yaws(bench, start)
    yaw_turn = np.where(np.isnan(yaws), np.nan, np.angle(np.exp(1j * (np.nan_to_num(yaws) - start_yaws))))
    distance = np.abs(turn) * np.maximum(from_radius, to_radius) + np.abs(to_radius - from_radius)
    swing = np.abs(turn) * bench.part.circumradius_mm
    keep_off = bench.part.circumradius_mm + bench.hand.contact_radius_mm + 1.0
    postures: list[Array] = []
    near = start
    n_steps = max(1, math.ceil(float(distance.max()) / STEP_MM))
    for s in np.linspace(0.0, 1.0, n_steps + 1)[1:]:
        radius = from_radius + s * (to_radius - from_radius)
        bulge = np.minimum(1.0, 4.0 * min(s, 1.0 - s)) * np.clip(swing / 10.0, 0.0, 1.0)
        radius = radius + bulge * np.maximum(keep_off - radius, 0.0)
        bearing = from_bearing + s * turn
        contact = part_pose.xy_mm + radius[:, None] * np.stack([np.cos(bearing), np.sin(bearing)], axis=1)
        near, left_mm = place_contacts(bench.hand, contact, start_yaws + s * yaw_turn, near)
        if left_mm.max() > 10.0 * LEFT_MM:
            return None
        postures.append(near)
    return postures


def _link_yaws(bench: Bench, joints: Array) -> Array:
    return link_yaws(bench.hand, joints)[bench.hand.first[1:] - 1]


def _append(postures: list[Array], times: list[float], more: list[Array], speed_mm_per_s: float, bench: Bench) -> None:
    """Add postures, each as late as the contact speed and 0.6 of the servos' no-load speed ask for."""
    for posture in more:
        moved = contact_centres(bench.hand, posture) - contact_centres(bench.hand, postures[-1])
        by_tip = float(np.linalg.norm(moved, axis=1).max()) / speed_mm_per_s
        by_servo = float((np.abs(posture - postures[-1]) / (0.6 * bench.hand.speed)).max())
        times.append(times[-1] + max(by_tip, by_servo, 1e-3))
        postures.append(posture)


def _least_margin(bench: Bench, postures: list[Array], n_free: int, part_pose: Pose2) -> float:
    """Least cage margin along a path; −inf where a finger runs into the part before it may, or into another finger."""
    least = math.inf
    for index, joints in enumerate(postures):
        is_moving_free = 3 <= index < n_free
        if is_moving_free and bench.clearances.to_part(joints, part_pose).min() < CLEAR_MM:
            return -math.inf
        if bench.clearances.between_fingers(joints) < FINGERS_APART_MM:
            return -math.inf
        least = min(least, bench.ring.certify(joints, part_pose.as_array()).margin_mm)
    return least
