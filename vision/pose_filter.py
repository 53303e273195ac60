"""Constant-velocity Kalman filter of a planar pose, with a chi-square gate.

State: x, y [mm], yaw [rad, unwrapped], and their rates. Process: white-noise acceleration (Bar-Shalom, Li & Kirubarajan, Estimation
with Applications to Tracking and Navigation, ch. 6.2). Time comes from the frames, so dropped frames and jitter need no care.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit

from hw_profiles.geometry import Array, Pose2, wrap_angle

GATE = 21.108  # chi-square of 3 degrees of freedom, 99.99 %
MOVE_NOISE = 4.5e4  # mm²/s³: a part that reaches 60 mm/s within two frames of 20 ms
TURN_NOISE = 54.0  # rad²/s³: 120 °/s within two frames
COAST_US = 400_000  # a prediction farther than this is no place to look
START_RATES = np.array([60.0, 60.0, 2.1]) ** 2


@dataclass(frozen=True, slots=True, eq=False)
class Belief:
    """Mean (6,) and covariance (6, 6) of pose and rates at an instant; arrays are not written to."""

    at_us: int
    mean: Array
    covariance: Array

    @property
    def pose(self) -> Pose2:
        return Pose2(float(self.mean[0]), float(self.mean[1]), wrap_angle(float(self.mean[2])))

    @property
    def twist(self) -> Array:
        """(3,) mm/s, mm/s, rad/s."""
        return self.mean[3:]


def begin(at_us: int, pose: Pose2, covariance: Array) -> Belief:
    """Belief from a first measured pose, at rest as far as is known."""
    whole = np.zeros((6, 6))
    whole[:3, :3], whole[3:, 3:] = covariance, np.diag(START_RATES)
    return Belief(at_us, np.concatenate([pose.as_array(), np.zeros(3)]), whole)


def transition(dt_s: float) -> tuple[Array, Array]:
    """Transition (6, 6) and process noise (6, 6) over dt_s: Q = q [[dt³/3, dt²/2], [dt²/2, dt]] per axis."""
    step, noise = _transition(dt_s)
    return step, noise


def predict(belief: Belief, at_us: int) -> Belief:
    """The belief carried to another instant (not earlier)."""
    mean, covariance = _carry(belief.mean, belief.covariance, max(at_us - belief.at_us, 0) * 1e-6)
    return Belief(at_us, mean, covariance)


def surprise(belief: Belief, pose: Pose2, covariance: Array) -> float:
    """Squared Mahalanobis distance of a measured pose from a belief at the same instant."""
    return float(_distance(belief.mean, belief.covariance, pose.x_mm, pose.y_mm, pose.yaw_rad, covariance))


def update(belief: Belief, pose: Pose2, covariance: Array) -> Belief:
    """The belief after a pose measured at the same instant (Kalman 1960; Joseph's form keeps it positive definite)."""
    mean, after = _weigh(belief.mean, belief.covariance, pose.x_mm, pose.y_mm, pose.yaw_rad, covariance)
    return Belief(belief.at_us, mean, after)


def recall(belief: Belief | None, at_us: int) -> Belief | None:
    """The belief carried to a frame's time; None where it is too old to tell where to look, or from after that time."""
    if belief is None or not 0 <= at_us - belief.at_us <= COAST_US:
        return None
    return predict(belief, at_us)


def join(expected: Belief | None, at_us: int, pose: Pose2, covariance: Array) -> Belief:
    """The belief after a pose that is known to be right: an update, or a new beginning where nothing like it was expected."""
    if expected is None or surprise(expected, pose, covariance) > GATE:
        return begin(at_us, pose, covariance)
    return update(expected, pose, covariance)


@njit(cache=True)
def _transition(dt_s: float) -> tuple[Array, Array]:
    step, noise = np.eye(6), np.zeros((6, 6))
    for axis in range(3):
        q = MOVE_NOISE if axis < 2 else TURN_NOISE
        step[axis, axis + 3] = dt_s
        noise[axis, axis] = q * dt_s**3 / 3.0
        noise[axis, axis + 3] = noise[axis + 3, axis] = q * dt_s**2 / 2.0
        noise[axis + 3, axis + 3] = q * dt_s
    return step, noise


@njit(cache=True)
def _carry(mean: Array, covariance: Array, dt_s: float) -> tuple[Array, Array]:
    step, noise = _transition(dt_s)
    return step @ mean, step @ covariance @ step.T + noise


@njit(cache=True)
def _innovation(mean: Array, x_mm: float, y_mm: float, yaw_rad: float) -> Array:
    turn = yaw_rad - mean[2]
    return np.array([x_mm - mean[0], y_mm - mean[1], math.pi - (math.pi - turn) % (2.0 * math.pi)])


@njit(cache=True)
def _distance(mean: Array, covariance: Array, x_mm: float, y_mm: float, yaw_rad: float, noise: Array) -> float:
    off = _innovation(mean, x_mm, y_mm, yaw_rad)
    return float(off @ np.linalg.solve(covariance[:3, :3] + noise, off))


@njit(cache=True)
def _weigh(mean: Array, covariance: Array, x_mm: float, y_mm: float, yaw_rad: float, noise: Array) -> tuple[Array, Array]:
    gain = np.ascontiguousarray(np.linalg.solve(covariance[:3, :3] + noise, np.ascontiguousarray(covariance[:3, :])).T)
    keep = np.eye(6)
    keep[:, :3] -= gain
    after = keep @ covariance @ np.ascontiguousarray(keep.T) + gain @ noise @ np.ascontiguousarray(gain.T)
    return mean + gain @ _innovation(mean, x_mm, y_mm, yaw_rad), after
