"""Reaching into the simulated bench; these routes are there only with --simulated."""

from __future__ import annotations

from fastapi import APIRouter

from service.http.models import PushBody
from service.http.replies import Done
from service.http.routes_state import Here
from service.wiring import Push, PutBack

router = APIRouter(prefix="/v1/simulation", tags=["simulated bench"])


@router.post("/reset")
async def put_back(here: Here) -> Done:
    """Put the part back into the loose cage, as a person would; only while no pulses are on."""
    await here.desk.ask(PutBack())
    return Done(state=here.hand.snapshot().parsed()["state"])


@router.post("/push")
async def push(here: Here, body: PushBody) -> Done:
    """Push the part, as a clumsy elbow would."""
    await here.desk.ask(Push(body.x_ns, body.y_ns))
    return Done(state=here.hand.snapshot().parsed()["state"])
