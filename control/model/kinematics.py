"""Kinematics of a planar hand: joint values to link centre lines, Jacobians, and back.

Joint values of a hand are one vector (n_joints,), fingers as the profile lists them, each from its base outward: revolute
[rad], prismatic [mm]. Walking out from the base, a revolute joint turns the direction and adds its link; a prismatic joint
adds a link as long as its value (the product of planar rigid motions; Lynch & Park, Modern Robotics, ch. 4, in the plane).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np
from numba import njit
from numpy.typing import ArrayLike, NDArray

from hw_profiles.geometry import Array
from hw_profiles.hand import Hand, Servo

MAX_LINKS = 3
ARM_MM = 40.0  # weighs a jaw's direction error [rad] against its position error [mm]


def _frozen(values: ArrayLike, kind: type = float) -> Any:
    array: Array = np.array(values, dtype=kind)
    array.setflags(write=False)
    return array


class HandArrays(NamedTuple):
    """A hand as kernels take it; the fields are those of `HandModel`."""

    base_mm: Array
    base_yaw_rad: Array
    first: NDArray[np.int64]
    is_slide: NDArray[np.bool_]
    link_mm: Array
    link_radius_mm: Array
    tip_radius_mm: Array
    contact_radius_mm: Array
    contact_back_mm: Array
    low: Array
    high: Array


@dataclass(frozen=True, eq=False)
class HandModel:
    """A hand profile as read-only arrays, ready for kernels.

    Attributes
    ----------
    base_mm (n_fingers, 2), base_yaw_rad (n_fingers,) : where fingers stand and look.
    first (n_fingers + 1,) : finger f owns joints first[f]:first[f + 1]; each joint carries one link.
    is_slide, link_mm, link_radius_mm (n_joints,) : link_mm is 0 where the joint slides.
    tip_radius_mm, contact_back_mm, is_jaw (n_fingers,) : how the finger's end touches; a jaw touches with the flat of its
        last link, contact_back_mm from the end.
    low, high, home (n_joints,) : [rad] or [mm].
    stiffness, stall (n_joints,) : [N·mm/rad] and [N·mm], or [N/mm] and [N] where the joint slides.
    """

    hand: Hand

    @cached_property
    def _joints(self) -> list[tuple[int, int]]:
        return [(f, j) for f, finger in enumerate(self.hand.fingers) for j in range(len(self.hand.chain_of(finger).joints))]

    def _per_joint(self, value: Callable[[Any, Servo], float]) -> Any:
        hand = self.hand
        joints = [hand.chain_of(hand.fingers[f]).joints[j] for f, j in self._joints]
        return _frozen([value(joint, hand.servos[joint.servo]) for joint in joints])

    @cached_property
    def n_fingers(self) -> int:
        return len(self.hand.fingers)

    @cached_property
    def n_joints(self) -> int:
        return len(self._joints)

    @cached_property
    def base_mm(self) -> Array:
        return _frozen([(finger.base_x_mm, finger.base_y_mm) for finger in self.hand.fingers])

    @cached_property
    def base_yaw_rad(self) -> Array:
        return _frozen([math.radians(finger.base_angle_deg) for finger in self.hand.fingers])

    @cached_property
    def first(self) -> NDArray[np.int64]:
        counts = [len(self.hand.chain_of(finger).joints) for finger in self.hand.fingers]
        return _frozen(np.concatenate([[0], np.cumsum(counts)]), np.int64)

    @cached_property
    def is_slide(self) -> NDArray[np.bool_]:
        return _frozen(self._per_joint(lambda joint, _: joint.kind == "prismatic"), np.bool_)

    @cached_property
    def link_mm(self) -> Array:
        return self._per_joint(lambda joint, _: joint.link_mm if joint.kind == "revolute" else 0.0)

    @cached_property
    def link_radius_mm(self) -> Array:
        return self._per_joint(lambda joint, _: joint.link_radius_mm)

    @cached_property
    def tip_radius_mm(self) -> Array:
        return _frozen([self.hand.chain_of(finger).tip_radius_mm for finger in self.hand.fingers])

    @cached_property
    def is_jaw(self) -> NDArray[np.bool_]:
        return _frozen([self.hand.chain_of(finger).contact == "jaw" for finger in self.hand.fingers], np.bool_)

    @cached_property
    def contact_back_mm(self) -> Array:
        chains = [self.hand.chain_of(finger) for finger in self.hand.fingers]
        return _frozen([chain.jaw_contact_mm if chain.contact == "jaw" else 0.0 for chain in chains])

    @cached_property
    def contact_radius_mm(self) -> Array:
        """From the centre of the contact (tip centre, or a point on a jaw's centre line) to its surface (n_fingers,)."""
        jaw_radius = self.link_radius_mm[self.first[1:] - 1]
        return _frozen(np.where(self.is_jaw, jaw_radius, self.tip_radius_mm))

    @cached_property
    def low(self) -> Array:
        return self._per_joint(lambda joint, _: joint.low)

    @cached_property
    def high(self) -> Array:
        return self._per_joint(lambda joint, _: joint.high)

    @cached_property
    def home(self) -> Array:
        return self._per_joint(lambda joint, _: joint.home)

    @cached_property
    def stiffness(self) -> Array:
        return self._per_joint(lambda joint, servo: servo.stiffness_nmm_per_rad / joint.per_horn_rad**2)

    @cached_property
    def stall(self) -> Array:
        return self._per_joint(lambda joint, servo: servo.stall_torque_nmm / joint.per_horn_rad)

    @cached_property
    def speed(self) -> Array:
        """No-load speed (n_joints,) [rad/s] or [mm/s]."""
        return self._per_joint(lambda joint, servo: math.radians(servo.speed_deg_per_s) * joint.per_horn_rad)

    @cached_property
    def arrays(self) -> HandArrays:
        """What kernels take."""
        return HandArrays(*(getattr(self, name) for name in HandArrays._fields))

    def joints_of(self, finger: int) -> slice:
        """Where a finger's joints stand in the hand's joint vector."""
        return slice(int(self.first[finger]), int(self.first[finger + 1]))


def centre_lines(model: HandModel, joints: Array) -> Array:
    """Link ends of every finger: (n_fingers, 4, 2) [mm], base first; shorter fingers repeat their tip."""
    lines: Array = centre_lines_kernel(model.arrays, joints)
    return lines


def link_yaws(model: HandModel, joints: Array) -> Array:
    """Direction of every link (n_joints,) [rad] in the hand frame."""
    turns = np.where(model.is_slide, 0.0, joints)
    sums = [np.cumsum(turns[model.joints_of(f)]) + model.base_yaw_rad[f] for f in range(model.n_fingers)]
    return np.concatenate(sums)


def contact_centres(model: HandModel, joints: Array) -> Array:
    """Centre of each finger's contact (n_fingers, 2) [mm]: its tip, or the contact point on a jaw's centre line."""
    centres: Array = _contact_centres(model.arrays, joints)
    return centres


def finger_jacobian(model: HandModel, finger: int, joints: Array, point_mm: Array) -> Array:
    """d point / d joints (2, n) of a point fixed to the last link of a finger, with the hand's joint vector (n_joints,)."""
    own = model.joints_of(finger)
    jacobian = np.empty((2, own.stop - own.start))
    line, yaws = centre_lines(model, joints)[finger], link_yaws(model, joints)[own]
    for j in range(own.stop - own.start):
        if model.is_slide[own.start + j]:
            jacobian[:, j] = math.cos(yaws[j]), math.sin(yaws[j])
        else:
            offset = point_mm - line[j]
            jacobian[:, j] = -offset[1], offset[0]
    return jacobian


def place_contact(model: HandModel, finger: int, centre_mm: Array, near: Array, jaw_yaw_rad: float | None = None) -> tuple[Array, float]:
    """Joint values of one finger that bring its contact centre to a point (inverse kinematics).

    Parameters
    ----------
    centre_mm : (2,) wanted contact centre in the hand frame.
    near : (n,) where the search starts; with more joints than needed the answer stays near it.
    jaw_yaw_rad : wanted direction of the last link; None where it does not matter.

    Returns
    -------
    joints (n,) within limits, and the distance left [mm] (direction errors weigh 40 mm/rad).

    Notes
    -----
    Levenberg–Marquardt with joint limits by projection; about 3 µs.
    """
    own = model.joints_of(finger)
    wanted = math.nan if jaw_yaw_rad is None else jaw_yaw_rad
    placed, left_mm = _place(
        model.base_mm[finger],
        model.base_yaw_rad[finger],
        model.is_slide[own],
        model.link_mm[own],
        model.low[own],
        model.high[own],
        model.contact_back_mm[finger],
        np.asarray(centre_mm, dtype=float),
        wanted,
        np.asarray(near, dtype=float),
    )
    return placed, float(left_mm)


def place_contacts(model: HandModel, centres_mm: Array, yaws_rad: Array, near: Array) -> tuple[Array, Array]:
    """Joint values (n_joints,) that bring every contact centre (n_fingers, 2) to its place, and the distances left (n_fingers,).

    `yaws_rad` (n_fingers,) are wanted directions of the last links, nan where they do not matter. See `place_contact`.
    """
    left_mm = np.empty(model.n_fingers)
    joints = place_all(model.arrays, centres_mm, yaws_rad, near, left_mm)
    return joints, left_mm


@njit(cache=True)
def centre_lines_kernel(hand: HandArrays, joints: Array) -> Array:
    """Kernel of `centre_lines`."""
    n_fingers = hand.base_mm.shape[0]
    lines = np.empty((n_fingers, MAX_LINKS + 1, 2))
    for f in range(n_fingers):
        x, y, yaw = hand.base_mm[f, 0], hand.base_mm[f, 1], hand.base_yaw_rad[f]
        lines[f, 0, 0], lines[f, 0, 1] = x, y
        n = hand.first[f + 1] - hand.first[f]
        for j in range(MAX_LINKS):
            if j < n:
                k = hand.first[f] + j
                length = joints[k] if hand.is_slide[k] else hand.link_mm[k]
                if not hand.is_slide[k]:
                    yaw += joints[k]
                x += length * math.cos(yaw)
                y += length * math.sin(yaw)
            lines[f, j + 1, 0], lines[f, j + 1, 1] = x, y
    return lines


@njit(cache=True)
def _contact_centres(hand: HandArrays, joints: Array) -> Array:
    lines = centre_lines_kernel(hand, joints)
    centres = np.empty((lines.shape[0], 2))
    for f in range(lines.shape[0]):
        yaw = hand.base_yaw_rad[f]
        for k in range(hand.first[f], hand.first[f + 1]):
            yaw += 0.0 if hand.is_slide[k] else joints[k]
        back = hand.contact_back_mm[f]
        centres[f, 0] = lines[f, MAX_LINKS, 0] - back * math.cos(yaw)
        centres[f, 1] = lines[f, MAX_LINKS, 1] - back * math.sin(yaw)
    return centres


@njit(cache=True)
def _place(
    base: Array,
    base_yaw: float,
    is_slide: NDArray[np.bool_],
    link: Array,
    low: Array,
    high: Array,
    back: float,
    target: Array,
    wanted_yaw: float,
    near: Array,
) -> tuple[Array, float]:
    n = near.shape[0]
    q = np.minimum(np.maximum(near, low), high)
    residual, jacobian = np.empty(3), np.empty((3, MAX_LINKS))
    trial, trial_residual, trial_jacobian = np.empty(n), np.empty(3), np.empty((3, MAX_LINKS))
    gradient, normal, step = np.empty(MAX_LINKS), np.empty((MAX_LINKS, MAX_LINKS)), np.empty(MAX_LINKS)
    cost = _residual(base, base_yaw, is_slide, link, back, target, wanted_yaw, q, residual, jacobian)
    damping = 1e-4
    for _ in range(60):
        if cost < 1e-12:
            break
        _normal_equations(jacobian, residual, n, normal, gradient)
        for j in range(n):
            normal[j, j] += damping * (normal[j, j] + 1e-9)
            if (q[j] <= low[j] and gradient[j] > 0.0) or (q[j] >= high[j] and gradient[j] < 0.0):
                gradient[j] = 0.0  # a joint on its limit that would move beyond it stays there
                for i in range(MAX_LINKS):
                    normal[i, j] = normal[j, i] = 0.0
                normal[j, j] = 1.0
        _solve3(normal, gradient, step)
        for j in range(n):
            trial[j] = min(max(q[j] - step[j], low[j]), high[j])
        trial_cost = _residual(base, base_yaw, is_slide, link, back, target, wanted_yaw, trial, trial_residual, trial_jacobian)
        if trial_cost < cost:
            gain = cost - trial_cost
            q[:], residual[:], jacobian[:] = trial, trial_residual, trial_jacobian
            cost = trial_cost
            damping = max(damping * 0.1, 1e-12)
            if gain < 1e-10 * cost:
                break
        else:
            damping = max(damping * 10.0, 1e-6)
            if damping > 1e10:
                break
    return q, math.sqrt(cost)


@njit(cache=True)
def _residual(
    base: Array,
    base_yaw: float,
    is_slide: NDArray[np.bool_],
    link: Array,
    back: float,
    target: Array,
    wanted_yaw: float,
    q: Array,
    residual: Array,
    jacobian: Array,
) -> float:
    """Contact error and its Jacobian (row 2: direction, weighed by ARM_MM; 0 where it does not matter); returns |error|²."""
    n = q.shape[0]
    x, y, yaw = base[0], base[1], base_yaw
    for j in range(n):
        jacobian[0, j], jacobian[1, j] = x, y  # where the joint stands, until the contact is known
        if not is_slide[j]:
            yaw += q[j]
        jacobian[2, j] = yaw
        length = q[j] if is_slide[j] else link[j]
        x += length * math.cos(yaw)
        y += length * math.sin(yaw)
    x -= back * math.cos(yaw)
    y -= back * math.sin(yaw)
    residual[0], residual[1], residual[2] = x - target[0], y - target[1], 0.0
    use_yaw = not math.isnan(wanted_yaw)
    if use_yaw:
        residual[2] = ARM_MM * (math.pi - (math.pi - (yaw - wanted_yaw)) % (2.0 * math.pi))
    for j in range(n):
        if is_slide[j]:
            direction = jacobian[2, j]
            jacobian[0, j], jacobian[1, j], jacobian[2, j] = math.cos(direction), math.sin(direction), 0.0
        else:
            jacobian[0, j], jacobian[1, j] = -(y - jacobian[1, j]), x - jacobian[0, j]
            jacobian[2, j] = ARM_MM if use_yaw else 0.0
    return residual[0] ** 2 + residual[1] ** 2 + residual[2] ** 2


@njit(cache=True)
def _normal_equations(jacobian: Array, residual: Array, n: int, normal: Array, gradient: Array) -> None:
    """JᵀJ and Jᵀr, padded to 3 with the identity."""
    for i in range(MAX_LINKS):
        gradient[i] = 0.0
        for j in range(MAX_LINKS):
            normal[i, j] = 1.0 if i == j else 0.0
    for i in range(n):
        gradient[i] = jacobian[0, i] * residual[0] + jacobian[1, i] * residual[1] + jacobian[2, i] * residual[2]
        for j in range(n):
            normal[i, j] = jacobian[0, i] * jacobian[0, j] + jacobian[1, i] * jacobian[1, j] + jacobian[2, i] * jacobian[2, j]


@njit(cache=True)
def _solve3(a: Array, b: Array, x: Array) -> None:
    """a x = b for a symmetric positive definite (3, 3), by cofactors."""
    c00 = a[1, 1] * a[2, 2] - a[1, 2] * a[2, 1]
    c01 = a[0, 2] * a[2, 1] - a[0, 1] * a[2, 2]
    c02 = a[0, 1] * a[1, 2] - a[0, 2] * a[1, 1]
    det = a[0, 0] * c00 + a[1, 0] * c01 + a[2, 0] * c02
    c11, c12 = a[0, 0] * a[2, 2] - a[0, 2] * a[2, 0], a[0, 2] * a[1, 0] - a[0, 0] * a[1, 2]
    c22 = a[0, 0] * a[1, 1] - a[0, 1] * a[1, 0]
    x[0] = (c00 * b[0] + c01 * b[1] + c02 * b[2]) / det
    x[1] = (c01 * b[0] + c11 * b[1] + c12 * b[2]) / det
    x[2] = (c02 * b[0] + c12 * b[1] + c22 * b[2]) / det


@njit(cache=True)
def place_all(hand: HandArrays, centres_mm: Array, yaws_rad: Array, near: Array, left_mm: Array) -> Array:
    """Kernel of `place_contacts`; `left_mm` (n_fingers,) receives the distances left."""
    joints = np.empty(near.shape[0])
    for f in range(hand.base_mm.shape[0]):
        a, b = hand.first[f], hand.first[f + 1]
        joints[a:b], left_mm[f] = _place(
            hand.base_mm[f],
            hand.base_yaw_rad[f],
            hand.is_slide[a:b],
            hand.link_mm[a:b],
            hand.low[a:b],
            hand.high[a:b],
            hand.contact_back_mm[f],
            centres_mm[f],
            yaws_rad[f],
            near[a:b],
        )
    return joints
