"""HTTP/1.1 connections with limits that uvicorn's own protocol lacks: on waiting for a request, and on how many there are.

A connection that has asked for nothing yet gives way to a new one when there are too many, the longest waiting first. So half-open
connections, however many, cannot keep a stop out: it needs one connection, and gets it.
"""

from __future__ import annotations

import asyncio
import time
from typing import Any

import h11
from uvicorn.protocols.http.h11_impl import H11Protocol

from service.http.problems import MEDIA_TYPE, Refused, problem

HEAD_S = 10.0  # for a whole request line with its headers
HEAD_BYTES = 16 * 1024
MAX_CONNECTIONS = 200


class PatientProtocol(H11Protocol):
    """uvicorn's protocol with a time limit for heads, a limit on connections, and problems for what cannot be parsed."""

    def __init__(self, *args: Any, **options: Any) -> None:
        super().__init__(*args, **options)
        self._head_timer: asyncio.TimerHandle | None = None
        self.waiting_since_s = time.monotonic()

    @property
    def is_waiting(self) -> bool:
        """Whether no request of this connection is being answered."""
        return self.cycle is None or self.cycle.response_complete

    def connection_made(self, transport: asyncio.Transport) -> None:  # type: ignore[override]
        super().connection_made(transport)
        self._expect_head()
        if len(self.connections) > MAX_CONNECTIONS:
            waiting = [one for one in self.connections if isinstance(one, PatientProtocol) and one is not self and one.is_waiting]
            if waiting:
                min(waiting, key=lambda one: one.waiting_since_s).transport.abort()

    def connection_lost(self, exc: Exception | None) -> None:
        self._stop_timer()
        super().connection_lost(exc)

    def data_received(self, data: bytes) -> None:
        super().data_received(data)
        if not self.is_waiting:
            self._stop_timer()
        elif self._head_timer is None and not self.transport.is_closing():
            self._expect_head()

    def on_response_complete(self) -> None:
        self.waiting_since_s = time.monotonic()
        super().on_response_complete()

    def _expect_head(self) -> None:
        self._head_timer = self.loop.call_later(HEAD_S, self._give_up)

    def _stop_timer(self) -> None:
        if self._head_timer is not None:
            self._head_timer.cancel()
            self._head_timer = None

    def _give_up(self) -> None:
        self._head_timer = None
        if self.is_waiting and not self.transport.is_closing():
            self._answer(Refused(408, f"no whole request arrived within {HEAD_S:g} s"))

    def send_400_response(self, msg: str) -> None:
        """uvicorn calls this for a request that is not HTTP/1.1, or whose head is too long."""
        self._answer(Refused(400, f"not a valid HTTP/1.1 request, or its head is longer than {HEAD_BYTES} bytes"))

    def _answer(self, refused: Refused) -> None:
        body = bytes(problem(refused, "").body)
        head = [("content-type", MEDIA_TYPE), ("content-length", str(len(body))), ("connection", "close")]
        try:
            for event in (h11.Response(status_code=refused.status, headers=head), h11.Data(data=body), h11.EndOfMessage()):
                self.transport.write(self.conn.send(event) or b"")
        except h11.LocalProtocolError:
            pass  # an answer was under way already
        self.transport.close()
