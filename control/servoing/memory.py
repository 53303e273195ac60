"""What the loop remembers from tick to tick: plain frozen values, so that a recorded run can be shown to it again."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace

import numpy as np

from control.grasping.library import Option
from control.grasping.roadmap import Remaining
from control.grasping.transfer import Path
from control.servoing.carry import Carry
from control.servoing.goals import Goal
from control.servoing.states import State
from hw_profiles.geometry import Array, Pose2
from hw_profiles.observation import PartPose


@dataclass(frozen=True, slots=True)
class Still:
    """The last posture is held."""


@dataclass(frozen=True, slots=True, eq=False)
class Seek:
    """Looking for a clear way into one of these grasps, one way a tick, the most promising grasp first."""

    options: tuple[Option, ...]
    held: Carry | None
    n_tried: int = 0


@dataclass(frozen=True, slots=True, eq=False)
class Follow:
    """Moving the fingers along a path while the part lies still; then the option holds the part (None: just stop there)."""

    path: Path
    started_us: int
    option: Option | None


Motion = Still | Seek | Follow | Carry


@dataclass(frozen=True, slots=True, eq=False)
class Sight:
    """The part as last seen; yaw is unwrapped over the run.

    measured, filtered : (3,) hand_from_part by one frame and by the filter; twist (3,) per second.
    frame_at_us : newest frame, whether or not it showed the part. lost_since_us, lost_why : while frames do not show it.
    """

    captured_at_us: int
    measured: Array
    filtered: Array
    twist: Array
    frame_at_us: int
    lost_since_us: int | None = None
    lost_why: str = ""

    def predicted(self, at_us: int) -> Array:
        """Expected pose (3,) at a time, by constant velocity for at most 0.15 s."""
        return self.filtered + self.twist * min((at_us - self.captured_at_us) * 1e-6, 0.15)

    def pose(self, at_us: int) -> Pose2:
        """Expected pose at a time, yaw wrapped."""
        x_mm, y_mm, yaw = self.predicted(at_us)
        return Pose2(float(x_mm), float(y_mm), math.remainder(yaw, 2.0 * math.pi))


def seen(previous: Sight | None, part: PartPose, captured_at_us: int) -> Sight:
    """The sight after a frame that shows the part; yaw continues from the previous one."""
    near = part.measured.yaw_rad if previous is None else previous.measured[2]
    measured, filtered = part.measured.as_array(), part.filtered.as_array()
    for pose in (measured, filtered):
        pose[2] = near + math.remainder(pose[2] - near, 2.0 * math.pi)
    return Sight(captured_at_us, measured, filtered, part.twist, captured_at_us)


def unseen(previous: Sight, captured_at_us: int, why: str) -> Sight:
    """The sight after a frame that does not show the part."""
    since = previous.lost_since_us if previous.lost_since_us is not None else captured_at_us
    return replace(previous, frame_at_us=captured_at_us, lost_since_us=since, lost_why=why)


@dataclass(frozen=True, slots=True, eq=False)
class Task:
    """A goal under way.

    target : (3,) where the part shall be, yaw unwrapped; nan where the goal leaves it free.
    guide : (3,) the same with the free coordinates kept where they were at the start.
    remaining : time to the target from everywhere, where the part's angle and the grasp's belong together.
    blocked : cells of the roadmap at which no change of grasp worked out.
    within_since_us : since when the part has been within tolerance. n_regrasps : to notice a lack of progress.
    """

    goal: Goal
    started_us: int
    target: Array
    guide: Array
    remaining: Remaining | None = None
    blocked: frozenset[int] = frozenset()
    within_since_us: int | None = None
    n_regrasps: int = 0

    def error(self, part: Array) -> tuple[float, float]:
        """Distance [mm] and signed angle [rad] left to the target; nan where the goal leaves it free."""
        left = self.target - part
        return float(np.hypot(left[0], left[1])), float(left[2])

    def is_met(self, part: Array) -> bool:
        """Whether a part pose (3,) is within tolerance."""
        error_mm, error_rad = self.error(part)
        return not error_mm > self.goal.tolerance_mm and not abs(error_rad) > self.goal.tolerance_rad


@dataclass(frozen=True, slots=True, eq=False)
class Memory:
    """Everything a tick carries over.

    joints : commanded (n_joints,), None until the first arming. weights : (name, weight) of the last blend.
    """

    now_us: int = 0
    state: State = State.DISARMED
    why: str = "not armed yet"
    faults: tuple[str, ...] = ()
    armed_at_us: int = 0
    joints: Array | None = None
    motion: Motion = field(default_factory=Still)
    task: Task | None = None
    sight: Sight | None = None
    weights: tuple[tuple[str, float], ...] = ()
