"""Looking: health, rig, state, its stream, metrics."""

from __future__ import annotations

from typing import Annotated

from fastapi import APIRouter, Depends, Query, Request, Response
from fastapi.responses import StreamingResponse

from hw_profiles.errors import DeviceError
from service.cautions import CAUTIONS
from service.commands_check import facts
from service.http import metrics
from service.http.replies import Health, RigReply, StateReply, View
from service.http.served import Served, served
from vision.camera_model import model_of

router = APIRouter()
Here = Annotated[Served, Depends(served)]
NO_STORE = {"Cache-Control": "no-store"}


@router.get("/healthz", tags=["look"])
async def healthz(here: Here) -> Health:
    """Whether every process lives and the loop is heard."""
    if not here.hand.is_alive:
        raise DeviceError("a process has ended; the hand is relaxed")
    here.hand.snapshot()
    return Health(status="ok")


@router.get("/metrics", tags=["look"], response_class=Response, responses={200: {"content": {metrics.MEDIA_TYPE: {}}}})
async def show_metrics(here: Here) -> Response:
    """The same figures for a monitoring system, as OpenMetrics 1.0."""
    return Response(metrics.text(here), media_type=metrics.MEDIA_TYPE)


@router.get("/v1/rig", tags=["look"])
async def rig(here: Here) -> RigReply:
    """The rig's profile, the camera as geometry, and what to be careful of."""
    rig = here.hand.rig
    model = model_of(rig.camera)
    view = View(
        width_px=rig.camera.width_px,
        height_px=rig.camera.height_px,
        lens=model.lens.tolist(),
        motion=model.motion.tolist(),
        part_height_mm=rig.part.height_mm,
        part_outline_mm=[(float(x), float(y)) for x, y in rig.part.outline_mm],
        part_radius_mm=rig.part.circumradius_mm,
    )
    profile = rig.model_dump(mode="json")
    return RigReply(
        name=rig.name, is_simulated=here.hand.is_simulated, facts=facts(rig), profile=profile, view=view, cautions=list(CAUTIONS)
    )


@router.get("/v1/state", tags=["look"], response_model=StateReply)
async def state(here: Here) -> Response:
    """What the loop is doing, and why; a state older than a second is not given out."""
    return Response(here.hand.snapshot().text, media_type="application/json", headers=NO_STORE)


@router.get(
    "/v1/state/stream",
    tags=["look"],
    response_class=StreamingResponse,
    responses={200: {"content": {"text/event-stream": {"schema": {"type": "string"}}}}},
)
async def stream(here: Here, request: Request, hz: Annotated[float, Query(ge=0.2, le=50.0)] = 10.0) -> StreamingResponse:
    """The state as server-sent events: `state`, and `goal` for every ending. Last-Event-ID brings the endings missed since."""
    return StreamingResponse(here.feed.events(request, hz), media_type="text/event-stream", headers=NO_STORE | {"X-Accel-Buffering": "no"})
