"""Pictures and maps."""

from __future__ import annotations

import asyncio
import math
from typing import Annotated, Any, Literal

from fastapi import APIRouter, Query, Response
from fastapi.responses import StreamingResponse

from hw_profiles import load
from hw_profiles.geometry import Pose2
from service.http.pictures import BOUNDARY
from service.http.problems import Refused
from service.http.routes_state import NO_STORE, Here
from service.map_process import MapQuery

router = APIRouter(prefix="/v1", tags=["look"])
JPEG: dict[int | str, dict[str, Any]] = {200: {"content": {"image/jpeg": {"schema": {"type": "string", "format": "binary"}}}}}
MULTIPART = f"multipart/x-mixed-replace; boundary={BOUNDARY}"


@router.get("/camera/frame.jpg", response_class=Response, responses=JPEG)
async def frame(here: Here, overlay: bool = True, after: Annotated[int, Query(ge=0, le=2**62)] = 0) -> Response:
    """The newest camera picture, with part, goal and hand drawn on it.

    `after` waits for a picture newer than the one whose Picture-Version header said so.
    """
    jpeg = await here.pictures.after(after, overlay)
    told = {"Picture-Version": str(jpeg.version), "Captured-At-Us": str(jpeg.captured_at_us)}
    return Response(jpeg.data, media_type="image/jpeg", headers=NO_STORE | told)


@router.get(
    "/camera/stream",
    response_class=StreamingResponse,
    responses={200: {"content": {"multipart/x-mixed-replace": {"schema": {"type": "string", "format": "binary"}}}}},
)
async def stream(here: Here, overlay: bool = True) -> StreamingResponse:
    """Camera pictures one after another (motion JPEG): open it in a browser or any viewer of network cameras."""
    return StreamingResponse(here.pictures.stream(overlay), media_type=MULTIPART, headers=NO_STORE)


@router.get(
    "/map",
    response_class=Response,
    responses={200: {"content": {"application/json": {"schema": {"type": "object"}}, "image/png": {"schema": {"type": "string"}}}}},
)
async def show_map(
    here: Here,
    layer: Literal["energy", "cage", "reach"],
    part: Annotated[str | None, Query(max_length=40, description="a shipped part; the rig's own without it")] = None,
    x_mm: Annotated[float, Query(ge=-1000, le=1000)] = 0.0,
    y_mm: Annotated[float, Query(ge=-1000, le=1000)] = 0.0,
    angle_deg: Annotated[float, Query(ge=-360, le=360)] = 0.0,
    primitive: Annotated[str | None, Query(max_length=60)] = None,
    format: Annotated[Literal["json", "png"], Query()] = "json",
) -> Response:
    """Energy, cage or reach of the hand about a part, as numbers or drawn. Takes up to some seconds, in a process of its own."""
    if part is not None and part not in load.shipped("parts"):
        raise Refused(404, f"no shipped part of this name; allowed: {', '.join(load.shipped('parts'))}")
    blend = () if primitive is None else ((primitive, 1.0),)
    query = MapQuery(layer, Pose2(x_mm, y_mm, math.radians(angle_deg)), blend, format == "png", part)
    data = await asyncio.to_thread(here.maps.answer, query)
    return Response(data, media_type="image/png" if format == "png" else "application/json", headers=NO_STORE)
