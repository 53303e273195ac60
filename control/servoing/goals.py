"""What can be asked of the loop, and how a goal ends."""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum

from hw_profiles.errors import CommandError
from hw_profiles.geometry import Pose2


class Kind(StrEnum):
    """Which coordinates of the part a goal fixes."""

    POSITION = "position"  # x, y; the angle is free
    ANGLE = "angle"  # the angle; x, y stay where they are
    POSE = "pose"  # x, y and angle
    TURN = "turn"  # by so much about the centre; may be more than one revolution


@dataclass(frozen=True, slots=True)
class Goal:
    """Where the part shall be, how closely, and for how long.

    `pose` is hand_from_part; what `kind` leaves free is ignored. A turn takes its yaw as the signed amount, not wrapped.
    """

    id: str
    kind: Kind
    pose: Pose2
    tolerance_mm: float = 1.0
    tolerance_rad: float = math.radians(2.0)
    hold_s: float = 0.5
    timeout_s: float = 15.0

    def __post_init__(self) -> None:
        limits = {
            "tolerance_mm": (self.tolerance_mm, 0.01, 50.0),
            "tolerance_deg": (math.degrees(self.tolerance_rad), 0.01, 180.0),
            "hold_s": (self.hold_s, 0.0, 3600.0),
            "timeout_s": (self.timeout_s, 0.1, 3600.0),
            "x_mm": (self.pose.x_mm, -1000.0, 1000.0),
            "y_mm": (self.pose.y_mm, -1000.0, 1000.0),
            "angle_deg": (math.degrees(self.pose.yaw_rad), -36000.0, 36000.0),
        }
        for name, (value, low, high) in limits.items():
            if not low <= value <= high:  # also refuses nan
                raise CommandError(f"goal {name} {value:g}: allowed {low:g} … {high:g}")


class Ending(StrEnum):
    """How a goal ended."""

    REACHED = "reached"
    TIMED_OUT = "timed_out"
    CANCELLED = "cancelled"
    UNREACHABLE = "unreachable"
    FAULTED = "faulted"


@dataclass(frozen=True, slots=True)
class Outcome:
    """The end of a goal, in words that a bench engineer can act on.

    error_mm, error_rad : what was left by the camera's measure; nan where nothing was seen or the goal leaves it free.
    nearest : for `unreachable`, the nearest pose that this hand can hold this part at.
    """

    goal_id: str
    ending: Ending
    reason: str
    error_mm: float = math.nan
    error_rad: float = math.nan
    nearest: Pose2 | None = None


@dataclass(frozen=True, slots=True)
class Arm:
    """Switch pulses on and move to the loose cage."""


@dataclass(frozen=True, slots=True)
class Disarm:
    """Switch pulses off."""


@dataclass(frozen=True, slots=True)
class Stop:
    """Latch: pulses off until a reset. A software stop; not an emergency stop."""

    reason: str = "stop was asked for"


@dataclass(frozen=True, slots=True)
class Reset:
    """Leave `stopped` or `faulted` for `disarmed`; never starts motion."""


@dataclass(frozen=True, slots=True)
class GoTo:
    """Begin a goal; one that is under way is cancelled."""

    goal: Goal


@dataclass(frozen=True, slots=True)
class Cancel:
    """End the goal under way; the part is held where it is."""


@dataclass(frozen=True, slots=True)
class Nudge:
    """Move the part by hand: a step from where it is now [mm, mm, rad in the hand frame]."""

    dx_mm: float
    dy_mm: float
    dyaw_rad: float


@dataclass(frozen=True, slots=True)
class Blend:
    """Drive by weights over named primitives (manual); they are normalised to sum 1."""

    weights: tuple[tuple[str, float], ...]


Request = Arm | Disarm | Stop | Reset | GoTo | Cancel | Nudge | Blend
