"""Runs the web server of `palmloop serve` around one hand, until it is told to end or a process does."""

from __future__ import annotations

import asyncio
import logging
import signal
import socket
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from types import FrameType

import uvicorn

from service.http.app import build
from service.http.connections import HEAD_BYTES, PatientProtocol
from service.http.guard import Policy
from service.http.served import Served
from service.processes import Hand

LOOK_EVERY_S = 0.2
KEEP_ALIVE_S = 15
BACKLOG = 512


class HandServer(uvicorn.Server):
    """uvicorn's server, which ends its streams when it ends, and ends when the control process does."""

    def __init__(self, config: uvicorn.Config, served: Served) -> None:
        super().__init__(config)
        self._served = served
        self.why_ended = ""

    async def startup(self, sockets: list[socket.socket] | None = None) -> None:
        await super().startup(sockets)
        self._lookout = asyncio.get_running_loop().create_task(self._look_out())

    async def _look_out(self) -> None:
        while not self.should_exit:
            if not self._served.hand.is_alive:
                self.why_ended = await asyncio.to_thread(self._served.hand.last_words)
                self.should_exit = True
            await asyncio.sleep(LOOK_EVERY_S)
        self._served.feed.end_streams()

    async def shutdown(self, sockets: list[socket.socket] | None = None) -> None:
        self._served.feed.end_streams()
        await super().shutdown(sockets)
        await self._lookout


def run_server(hand: Hand, policy: Policy, listener: socket.socket) -> str:
    """Serve until SIGINT or SIGTERM; returns why it ended by itself, empty when it was told to."""
    app = build(hand, policy)
    config = uvicorn.Config(
        app,
        http=PatientProtocol,
        ws="none",
        log_config=None,
        access_log=False,
        server_header=False,
        h11_max_incomplete_event_size=HEAD_BYTES,
        timeout_keep_alive=KEEP_ALIVE_S,
        timeout_graceful_shutdown=2,
        backlog=BACKLOG,
    )
    logging.getLogger("uvicorn.error").setLevel(logging.ERROR)  # what strangers send is no news
    server = HandServer(config, app.state.served)

    def end(number: int, frame: FrameType | None) -> None:
        hand.stop()  # at once; the rest of the way out takes a moment
        server.should_exit = True

    # Not uvicorn's own handlers: they raise the signal once more at the end, and the exit code would not be 0.
    server.capture_signals = lambda: _handling(end)  # type: ignore[method-assign]
    server.run(sockets=[listener])
    return server.why_ended


@contextmanager
def _handling(handler: Callable[[int, FrameType | None], None]) -> Iterator[None]:
    """Signals go to a handler while the server runs."""
    numbers = (signal.SIGINT, signal.SIGTERM)
    before = [signal.signal(number, handler) for number in numbers]
    try:
        yield
    finally:
        for number, earlier in zip(numbers, before, strict=True):
            signal.signal(number, earlier)
