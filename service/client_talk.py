"""What a robot script says to `palmloop serve` and what comes back, without any input or output: each conversation is a generator that
yields calls and is sent their replies, so that the client that blocks and the one that awaits share every word.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Generator
from dataclasses import dataclass, field
from typing import Any, TypeVar

from hw_profiles.errors import PalmloopError

WAIT_S = 0.25  # a goal is asked after so often, and its progress told


class ClientError(PalmloopError):
    """Base of what a client raises.

    ClientError
    ├─ NoAnswer         the server cannot be reached, or does not answer in time
    ├─ Refused          the server says no: `status` and why
    └─ NotReached       a goal ended in another way: `outcome`, `nearest`
       └─ HandFault     … because the loop has faulted or was stopped: reset and arm before going on
    """


class NoAnswer(ClientError):
    """The server cannot be reached, or does not answer in time."""


class Refused(ClientError):
    """The server says no; the message is its own."""

    def __init__(self, status: int, detail: str) -> None:
        super().__init__(detail)
        self.status = status


@dataclass(frozen=True, slots=True)
class PartPose:
    """Where a part is in the hand frame."""

    x_mm: float
    y_mm: float
    angle_deg: float


class NotReached(ClientError):
    """A goal that was not reached; `nearest` for one that is unreachable."""

    def __init__(self, goal_id: str, outcome: str, reason: str, nearest: PartPose | None) -> None:
        super().__init__(f"goal {goal_id} {outcome.replace('_', ' ')}: {reason.removeprefix(f'goal {goal_id}: ')}")
        self.outcome, self.nearest = outcome, nearest


class HandFault(NotReached):
    """The goal ended because the loop faulted or was stopped."""


@dataclass(frozen=True, slots=True)
class Reached:
    """A goal that was reached; errors by the camera, None where the goal leaves it free."""

    goal_id: str
    error_mm: float | None
    error_deg: float | None
    took_s: float


@dataclass(frozen=True, slots=True)
class State:
    """What the loop is doing; `all` holds everything that GET /v1/state says."""

    state: str
    phase: str
    why: str
    faults: tuple[str, ...]
    pose: PartPose | None
    error_mm: float | None
    error_deg: float | None
    is_caged: bool | None
    all: dict[str, Any] = field(repr=False)

    @classmethod
    def of(cls, shown: dict[str, Any]) -> State:
        """From the reply of GET /v1/state."""
        caged = None if shown["cage"] is None else bool(shown["cage"]["is_caged"])
        pose = pose_of(shown["pose"])
        return cls(
            shown["state"], shown["phase"], shown["why"], tuple(shown["faults"]), pose, shown["error_mm"], shown["error_deg"], caged, shown
        )


@dataclass(frozen=True, slots=True)
class Call:
    """One request."""

    method: str
    path: str
    body: dict[str, Any] | None = None
    params: dict[str, Any] = field(default_factory=dict)


T = TypeVar("T")
Talk = Generator[Call, Any, T]
Progress = Callable[[State], None]


def pose_of(shown: dict[str, float] | None) -> PartPose | None:
    """A pose from a reply."""
    return None if shown is None else PartPose(shown["x_mm"], shown["y_mm"], shown["angle_deg"])


def ask(method: str, path: str, body: dict[str, Any] | None = None) -> Talk[dict[str, Any]]:
    """One call, its reply as it is."""
    reply: dict[str, Any] = yield Call(method, path, body)
    return reply


def state() -> Talk[State]:
    """What the loop is doing."""
    return State.of((yield Call("GET", "/v1/state")))


def ready(patience_s: float) -> Talk[State]:
    """Arm from wherever the loop is, and wait until it holds still and sees the part; a latched fault is reset."""
    found = yield from state()
    if found.state in ("stopped", "faulted"):
        yield Call("POST", "/v1/reset")
        found = yield from state()
    if found.state == "disarmed":
        yield Call("POST", "/v1/arm")
    deadline_s = time.monotonic() + patience_s
    while not ((found := (yield from state())).pose is not None and found.state in ("ready", "servoing", "holding")):
        if time.monotonic() > deadline_s:
            seen = "the part is not seen" if found.pose is None else f"the loop is {found.state}: {found.why}"
            raise NoAnswer(f"not ready within {patience_s:g} s: {seen}")
    return found


def goal_body(x_mm: float | None, y_mm: float | None, angle_deg: float | None, options: dict[str, float | None]) -> dict[str, Any]:
    """The body of a goal whose kind follows from what is given. Raises Refused where it fits no kind."""
    kinds = {(True, True, True): "pose", (True, True, False): "position", (False, False, True): "angle"}
    kind = kinds.get((x_mm is not None, y_mm is not None, angle_deg is not None))
    if kind is None:
        raise Refused(422, "go_to needs x_mm and y_mm, or angle_deg, or all three")
    wanted = {"x_mm": x_mm, "y_mm": y_mm, "angle_deg": angle_deg} | options
    return {"kind": kind} | {key: value for key, value in wanted.items() if value is not None}


def pursue(body: dict[str, Any], progress: Progress | None, begun: Callable[[str], None]) -> Talk[Reached]:
    """Begin a goal and wait for its end; raises NotReached where that is not what was wanted."""
    goal = yield Call("POST", "/v1/goals", body)
    begun(goal["id"])
    while goal["ended"] is None:
        goal = yield Call("GET", f"/v1/goals/{goal['id']}", params={"wait_s": WAIT_S})
        if progress is not None:
            progress((yield from state()))
    return _judged(goal, (yield from state()))


def _judged(goal: dict[str, Any], now: State) -> Reached:
    ended = goal["ended"]
    if ended["outcome"] == "reached":
        took_s = (ended["ended_at_us"] - goal["began_at_us"]) * 1e-6
        return Reached(goal["id"], ended["error_mm"], ended["error_deg"], took_s)
    is_latched = ended["outcome"] == "faulted" or (ended["outcome"] == "cancelled" and now.state in ("stopped", "faulted"))
    kind = HandFault if is_latched else NotReached
    raise kind(goal["id"], ended["outcome"], ended["reason"], pose_of(ended["nearest"]))
