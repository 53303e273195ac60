"""Bodies of the HTTP API: strict, no unknown keys, no nan or inf; lengths in mm, angles in deg, times in s."""

from __future__ import annotations

import math
from typing import Literal

from pydantic import Field, model_validator

from control.servoing.goals import Goal, Kind
from hw_profiles.base import Profile, refuse
from hw_profiles.geometry import Pose2

NEEDED = {"position": ("x_mm", "y_mm"), "angle": ("angle_deg",), "pose": ("x_mm", "y_mm", "angle_deg"), "turn": ("angle_deg",)}


class GoalBody(Profile):
    """A goal: where the part shall be, how closely, and for how long."""

    kind: Literal["position", "angle", "pose", "turn"] = "pose"
    x_mm: float | None = Field(default=None, ge=-1000, le=1000)
    y_mm: float | None = Field(default=None, ge=-1000, le=1000)
    angle_deg: float | None = Field(default=None, ge=-36000, le=36000)
    tolerance_mm: float = Field(default=1.0, ge=0.01, le=50)
    tolerance_deg: float = Field(default=2.0, ge=0.01, le=180)
    hold_s: float = Field(default=0.5, ge=0, le=3600)
    timeout_s: float = Field(default=20.0, ge=0.1, le=3600)

    @model_validator(mode="after")
    def _has_what_its_kind_needs(self) -> GoalBody:
        missing = [key for key in NEEDED[self.kind] if getattr(self, key) is None]
        if missing:
            raise refuse(f"{', '.join(missing)} missing; a goal of kind {self.kind} needs {', '.join(NEEDED[self.kind])}")
        return self

    def goal(self, goal_id: str) -> Goal:
        """As the loop takes it."""
        pose = Pose2(self.x_mm or 0.0, self.y_mm or 0.0, math.radians(self.angle_deg or 0.0))
        return Goal(goal_id, Kind(self.kind), pose, self.tolerance_mm, math.radians(self.tolerance_deg), self.hold_s, self.timeout_s)


class NudgeBody(Profile):
    """A step of the part from where it is."""

    dx_mm: float = Field(default=0.0, ge=-50, le=50)
    dy_mm: float = Field(default=0.0, ge=-50, le=50)
    dangle_deg: float = Field(default=0.0, ge=-90, le=90)
