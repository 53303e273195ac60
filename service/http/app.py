"""The HTTP API. Every route is a thin translation; the loop decides."""

from __future__ import annotations

import itertools
import math
import time
from typing import Any

import cv2
from fastapi import FastAPI, HTTPException, Query, Response
from starlette.middleware.trustedhost import TrustedHostMiddleware

from control.servoing.goals import Arm, Cancel, Disarm, GoTo, Nudge, Reset
from hw_profiles.errors import DeviceError
from service.commands_check import facts
from service.http import problems
from service.http.models import GoalBody, NudgeBody
from service.picture import annotated
from service.processes import Hand

CAUTIONS = (
    "Keep fingers, hair and cables out of the hand: it pinches.",
    "Servos that stall get hot and may burn; let them cool before you touch them.",
    "The supply must bear every servo stalling at once; use a fuse.",
    "A software stop is no emergency stop (ISO 13850): have a switch that cuts the supply within reach.",
    "Local codes and licensed practice go before anything said here.",
)
POLL_S = 0.02


def build(hand: Hand, hosts: list[str]) -> FastAPI:
    """The app for one hand; `hosts` are the Host headers it answers to."""
    app = FastAPI(title="palmloop", version="1", docs_url=None, redoc_url=None)
    app.add_middleware(TrustedHostMiddleware, allowed_hosts=hosts)
    problems.install(app)
    _describe(app, hand)
    _command(app, hand)
    _goals(app, hand)
    return app


def _describe(app: FastAPI, hand: Hand) -> None:
    @app.get("/healthz")
    def healthz() -> dict[str, str]:
        """Whether every process lives."""
        if not hand.is_alive:
            raise DeviceError("the control process has ended; the hand is relaxed")
        return {"status": "ok"}

    @app.get("/v1/rig")
    def rig() -> dict[str, Any]:
        """The rig's profile and what to be careful of."""
        return {"facts": facts(hand.rig), "profile": hand.rig.model_dump(mode="json"), "cautions": CAUTIONS}

    @app.get("/v1/state")
    def state() -> dict[str, Any]:
        """What the loop is doing, and why."""
        return hand.snapshot()

    @app.get("/v1/camera/frame.jpg", response_class=Response)
    def frame(overlay: bool = True) -> Response:
        """The newest camera frame, with part, goal and hand drawn on it."""
        picture = hand.frame().pixels
        if overlay:
            picture = annotated(picture, hand.rig, hand.controller.hand, hand.snapshot())
        _, data = cv2.imencode(".jpg", picture, [cv2.IMWRITE_JPEG_QUALITY, 85])
        return Response(data.tobytes(), media_type="image/jpeg", headers={"Cache-Control": "no-store"})


def _command(app: FastAPI, hand: Hand) -> None:
    @app.post("/v1/arm")
    def arm() -> dict[str, Any]:
        """Switch pulses on; the fingers form the loose cage."""
        hand.ask(Arm())
        return {"state": hand.snapshot()["state"], "cautions": CAUTIONS}

    @app.post("/v1/disarm")
    def disarm() -> dict[str, Any]:
        """Switch pulses off."""
        hand.ask(Disarm())
        return {"state": hand.snapshot()["state"]}

    @app.post("/v1/stop", status_code=202)
    async def stop() -> dict[str, str]:
        """Latch a stop: pulses off until a reset. Waits for nothing; not an emergency stop."""
        hand.stop()
        return {"stop": "asked for", "note": CAUTIONS[3]}

    @app.post("/v1/reset")
    def reset() -> dict[str, Any]:
        """Leave stopped or faulted; starts no motion."""
        hand.ask(Reset())
        return {"state": hand.snapshot()["state"]}

    @app.post("/v1/nudge", status_code=202)
    def nudge(body: NudgeBody) -> dict[str, Any]:
        """Move the part by a step."""
        hand.ask(Nudge(body.dx_mm, body.dy_mm, math.radians(body.dangle_deg)))
        return {"state": hand.snapshot()["state"]}


def _goals(app: FastAPI, hand: Hand) -> None:
    numbers = itertools.count(1)

    def find(goal_id: str) -> dict[str, Any]:
        found = next((goal for goal in hand.snapshot()["goals"] if goal["id"] == goal_id), None)
        if found is None:
            raise HTTPException(404, f"no goal '{goal_id}' among the latest; GET /v1/state lists them")
        return dict(found)

    @app.post("/v1/goals", status_code=202)
    def begin(body: GoalBody, response: Response) -> dict[str, Any]:
        """Begin a goal; one that is under way is cancelled."""
        goal = body.goal(f"g{next(numbers)}")
        hand.ask(GoTo(goal))
        response.headers["Location"] = f"/v1/goals/{goal.id}"
        deadline_s = time.monotonic() + 1.0
        while time.monotonic() < deadline_s:  # the snapshot of the tick that took it
            if any(one["id"] == goal.id for one in hand.snapshot()["goals"]):
                break
            time.sleep(POLL_S)
        return find(goal.id)

    @app.get("/v1/goals/{goal_id}")
    def outcome(goal_id: str, wait_s: float = Query(0.0, ge=0.0, le=60.0)) -> dict[str, Any]:
        """A goal and how it ended; waits for the end up to `wait_s`."""
        deadline_s = time.monotonic() + wait_s
        while True:
            goal = find(goal_id)
            if goal["ended"] is not None or time.monotonic() >= deadline_s:
                return goal
            time.sleep(POLL_S)

    @app.delete("/v1/goals/{goal_id}")
    def cancel(goal_id: str) -> dict[str, Any]:
        """End a goal that is under way; the part is held where it is."""
        if find(goal_id)["ended"] is None:
            hand.ask(Cancel())
        return find(goal_id)
