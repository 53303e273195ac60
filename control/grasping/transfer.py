"""Moving the fingers while the part lies still: approach, close, open, and from one grasp to the next."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from control.grasping.grasp import Grasp
from control.grasping.hold import FINGERS_APART_MM, LEFT_MM, OPEN_MARGIN_MM, OPEN_MM, Bench
from control.grasping.placing import place
from control.model.kinematics import contact_centres, link_yaws
from hw_profiles.geometry import Array, Pose2

STEP_MM = 2.0  # between checked postures


class Order(NamedTuple):
    """In which order the fingers run about the part.

    radius_by, bearing_from : by which share of a finger's way its radius is there, and from which share on its bearing changes.
    turn : 0 for all fingers together; +1 or −1 for one after the other, as listed or from the last: then only one of them at a
        time stands off as far as a corner of the part needs, and the gaps stay narrow.
    """

    radius_by: float
    bearing_from: float
    turn: int

    def shares(self, s: float, n_fingers: int) -> tuple[Array, Array]:
        """Shares of radius and bearing (n_fingers,) of each finger at a share s of the whole."""
        own = np.full(n_fingers, s)
        if self.turn:
            rank = np.arange(n_fingers)[:: self.turn]
            own = np.clip(s * n_fingers - rank, 0.0, 1.0)
        return np.minimum(own / self.radius_by, 1.0), np.maximum(own - self.bearing_from, 0.0) / (1.0 - self.bearing_from)


Way = tuple[float, Order]
ORDERS = (Order(0.5, 0.4, 0), Order(1.0, 0.0, 0), Order(0.5, 0.0, 1), Order(0.5, 0.0, -1))
WAYS: tuple[Way, ...] = ((OPEN_MM, ORDERS[0]), (OPEN_MM, ORDERS[2]), (OPEN_MM, ORDERS[3]), (OPEN_MM, ORDERS[1]), (5.0, ORDERS[0]))


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
    way: Way,
) -> Path | None:
    """From the commanded posture `start` to `wanted` (grasp and its ring pose (3,)), pressed; None when this way is not clear.

    `held` is what the fingers hold now: they open along its normals first. The part is taken to lie still at `part_pose`. Every
    posture clears the part and the other fingers, and shows the bench's cage margin. Takes 5 to 10 ms.
    """
    stand_off_mm, order = way
    postures, times = [start], [0.0]
    if held is not None:
        opened = _shift(bench, *held, start, np.linspace(0.0, stand_off_mm, math.ceil(stand_off_mm) + 1))
        if opened is None:
            return None
        _append(postures, times, opened, speeds.closing_mm_per_s * 2.0, bench)
    grasp, ring = wanted
    steps_mm = np.linspace(stand_off_mm, -squeeze_mm, math.ceil(stand_off_mm + squeeze_mm) + 1)
    closed = _shift(bench, grasp, ring, postures[-1], steps_mm)
    if closed is None:
        return None
    around = _around(bench, postures[-1], closed[0], part_pose, stand_off_mm, order)
    if around is None:
        return None
    n_held = len(postures)
    _append(postures, times, around, speeds.free_mm_per_s, bench)
    n_free = len(postures)
    _append(postures, times, closed, speeds.closing_mm_per_s, bench)
    return _checked(bench, postures, times, (n_held, n_free), part_pose, 0.3 * stand_off_mm)


def retreat(bench: Bench, start: Array, held: tuple[Grasp, Array], park: Array, part_pose: Pose2, speeds: Speeds) -> Path | None:
    """Let go of the part and go back to the loose cage; None when no way is clear."""
    for stand_off_mm, order in WAYS:
        postures, times = [start], [0.0]
        opened = _shift(bench, *held, start, np.linspace(0.0, stand_off_mm, math.ceil(stand_off_mm) + 1))
        if opened is None:
            continue
        _append(postures, times, opened, 2.0 * speeds.closing_mm_per_s, bench)
        around = _around(bench, postures[-1], park, part_pose, stand_off_mm, order)
        if around is None:
            continue
        n_held = len(postures)
        _append(postures, times, [*around, park], speeds.free_mm_per_s, bench)
        path = _checked(bench, postures, times, (n_held, len(postures)), part_pose, 0.3 * stand_off_mm)
        if path is not None:
            return path
    return None


def _checked(
    bench: Bench, postures: list[Array], times: list[float], free: tuple[int, int], part_pose: Pose2, clear_mm: float
) -> Path | None:
    """The path, if it is clear and keeps the part caged as asked; the postures `free` [from, to) must not touch the part."""
    if not _is_clear(bench, postures, *free, part_pose, clear_mm):
        return None
    margin_mm = min(bench.ring.certify(joints, part_pose.as_array()).margin_mm for joints in postures)
    if margin_mm < min(bench.demands.margin_mm, OPEN_MARGIN_MM):
        return None
    return Path(np.array(times), np.array(postures), margin_mm)


def _shift(bench: Bench, grasp: Grasp, ring: Array, near: Array, clearances_mm: Array) -> list[Array] | None:
    """Postures of a grasp at one clearance after the other."""
    postures = []
    for clearance_mm in clearances_mm:
        near, left_mm = grasp.joints(bench.hand, bench.shape, ring, float(clearance_mm), near)
        if left_mm > LEFT_MM:
            return None
        postures.append(near)
    return postures


def _around(bench: Bench, start: Array, end: Array, part_pose: Pose2, stand_off_mm: float, order: Order) -> list[Array] | None:
    """Postures from `start` to `end`: each contact runs about the part, no nearer than the stand-off."""
    hand, pose = bench.hand, part_pose.as_array()
    hand_from_part_inverse = part_pose.inverse()
    begin = hand_from_part_inverse.apply(contact_centres(hand, start))
    finish = hand_from_part_inverse.apply(contact_centres(hand, end))
    from_radius, to_radius = np.linalg.norm(begin, axis=1), np.linalg.norm(finish, axis=1)
    from_bearing = np.arctan2(begin[:, 1], begin[:, 0])
    turn = np.angle(np.exp(1j * (np.arctan2(finish[:, 1], finish[:, 0]) - from_bearing)))
    from_yaw, to_yaw = _last_link_yaws(bench, start), _last_link_yaws(bench, end)
    yaw_turn = np.where(hand.is_jaw, np.angle(np.exp(1j * (to_yaw - from_yaw))), np.nan)
    distance = np.abs(turn) * np.maximum(from_radius, to_radius) + np.abs(to_radius - from_radius)
    length_mm = float(distance.max()) * (hand.n_fingers if order.turn else 1)
    postures: list[Array] = []
    near = start
    for s in np.linspace(0.0, 1.0, max(1, math.ceil(length_mm / STEP_MM)) + 1)[1:]:
        radius_share, bearing_share = order.shares(float(s), hand.n_fingers)
        bearing = from_bearing + bearing_share * turn
        rays = np.stack([np.cos(bearing), np.sin(bearing)], axis=1)
        radius = from_radius + radius_share * (to_radius - from_radius)
        contacts = rays * (radius - hand.contact_radius_mm - stand_off_mm)[:, None]
        turns = from_yaw + bearing_share * yaw_turn - bearing - part_pose.yaw_rad
        near, left_mm, _ = place(hand, bench.shape, contacts, rays, turns, pose, stand_off_mm, near)
        if left_mm > 5.0 * LEFT_MM:
            return None
        postures.append(near)
    return postures


def _last_link_yaws(bench: Bench, joints: Array) -> Array:
    return link_yaws(bench.hand, joints)[bench.hand.first[1:] - 1]


def _append(postures: list[Array], times: list[float], more: list[Array], speed_mm_per_s: float, bench: Bench) -> None:
    """Add postures, each as late as the contact speed and 0.6 of the servos' no-load speed ask for."""
    for posture in more:
        moved = contact_centres(bench.hand, posture) - contact_centres(bench.hand, postures[-1])
        by_tip = float(np.linalg.norm(moved, axis=1).max()) / speed_mm_per_s
        by_servo = float((np.abs(posture - postures[-1]) / (0.6 * bench.hand.speed)).max())
        times.append(times[-1] + max(by_tip, by_servo, 1e-3))
        postures.append(posture)


def _is_clear(bench: Bench, postures: list[Array], n_held: int, n_free: int, part_pose: Pose2, clear_mm: float) -> bool:
    """Whether the fingers keep apart, and off the part while they move around it."""
    for index, joints in enumerate(postures):
        if bench.clearances.between_fingers(joints) < FINGERS_APART_MM:
            return False
        if n_held <= index < n_free and bench.clearances.to_part(joints, part_pose).min() < clear_mm:
            return False
    return True
