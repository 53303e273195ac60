"""Bodies that the HTTP API takes: strict, no unknown keys, no nan or inf; lengths in mm, angles in deg, times in s."""

from __future__ import annotations

import math
from typing import Annotated, Literal

from pydantic import ConfigDict, Field, StringConstraints, model_validator

from control.servoing.goals import Blend, Goal, Kind, Nudge
from hw_profiles.base import Profile, refuse
from hw_profiles.geometry import Pose2

GoalKind = Literal["position", "angle", "pose", "turn"]
NEEDED = {"position": ("x_mm", "y_mm"), "angle": ("angle_deg",), "pose": ("x_mm", "y_mm", "angle_deg"), "turn": ("angle_deg",)}
PrimitiveName = Annotated[str, StringConstraints(min_length=1, max_length=60)]


class GoalBody(Profile):
    """A goal: where the part shall be, how closely, and for how long.

    A `position` leaves the angle free, an `angle` the place; a `turn` is by so much from where the part is, also more than once round.
    """

    model_config = ConfigDict(
        json_schema_extra={
            "examples": [
                {"kind": "pose", "x_mm": 12.0, "y_mm": -8.0, "angle_deg": 90.0},
                {"kind": "turn", "angle_deg": 360.0, "timeout_s": 60.0},
            ]
        }
    )

    kind: GoalKind = "pose"
    x_mm: float | None = Field(default=None, ge=-1000, le=1000)
    y_mm: float | None = Field(default=None, ge=-1000, le=1000)
    angle_deg: float | None = Field(default=None, ge=-36000, le=36000)
    tolerance_mm: float = Field(default=1.0, ge=0.01, le=50)
    tolerance_deg: float = Field(default=2.0, ge=0.01, le=180)
    hold_s: float = Field(default=0.5, ge=0, le=3600, description="how long it must stay within tolerance to count as reached")
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
    """A step of the part from where it is, or from where the last goal wants it."""

    model_config = ConfigDict(json_schema_extra={"examples": [{"dx_mm": 1.0}, {"dangle_deg": -5.0}]})

    dx_mm: float = Field(default=0.0, ge=-50, le=50)
    dy_mm: float = Field(default=0.0, ge=-50, le=50)
    dangle_deg: float = Field(default=0.0, ge=-90, le=90)

    def request(self) -> Nudge:
        """As the loop takes it."""
        return Nudge(self.dx_mm, self.dy_mm, math.radians(self.dangle_deg))


class BlendBody(Profile):
    """Weights by primitive; they are scaled to sum to 1. GET /v1/blend names the primitives there are now."""

    model_config = ConfigDict(json_schema_extra={"examples": [{"weights": {"tight +0 +0 -15": 1.0, "loose +0 +0 -15": 0.5}}]})

    weights: dict[PrimitiveName, Annotated[float, Field(ge=0, le=1e6)]] = Field(min_length=1, max_length=64)

    def request(self) -> Blend:
        """As the loop takes it."""
        return Blend(tuple(self.weights.items()))


class PushBody(Profile):
    """A push of the simulated part."""

    model_config = ConfigDict(json_schema_extra={"examples": [{"x_ns": 0.05, "y_ns": 0.0}]})

    x_ns: float = Field(default=0.0, ge=-1, le=1, description="impulse [N·s]")
    y_ns: float = Field(default=0.0, ge=-1, le=1, description="impulse [N·s]")
