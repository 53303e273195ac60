"""The HTTP API. Every route is a thin translation; the loop decides."""

from __future__ import annotations

from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from importlib.metadata import version
from typing import Any

from fastapi import FastAPI

from service.cautions import NOT_AN_EMERGENCY_STOP
from service.http import page_files, problems, routes_camera, routes_command, routes_simulation, routes_state
from service.http.guard import Guard, Policy
from service.http.problems import MEDIA_TYPE
from service.http.replies import ProblemReply
from service.http.served import Served
from service.processes import Hand

PROBLEMS = {
    400: "not a valid request, or for another host",
    401: "a token is needed, or this one is not known",
    403: "another site's page, or a token that may only look",
    404: "no such thing",
    408: "the request did not arrive in time",
    409: "the loop refuses; it says why and what is allowed",
    413: "the body is too large",
    422: "a value is missing, unknown or outside what is allowed",
    503: "a device or process is gone, or too much is asked at once",
    504: "a device or process did not answer in time",
}


def build(hand: Hand, policy: Policy) -> FastAPI:
    """The app for one hand, with its guard in front."""
    served = Served.of(hand)
    app = FastAPI(
        title="palmloop",
        version=version("palmloop"),
        summary="Brings a part in a hand of servos to a wanted position and angle.",
        description=f"Lengths in mm, angles in deg, times in s. Errors are problem details (RFC 9457). {NOT_AN_EMERGENCY_STOP}",
        docs_url=None,
        redoc_url=None,
        openapi_url="/v1/openapi.json",
        lifespan=_lifespan,
        responses=_problem_responses(),
        redirect_slashes=False,
    )
    app.state.served = served
    problems.install(app)
    for router in (routes_state.router, routes_command.router, routes_camera.router, page_files.router):
        app.include_router(router)
    if hand.is_simulated:
        app.include_router(routes_simulation.router)
    app.add_middleware(_Kept, served=served, policy=policy)
    return app


def _Kept(app: Any, served: Served, policy: Policy) -> Guard:  # noqa: N802  # stands for the class that Starlette calls
    """The guard, remembered for the metrics."""
    served.guard = Guard(app, policy)
    return served.guard


@asynccontextmanager
async def _lifespan(app: FastAPI) -> AsyncIterator[None]:
    served: Served = app.state.served
    served.feed.open()
    try:
        yield
    finally:
        await served.close()


def _problem_responses() -> dict[int | str, dict[str, Any]]:
    reference = {"schema": {"$ref": f"#/components/schemas/{ProblemReply.__name__}"}}
    return {status: {"description": told, "model": ProblemReply, "content": {MEDIA_TYPE: reference}} for status, told in PROBLEMS.items()}
