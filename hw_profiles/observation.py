"""What vision tells control about one frame."""

from __future__ import annotations

from dataclasses import dataclass

from hw_profiles.geometry import Array, Pose2


@dataclass(frozen=True, slots=True, eq=False)
class PartPose:
    """The part's pose as one frame shows it, and as the pose filter believes it to be at that same instant.

    Attributes
    ----------
    measured : hand_from_part from this frame alone: what accuracy is reported with.
    filtered : hand_from_part of the pose filter at the time of capture.
    twist : (3,) velocity of the filter: mm/s, mm/s, rad/s in the hand frame. Prediction: filtered + twist · age.
    covariance : (3, 3) covariance of `measured`: mm², mm·rad, rad².
    """

    measured: Pose2
    filtered: Pose2
    twist: Array
    covariance: Array

    def predicted(self, ahead_s: float) -> Pose2:
        """Where the part is expected `ahead_s` seconds after capture (constant velocity)."""
        x_mm, y_mm, yaw_rad = self.filtered.as_array() + self.twist * ahead_s
        return Pose2(float(x_mm), float(y_mm), float(yaw_rad))


@dataclass(frozen=True, slots=True)
class NoPose:
    """Why a frame gave no pose; a short sentence that a bench engineer can act on."""

    reason: str


@dataclass(frozen=True, slots=True, eq=False)
class Observation:
    """One camera frame as control sees it: when the middle of its exposure was (monotonic clock), and what it showed."""

    captured_at_us: int
    sight: PartPose | NoPose
