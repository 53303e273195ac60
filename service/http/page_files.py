"""The operator page: files that are served as they are."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from pathlib import Path

from fastapi import APIRouter, Request, Response

from service.http.problems import Refused

FOLDER = Path(__file__).parent / "page"
MEDIA_TYPES = {".html": "text/html", ".css": "text/css", ".js": "text/javascript", ".svg": "image/svg+xml"}
HEADERS = {
    "Content-Security-Policy": "default-src 'self'; img-src 'self' blob:; frame-ancestors 'none'; base-uri 'none'; form-action 'none'",
    "X-Content-Type-Options": "nosniff",
    "Referrer-Policy": "no-referrer",
    "Cache-Control": "no-cache",
}
router = APIRouter(include_in_schema=False)


@dataclass(frozen=True)
class PageFile:
    """One file of the page."""

    data: bytes
    media_type: str

    @property
    def tag(self) -> str:
        """Changes when the file does."""
        return f'"{hashlib.sha256(self.data).hexdigest()[:16]}"'


def _read() -> dict[str, PageFile]:
    return {path.name: PageFile(path.read_bytes(), MEDIA_TYPES[path.suffix]) for path in FOLDER.iterdir() if path.suffix in MEDIA_TYPES}


FILES = _read()


@router.get("/")
async def index(request: Request) -> Response:
    """The page."""
    return await file("index.html", request)


@router.get("/page/{name}")
async def file(name: str, request: Request) -> Response:
    """A file of the page."""
    found = FILES.get(name)
    if found is None:
        raise Refused(404, "no such file")
    headers = HEADERS | {"ETag": found.tag}
    if request.headers.get("if-none-match") == found.tag:
        return Response(status_code=304, headers=headers)
    return Response(found.data, media_type=found.media_type, headers=headers)
