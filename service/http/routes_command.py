"""Acting: arm, disarm, stop, reset, nudge, blend, and goals."""

from __future__ import annotations

from typing import Annotated, Any

from fastapi import APIRouter, Path, Query, Response

from control.servoing.goals import Arm, Cancel, Disarm, GoTo, Reset
from service.cautions import CAUTIONS, NOT_AN_EMERGENCY_STOP
from service.http.models import BlendBody, GoalBody, NudgeBody
from service.http.problems import Refused
from service.http.replies import Armed, BlendReply, Done, GoalReply, GoalsReply, Nudged, StopReply
from service.http.routes_state import Here

router = APIRouter(prefix="/v1", tags=["act"])
GoalId = Annotated[str, Path(pattern=r"^[a-z0-9-]{1,40}$", examples=["g1"])]


@router.post("/arm")
async def arm(here: Here) -> Armed:
    """Switch pulses on; the fingers form the loose cage. Read the cautions."""
    await here.desk.ask(Arm())
    return Armed(state=here.hand.snapshot().parsed()["state"], cautions=list(CAUTIONS))


@router.post("/disarm")
async def disarm(here: Here) -> Done:
    """Switch pulses off; a goal under way is cancelled."""
    await here.desk.ask(Disarm())
    return Done(state=here.hand.snapshot().parsed()["state"])


@router.post("/stop")
async def stop(here: Here) -> StopReply:
    """Latch a stop: pulses off until a reset. Queues behind nothing; may be asked any number of times. Not an emergency stop."""
    return StopReply(latched=await here.desk.stop(), note=NOT_AN_EMERGENCY_STOP)


@router.post("/reset")
async def reset(here: Here) -> Done:
    """Leave stopped or faulted for disarmed; starts no motion."""
    await here.desk.ask(Reset())
    return Done(state=here.hand.snapshot().parsed()["state"])


@router.post("/nudge", status_code=202)
async def nudge(here: Here, body: NudgeBody) -> Nudged:
    """Move the part by a step."""
    await here.desk.ask(body.request())
    shown = here.hand.snapshot().parsed()
    return Nudged(state=shown["state"], goal=shown["goal"])


@router.get("/blend")
async def blend(here: Here) -> BlendReply:
    """The primitives that a blend may use now, and the present weights."""
    shown = here.hand.snapshot().parsed()
    return BlendReply(primitives=shown["primitives"], weights=shown["weights"])


@router.put("/blend")
async def set_blend(here: Here, body: BlendBody) -> BlendReply:
    """Command a blend by hand; a goal under way is given up."""
    await here.desk.ask(body.request())
    return await blend(here)


@router.post("/goals", status_code=202, response_model=GoalReply)
async def begin(here: Here, body: GoalBody, response: Response) -> dict[str, Any]:
    """Begin a goal; one that is under way is cancelled. Ask for its end at Location."""
    goal = body.goal(f"g{next(here.goal_numbers)}")
    await here.desk.ask(GoTo(goal))
    response.headers["Location"] = f"/v1/goals/{goal.id}"
    return _found(here, goal.id)


@router.get("/goals")
async def goals(here: Here) -> GoalsReply:
    """The latest goals, oldest first."""
    return GoalsReply.model_validate({"goals": here.hand.goals()})


@router.get("/goals/{goal_id}", response_model=GoalReply)
async def outcome(here: Here, goal_id: GoalId, wait_s: Annotated[float, Query(ge=0.0, le=60.0)] = 0.0) -> dict[str, Any]:
    """A goal and how it ended; waits for the end up to `wait_s`."""
    n_endings = -1

    def is_over() -> bool:
        nonlocal n_endings
        if here.hand.n_endings() == n_endings:
            return False
        n_endings = here.hand.n_endings()
        return _found(here, goal_id)["ended"] is not None

    await here.feed.wait(is_over, wait_s)
    return _found(here, goal_id)


@router.delete("/goals/{goal_id}", response_model=GoalReply)
async def cancel(here: Here, goal_id: GoalId) -> dict[str, Any]:
    """End a goal that is under way; the part is held where it is. One that has ended stays as it is."""
    if _found(here, goal_id)["ended"] is None:
        await here.desk.ask(Cancel())
    return _found(here, goal_id)


def _found(here: Here, goal_id: str) -> dict[str, Any]:
    found = here.feed.goal(goal_id)
    if found is None:
        raise Refused(404, f"no goal '{goal_id}' among the latest; GET /v1/goals lists them")
    return found
