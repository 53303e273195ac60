"""What every request must pass before the app sees it: host, origin, token, size, time, and how many at once.

Web pages of other sites, guessing scripts and floods are turned away here, in one place, with a problem that says why. A stop passes every
limit on numbers; nothing that others do can shut it out.
"""

from __future__ import annotations

import asyncio
import hmac
from collections.abc import Iterable
from dataclasses import dataclass, field
from urllib.parse import urlsplit

from starlette.datastructures import Headers
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from service.http.problems import Refused, problem

STOP_PATH = "/v1/stop"
OPEN_PATHS = ("/healthz",)  # and the page's files: they tell nothing of the bench
BODY_BYTES = 64 * 1024
BODY_S = 10.0
SEND_S = 20.0
REALM = 'Bearer realm="palmloop"'


@dataclass(frozen=True)
class Policy:
    """Who may ask what.

    hosts : names (without port) this server answers to. token : of an operator; None only where nobody else can reach the server.
    view_token : of somebody who may only look. n_requests, n_streams : at once.
    """

    hosts: frozenset[str]
    token: str | None = None
    view_token: str | None = None
    n_requests: int = 64
    n_streams: int = 32


@dataclass
class Guard:
    """ASGI middleware, outermost."""

    app: ASGIApp
    policy: Policy
    n_refused: int = 0
    n_served: int = 0
    _active: dict[str, int] = field(default_factory=lambda: {"requests": 0, "streams": 0})

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] != "http":
            await self.app(scope, receive, send)
            return
        try:
            headers = Headers(scope=scope)
            self._check_source(scope, headers)
            self._check_token(scope, headers)
            receive = await _whole_body(headers, receive)
        except Refused as refused:
            self.n_refused += 1
            await problem(refused, scope["path"])(scope, receive, send)
            return
        self.n_served += 1
        await self._counted(scope, receive, send)

    def _check_source(self, scope: Scope, headers: Headers) -> None:
        host = _host_name(headers.get("host", ""))
        if host not in self.policy.hosts:
            raise Refused(400, f"this Host is not served here; allowed: {', '.join(sorted(self.policy.hosts))}")
        origin = headers.get("origin")
        if origin is not None and _host_name(urlsplit(origin).netloc) not in self.policy.hosts:
            raise Refused(403, "requests from pages of another site are refused")
        is_visit = headers.get("sec-fetch-mode") == "navigate" and scope["method"] == "GET"
        if headers.get("sec-fetch-site", "none") not in ("none", "same-origin") and not is_visit:
            raise Refused(403, "requests from pages of another site are refused")

    def _check_token(self, scope: Scope, headers: Headers) -> None:
        """Bearer tokens, RFC 6750: section 3.1 says which error goes with which status."""
        if self.policy.token is None or _is_open(scope["path"]):
            return
        scheme, _, given = headers.get("authorization", "").partition(" ")
        if scheme.lower() != "bearer":
            raise Refused(401, "a bearer token is needed: Authorization: Bearer …", {"WWW-Authenticate": REALM})
        if not given.strip() or not given.isascii():
            raise Refused(400, "the Authorization header is malformed", {"WWW-Authenticate": f'{REALM}, error="invalid_request"'})
        if _is_same(given.strip(), self.policy.token):
            return
        if self.policy.view_token is None or not _is_same(given.strip(), self.policy.view_token):
            raise Refused(401, "this token is not known", {"WWW-Authenticate": f'{REALM}, error="invalid_token"'})
        if scope["method"] not in ("GET", "HEAD") and scope["path"] != STOP_PATH:
            scheme = f'{REALM}, error="insufficient_scope", scope="operate"'
            raise Refused(403, "this token may look and stop, not operate", {"WWW-Authenticate": scheme})

    async def _counted(self, scope: Scope, receive: Receive, send: Send) -> None:
        kind = "streams" if scope["path"].endswith("/stream") else "requests"
        limit = self.policy.n_streams if kind == "streams" else self.policy.n_requests
        if self._active[kind] >= limit and scope["path"] != STOP_PATH:
            self.n_refused += 1
            refused = Refused(503, f"{limit} {kind} are being served already; try again in a moment", {"Retry-After": "1"})
            await problem(refused, scope["path"])(scope, receive, send)
            return
        self._active[kind] += 1
        try:
            await self.app(scope, receive, _in_time(send) if kind == "streams" else send)
        finally:
            self._active[kind] -= 1


def _host_name(text: str) -> str:
    """Host without port, lower case; brackets of IPv6 taken off."""
    name = text.rsplit("]", 1)[0].lstrip("[") if text.startswith("[") else text.rsplit(":", 1)[0]
    return name.lower()


def _is_open(path: str) -> bool:
    return path in OPEN_PATHS or path == "/" or path.startswith("/page/")


def _is_same(given: str, known: str) -> bool:
    return hmac.compare_digest(given.encode(), known.encode())


async def _whole_body(headers: Headers, receive: Receive) -> Receive:
    """The body read to its end, within size and time; the app then gets it at once."""
    length = headers.get("content-length", "0")
    if "transfer-encoding" not in headers and length == "0":
        return receive
    too_big = Refused(413, f"the body is larger than {BODY_BYTES} bytes", {"Connection": "close"})
    if not length.isdecimal() or int(length) > BODY_BYTES:
        raise too_big
    parts: list[bytes] = []
    size, more = 0, True
    try:
        async with asyncio.timeout(BODY_S):
            while more:
                message = await receive()
                if message["type"] == "http.disconnect":
                    raise Refused(400, "the body ended early", {"Connection": "close"})
                parts.append(message.get("body", b""))
                size, more = size + len(parts[-1]), message.get("more_body", False)
                if size > BODY_BYTES:
                    raise too_big
    except TimeoutError:
        raise Refused(408, f"the body did not arrive within {BODY_S:g} s", {"Connection": "close"}) from None
    return _replayed(b"".join(parts), receive)


def _replayed(body: bytes, receive: Receive) -> Receive:
    waiting = [body]

    async def replay() -> Message:
        if waiting:
            return {"type": "http.request", "body": waiting.pop(), "more_body": False}
        return await receive()

    return replay


def _in_time(send: Send) -> Send:
    """A listener that does not read is let go, so that it does not keep its place for ever."""

    async def send_in_time(message: Message) -> None:
        async with asyncio.timeout(SEND_S):
            await send(message)

    return send_in_time


def loopback_hosts() -> frozenset[str]:
    """The names of this machine to itself."""
    return frozenset({"127.0.0.1", "localhost", "::1"})


def hosts_for(names: Iterable[str]) -> frozenset[str]:
    """What to answer to when bound to, or known by, these names."""
    return loopback_hosts() | frozenset(name.lower() for name in names if name not in ("0.0.0.0", "::"))
