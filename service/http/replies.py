"""What the HTTP API gives back. These types document and check it; the state itself is passed on as the loop wrote it."""

from __future__ import annotations

from typing import Any, Literal

from pydantic import BaseModel, ConfigDict

from service.http.models import GoalKind

StateName = Literal["disarmed", "ready", "servoing", "holding", "stopped", "faulted"]
OutcomeName = Literal["reached", "timed_out", "cancelled", "unreachable", "faulted"]
Point = tuple[float, float]


class Reply(BaseModel):
    """Base of what is given back."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class PoseReply(Reply):
    """Of the part in the hand frame."""

    x_mm: float
    y_mm: float
    angle_deg: float


class AskedGoal(PoseReply):
    """A goal as it was asked; what its kind leaves free is 0."""

    id: str
    kind: GoalKind
    tolerance_mm: float
    tolerance_deg: float
    hold_s: float
    timeout_s: float


class Ended(Reply):
    """How a goal ended. Errors are by the camera; null where nothing was seen or the goal leaves it free.

    nearest : for `unreachable`, the nearest pose that can be held. number : counts the endings of this run.
    """

    outcome: OutcomeName
    reason: str
    error_mm: float | None
    error_deg: float | None
    nearest: PoseReply | None
    ended_at_us: int
    number: int


class GoalReply(AskedGoal):
    """A goal, and how it ended if it has. Times are of the machine's monotonic clock."""

    began_at_us: int
    ended: Ended | None


class GoalsReply(Reply):
    """The latest goals, oldest first."""

    goals: list[GoalReply]


class CageReply(Reply):
    """What the ring of fingers says: `is_caged` false means "not shown", not "escapes". Gaps go from each finger to the next."""

    is_caged: bool
    margin_mm: float | None
    gaps_mm: list[float | None]


class BoardReply(Reply):
    """What the servo board last said of itself."""

    silent_ms: float | None
    watchdog_latched: bool
    supply_v: float | None
    temperature_c: float | None


class LoopReply(Reply):
    """How the loop keeps its time: from a frame in memory to its command on the line, over the last 500 steps."""

    n_ticks: int
    busy_ms_p50: float
    busy_ms_p99: float
    busy_ms_max: float
    scheduling: str
    pid: int


class StateReply(Reply):
    """What the loop is doing, and why.

    pose : as predicted for now; measured : as the newest frame shows it; both null while the part is not seen. goal : under way or held.
    error_* : from the part to the goal. weights : of the present blend; primitives : that a blend may use now. fingers_mm, bridges_mm :
    for drawing, in the hand frame. cage : of the commanded posture about the part.
    """

    at_us: int
    state: StateName
    phase: str
    why: str
    faults: list[str]
    pose: PoseReply | None
    measured: PoseReply | None
    frame_age_ms: float | None
    frame_at_us: int | None
    goal: AskedGoal | None
    error_mm: float | None
    error_deg: float | None
    weights: dict[str, float]
    primitives: list[str]
    joints: list[float] | None
    cage: CageReply | None
    board: BoardReply | None
    fingers_mm: list[list[Point]]
    bridges_mm: list[list[Point] | None]
    loop: LoopReply
    n_refusals: int
    n_by_outcome: dict[OutcomeName, int]


class Done(Reply):
    """The state after a request was taken."""

    state: StateName


class Armed(Done):
    """The state after arming, and what to be careful of from now on."""

    cautions: list[str]


class StopReply(Reply):
    """latched : the loop has said so; false: it will at its next step. note : what this stop is not."""

    latched: bool
    note: str


class Nudged(Done):
    """The goal that the nudge made."""

    goal: AskedGoal | None


class BlendReply(Reply):
    """Primitives that a blend may use now (none while nothing is grasped), and the present weights."""

    primitives: list[str]
    weights: dict[str, float]


class Health(Reply):
    """Every process lives and the loop is heard."""

    status: Literal["ok"]


class View(Reply):
    """The camera as geometry, for drawing on its picture.

    lens : fx, fy, cx, cy [px], k1, k2, p1, p2, k3. motion : (3, 4) from the hand frame to the camera frame [mm].
    """

    width_px: int
    height_px: int
    lens: list[float]
    motion: list[list[float]]
    part_height_mm: float
    part_outline_mm: list[Point]
    part_radius_mm: float


class RigReply(Reply):
    """The rig: facts for people, the checked profile, and what to be careful of."""

    name: str
    is_simulated: bool
    facts: dict[str, Any]
    profile: dict[str, Any]
    view: View
    cautions: list[str]


class ProblemReply(BaseModel):
    """RFC 9457 problem details."""

    type: str
    title: str
    status: int
    detail: str
    instance: str
