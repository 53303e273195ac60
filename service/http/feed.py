"""The loop's state as the web sees it: who waits for news waits on one event, however many they are."""

from __future__ import annotations

import asyncio
import contextlib
import json
import time
from collections.abc import AsyncIterator, Callable
from typing import Any

from fastapi import Request

from hw_profiles.errors import DeviceError
from service.http.problems import problem_text
from service.processes import Hand

LOOK_EVERY_S = 0.008
HEARTBEAT_S = 2.0
RETRY_MS = 1000


class Feed:
    """Watches the shared memory of the control process for news.

    boot : tells one run of the server from another. is_closing : streams end when it is set.
    """

    def __init__(self, hand: Hand) -> None:
        self.hand = hand
        self.boot = f"{time.time_ns() // 1_000_000:x}"
        self.is_closing = False
        self.n_streams = 0
        self._news = asyncio.Event()
        self._task: asyncio.Task[None] | None = None

    def open(self) -> None:
        """Begin to watch; needs the running event loop."""
        self._task = asyncio.get_running_loop().create_task(self._watch())

    def end_streams(self) -> None:
        """Let every stream and everybody who waits come to an end."""
        self.is_closing = True
        self._news.set()

    async def close(self) -> None:
        """Stop watching."""
        self.end_streams()
        if self._task is not None:
            self._task.cancel()
            with contextlib.suppress(asyncio.CancelledError):
                await self._task

    async def _watch(self) -> None:
        seen = (0, 0)
        while not self.is_closing:
            now = (self.hand.version(), self.hand.picture_version())
            if now != seen:
                seen = now
                self._news.set()
                self._news = asyncio.Event()
            await asyncio.sleep(LOOK_EVERY_S)

    async def wait(self, is_there: Callable[[], bool], timeout_s: float) -> bool:
        """Wait for news that makes something true; says whether it is."""
        deadline_s = time.monotonic() + timeout_s
        while not is_there():
            left_s = deadline_s - time.monotonic()
            if left_s <= 0.0 or self.is_closing:
                return False
            with contextlib.suppress(TimeoutError):
                async with asyncio.timeout(left_s):
                    await self._news.wait()
        return True

    def goal(self, goal_id: str) -> dict[str, Any] | None:
        """A goal and how it ended; None where it is not, or no longer, kept."""
        return next((goal for goal in self.hand.goals() if goal["id"] == goal_id), None)

    async def events(self, request: Request, hz: float) -> AsyncIterator[bytes]:
        """Server-sent events (HTML standard, 9.2): `state` up to `hz` times a second, `goal` once for every ending, a comment as
        heart-beat. A listener that comes back with Last-Event-ID gets the endings that it missed.
        """
        self.n_streams += 1
        try:
            yield f"retry: {RETRY_MS}\n\n".encode()
            version, ending = 0, self._missed_from(request.headers.get("last-event-id"))
            while not self.is_closing:
                begun_s, seen = time.monotonic(), version
                if not await self.wait(lambda: self.hand.version() != seen, HEARTBEAT_S):  # noqa: B023  # awaited at once
                    yield b": the server is here, the loop says nothing\n\n"
                    if not self.is_closing:
                        yield self._trouble()
                    continue
                try:
                    snapshot = self.hand.snapshot()
                except DeviceError:
                    yield self._trouble()
                    await asyncio.sleep(1.0)
                    continue
                version = snapshot.version
                for goal in self._ended_since(ending):
                    ending = goal["ended"]["number"]
                    yield event("goal", json.dumps(goal).encode(), f"{self.boot}.{ending}")
                yield event("state", snapshot.text, f"{self.boot}.{ending}")
                await asyncio.sleep(max(1.0 / hz - (time.monotonic() - begun_s), 0.0))
        finally:
            self.n_streams -= 1

    def _missed_from(self, last_id: str | None) -> int:
        """The number of the last ending that a listener has had; a new listener has had all there are."""
        newest = max((goal["ended"]["number"] for goal in self.hand.goals() if goal["ended"]), default=0)
        boot, _, number = (last_id or "").partition(".")
        if not number.isdecimal():
            return newest
        return min(int(number), newest) if boot == self.boot else 0

    def _ended_since(self, number: int) -> list[dict[str, Any]]:
        if self.hand.n_endings() <= number:
            return []
        ended = [goal for goal in self.hand.goals() if goal["ended"] and goal["ended"]["number"] > number]
        return sorted(ended, key=lambda goal: goal["ended"]["number"])

    def _trouble(self) -> bytes:
        try:
            self.hand.snapshot()
        except DeviceError as error:
            return event("trouble", problem_text(error, "/v1/state"))
        return b""


def event(name: str, data: bytes, event_id: str | None = None) -> bytes:
    """One server-sent event; `data` holds no line break."""
    head = f"id: {event_id}\n" if event_id else ""
    return f"{head}event: {name}\ndata: ".encode() + data + b"\n\n"
