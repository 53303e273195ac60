"""Errors as RFC 9457 problem details; one table maps class to status."""

from __future__ import annotations

from http import HTTPStatus

from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from fastapi.responses import JSONResponse
from starlette.exceptions import HTTPException

from hw_profiles.errors import CommandError, DeviceError, DeviceTimeout, PalmloopError, ProfileError

STATUS: tuple[tuple[type[PalmloopError], int], ...] = (
    (CommandError, 409),
    (ProfileError, 422),
    (DeviceTimeout, 504),
    (DeviceError, 503),
    (PalmloopError, 500),
)


def problem(status: int, detail: str, instance: str) -> JSONResponse:
    """A problem body: type, title, status, detail, instance."""
    body = {"type": "about:blank", "title": HTTPStatus(status).phrase, "status": status, "detail": detail, "instance": instance}
    return JSONResponse(body, status, media_type="application/problem+json")


def install(app: FastAPI) -> None:
    """Make every error of the app a problem."""

    @app.exception_handler(PalmloopError)
    def _ours(request: Request, error: PalmloopError) -> JSONResponse:
        status = next(status for kind, status in STATUS if isinstance(error, kind))
        return problem(status, str(error), request.url.path)

    @app.exception_handler(RequestValidationError)
    def _invalid(request: Request, error: RequestValidationError) -> JSONResponse:
        """What is wrong and where, without echoing what was sent."""
        lines = [f"{'.'.join(str(step) for step in one['loc'])}: {one['msg']}" for one in error.errors()]
        return problem(422, "; ".join(lines), request.url.path)

    @app.exception_handler(HTTPException)
    def _http(request: Request, error: HTTPException) -> JSONResponse:
        return problem(error.status_code, str(error.detail), request.url.path)
