"""Errors as RFC 9457 problem details; one table maps class to status."""

from __future__ import annotations

import logging
from collections.abc import Mapping
from http import HTTPStatus

from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from fastapi.responses import JSONResponse
from starlette.exceptions import HTTPException

from hw_profiles.errors import CommandError, DeviceError, DeviceTimeout, PalmloopError, ProfileError

MEDIA_TYPE = "application/problem+json"
STATUS: tuple[tuple[type[PalmloopError], int], ...] = (
    (CommandError, 409),
    (ProfileError, 422),
    (DeviceTimeout, 504),
    (DeviceError, 503),
    (PalmloopError, 500),
)


class Refused(Exception):
    """A request that is answered with a problem: status, what is wrong, and headers that go with it."""

    def __init__(self, status: int, detail: str, headers: Mapping[str, str] | None = None) -> None:
        super().__init__(detail)
        self.status, self.detail, self.headers = status, detail, dict(headers or {})


def problem(refused: Refused, instance: str) -> JSONResponse:
    """A problem body: type, title, status, detail, instance."""
    body = {
        "type": "about:blank",  # RFC 9457, 4.2.1: the status says what kind of problem it is
        "title": HTTPStatus(refused.status).phrase,
        "status": refused.status,
        "detail": refused.detail,
        "instance": instance,
    }
    return JSONResponse(body, refused.status, refused.headers, media_type=MEDIA_TYPE)


def problem_text(error: PalmloopError, instance: str) -> bytes:
    """The problem of one of our errors, as JSON without line breaks."""
    return bytes(problem(Refused(status_of(error), str(error)), instance).body)


def status_of(error: PalmloopError) -> int:
    """The status of one of our errors."""
    return next(status for kind, status in STATUS if isinstance(error, kind))


def install(app: FastAPI) -> None:
    """Make every error of the app a problem."""

    @app.exception_handler(PalmloopError)
    async def _ours(request: Request, error: PalmloopError) -> JSONResponse:
        return problem(Refused(status_of(error), str(error)), request.url.path)

    @app.exception_handler(Refused)
    async def _refused(request: Request, error: Refused) -> JSONResponse:
        return problem(error, request.url.path)

    @app.exception_handler(RequestValidationError)
    async def _invalid(request: Request, error: RequestValidationError) -> JSONResponse:
        """What is wrong and where, without echoing what was sent."""
        lines = [f"{'.'.join(str(step) for step in one['loc'])}: {one['msg']}" for one in error.errors()]
        return problem(Refused(422, "; ".join(lines)), request.url.path)

    @app.exception_handler(HTTPException)
    async def _http(request: Request, error: HTTPException) -> JSONResponse:
        return problem(Refused(error.status_code, str(error.detail), error.headers), request.url.path)

    @app.exception_handler(Exception)
    async def _fault(request: Request, error: Exception) -> JSONResponse:
        logging.getLogger("palmloop").error("%s %s failed", request.method, request.url.path, exc_info=error)
        return problem(Refused(500, "a fault of palmloop itself; its log says more"), request.url.path)
