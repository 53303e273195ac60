"""What a trial shall do, and the goals it draws."""

from __future__ import annotations

import math
from typing import Literal

import numpy as np
from pydantic import Field

from control.grasping.library import Library
from control.grasping.reach import PITCH, Reach
from control.servoing.goals import Goal, Kind
from hw_profiles.base import Positive, Profile
from hw_profiles.geometry import Array, Pose2

TWIST_RAD = math.radians(30.0)  # goals of kind angle lie this near to where the part is


class TrialSpec(Profile):
    """A trial: so many goals of one kind, each repeated."""

    kind: Literal["position", "angle", "pose", "turn"] = "pose"
    goals: int = Field(default=20, ge=1, le=100_000)
    repeats: int = Field(default=1, ge=1, le=10_000)
    tolerance_mm: Positive = Field(default=1.0, le=50.0)
    tolerance_deg: Positive = Field(default=2.0, le=180.0)
    hold_s: float = Field(default=0.5, ge=0.0, le=60.0)
    timeout_s: Positive = Field(default=20.0, le=3600.0)
    seed: int = Field(default=0, ge=0)


def draw_goal(spec: TrialSpec, index: int, library: Library, part: Pose2, rng: np.random.Generator) -> Goal:
    """The next goal of a trial, drawn evenly over what the hand can hold; `part` is where the part is now."""
    kind = Kind(spec.kind)
    pose = _drawn_pose(library, rng)
    if kind is Kind.ANGLE:
        pose = _near_angle(library, part, rng)
    elif kind is Kind.TURN:
        pose = Pose2(0.0, 0.0, 2.0 * math.pi * (1.0 if index % 2 == 0 else -1.0))
    tolerance_rad = math.radians(spec.tolerance_deg)
    return Goal(f"{kind}-{index + 1}", kind, pose, spec.tolerance_mm, tolerance_rad, spec.hold_s, spec.timeout_s)


def _near_angle(library: Library, part: Pose2, rng: np.random.Generator) -> Pose2:
    """An angle within the twist, one that can be held here if any can."""
    for _ in range(50):
        turned = Pose2(part.x_mm, part.y_mm, part.yaw_rad + rng.uniform(-TWIST_RAD, TWIST_RAD))
        if library.can_hold(turned):
            return turned
    return part


def _drawn_pose(library: Library, rng: np.random.Generator) -> Pose2:
    """A pose drawn evenly over the union of the grasps' reaches."""
    corners, reaches = _held_cells(library)
    while True:
        k = int(rng.integers(len(corners)))
        x_mm, y_mm, yaw = corners[k] + PITCH * rng.uniform(size=3)
        angle = rng.uniform(-math.pi, math.pi) if library.is_round else math.remainder(float(yaw), 2.0 * math.pi)
        pose = Pose2(float(x_mm), float(y_mm), angle)
        # A pose that several reaches cover would be drawn several times as often.
        n_covering = sum(reach.holds(np.array([x_mm, y_mm, reach.yaw_near(float(yaw))])) for reach in reaches)
        if rng.uniform() * n_covering <= 1.0:
            return pose


def _held_cells(library: Library) -> tuple[Array, tuple[Reach, ...]]:
    corners = [reach.origin + PITCH * np.argwhere(reach.held) for reach in library.reaches]
    return np.concatenate(corners), library.reaches
