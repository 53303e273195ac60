"""The client for robot scripts: `Rig` blocks, `AsyncRig` awaits; both speak to `palmloop serve`.

from service.client import Rig

with Rig() as rig:
    rig.arm()
    rig.go_to(x_mm=12.0, y_mm=-8.0, angle_deg=90.0)
"""

from __future__ import annotations

import contextlib
import os
from collections.abc import Iterator
from types import TracebackType
from typing import Any, Self

import httpx

from service import client_talk
from service.client_talk import (
    ClientError,
    HandFault,
    NoAnswer,
    NotReached,
    PartPose,
    Progress,
    Reached,
    Refused,
    State,
    T,
    Talk,
    ask,
    goal_body,
    pursue,
)

__all__ = ["AsyncRig", "ClientError", "HandFault", "NoAnswer", "NotReached", "PartPose", "Reached", "Refused", "Rig", "State"]

URL = "http://127.0.0.1:8750"
TIMEOUT_S = 10.0
PATIENCE_S = 10.0


class Rig:
    """A hand behind `palmloop serve`, for scripts that wait.

    Parameters
    ----------
    url : of the server. token : where it asks for one; else from PALMLOOP_TOKEN. timeout_s : for one answer.

    Every method raises NoAnswer where the server cannot be reached, and Refused where it says no.
    """

    def __init__(self, url: str = URL, token: str | None = None, timeout_s: float = TIMEOUT_S) -> None:
        self._http = httpx.Client(base_url=url, headers=_headers(token), timeout=timeout_s)

    def state(self) -> State:
        """What the loop is doing."""
        return self._run(client_talk.state())

    def describe(self) -> dict[str, Any]:
        """The rig: facts, profile, cautions."""
        return self._run(ask("GET", "/v1/rig"))

    def arm(self, patience_s: float = PATIENCE_S) -> State:
        """Arm from wherever the loop is (a latched fault is reset first), and wait until it sees the part."""
        return self._run(client_talk.ready(patience_s))

    def disarm(self) -> None:
        """Switch pulses off."""
        self._run(ask("POST", "/v1/disarm"))

    def stop(self) -> None:
        """Latch a stop. Not an emergency stop."""
        self._run(ask("POST", "/v1/stop"))

    def reset(self) -> None:
        """Leave stopped or faulted; starts no motion."""
        self._run(ask("POST", "/v1/reset"))

    def go_to(
        self,
        *,
        x_mm: float | None = None,
        y_mm: float | None = None,
        angle_deg: float | None = None,
        tolerance_mm: float | None = None,
        tolerance_deg: float | None = None,
        hold_s: float | None = None,
        timeout_s: float | None = None,
        progress: Progress | None = None,
    ) -> Reached:
        """Bring the part to a place, an angle, or both; returns when it is held there.

        Raises
        ------
        NotReached
            It ended in another way; the message says why. HandFault: the loop has faulted or was stopped.
        """
        body = goal_body(x_mm, y_mm, angle_deg, _options(tolerance_mm, tolerance_deg, hold_s, timeout_s))
        return self._pursue(body, progress)

    def turn(self, angle_deg: float, *, timeout_s: float = 60.0, progress: Progress | None = None) -> Reached:
        """Turn the part by so much from where it is; more than once round is allowed."""
        return self._pursue({"kind": "turn", "angle_deg": angle_deg, "timeout_s": timeout_s}, progress)

    def nudge(self, dx_mm: float = 0.0, dy_mm: float = 0.0, dangle_deg: float = 0.0) -> None:
        """Move the part by a step; does not wait."""
        self._run(ask("POST", "/v1/nudge", {"dx_mm": dx_mm, "dy_mm": dy_mm, "dangle_deg": dangle_deg}))

    def picture(self, overlay: bool = True) -> bytes:
        """The newest camera picture, JPEG."""
        with _readable():
            return _checked(self._http.get("/v1/camera/frame.jpg", params={"overlay": overlay})).content

    def _pursue(self, body: dict[str, Any], progress: Progress | None) -> Reached:
        """A script that is interrupted while it waits gives its goal up; the part is held where it is."""
        begun: list[str] = []
        try:
            return self._run(pursue(body, progress, begun.append))
        except ClientError:
            raise
        except BaseException:
            with contextlib.suppress(ClientError):
                self._run(ask("DELETE", f"/v1/goals/{begun[0]}") if begun else client_talk.state())
            raise

    def _run(self, talk: Talk[T]) -> T:
        reply: Any = None
        while True:
            try:
                call = talk.send(reply)
            except StopIteration as end:
                result: T = end.value
                return result
            with _readable():
                reply = _checked(self._http.request(call.method, call.path, json=call.body, params=call.params)).json()

    def close(self) -> None:
        """Let the connection go; the hand goes on as it is."""
        self._http.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None) -> None:
        self.close()


class AsyncRig:
    """The same for scripts that await; see `Rig`."""

    def __init__(self, url: str = URL, token: str | None = None, timeout_s: float = TIMEOUT_S) -> None:
        self._http = httpx.AsyncClient(base_url=url, headers=_headers(token), timeout=timeout_s)

    async def state(self) -> State:
        """See `Rig.state`."""
        return await self._run(client_talk.state())

    async def describe(self) -> dict[str, Any]:
        """See `Rig.describe`."""
        return await self._run(ask("GET", "/v1/rig"))

    async def arm(self, patience_s: float = PATIENCE_S) -> State:
        """See `Rig.arm`."""
        return await self._run(client_talk.ready(patience_s))

    async def disarm(self) -> None:
        """See `Rig.disarm`."""
        await self._run(ask("POST", "/v1/disarm"))

    async def stop(self) -> None:
        """See `Rig.stop`."""
        await self._run(ask("POST", "/v1/stop"))

    async def reset(self) -> None:
        """See `Rig.reset`."""
        await self._run(ask("POST", "/v1/reset"))

    async def go_to(
        self,
        *,
        x_mm: float | None = None,
        y_mm: float | None = None,
        angle_deg: float | None = None,
        tolerance_mm: float | None = None,
        tolerance_deg: float | None = None,
        hold_s: float | None = None,
        timeout_s: float | None = None,
        progress: Progress | None = None,
    ) -> Reached:
        """See `Rig.go_to`."""
        body = goal_body(x_mm, y_mm, angle_deg, _options(tolerance_mm, tolerance_deg, hold_s, timeout_s))
        return await self._pursue(body, progress)

    async def turn(self, angle_deg: float, *, timeout_s: float = 60.0, progress: Progress | None = None) -> Reached:
        """See `Rig.turn`."""
        return await self._pursue({"kind": "turn", "angle_deg": angle_deg, "timeout_s": timeout_s}, progress)

    async def nudge(self, dx_mm: float = 0.0, dy_mm: float = 0.0, dangle_deg: float = 0.0) -> None:
        """See `Rig.nudge`."""
        await self._run(ask("POST", "/v1/nudge", {"dx_mm": dx_mm, "dy_mm": dy_mm, "dangle_deg": dangle_deg}))

    async def picture(self, overlay: bool = True) -> bytes:
        """See `Rig.picture`."""
        with _readable():
            return _checked(await self._http.get("/v1/camera/frame.jpg", params={"overlay": overlay})).content

    async def _pursue(self, body: dict[str, Any], progress: Progress | None) -> Reached:
        begun: list[str] = []
        try:
            return await self._run(pursue(body, progress, begun.append))
        except ClientError:
            raise
        except BaseException:
            with contextlib.suppress(ClientError):
                await self._run(ask("DELETE", f"/v1/goals/{begun[0]}") if begun else client_talk.state())
            raise

    async def _run(self, talk: Talk[T]) -> T:
        reply: Any = None
        while True:
            try:
                call = talk.send(reply)
            except StopIteration as end:
                result: T = end.value
                return result
            with _readable():
                reply = _checked(await self._http.request(call.method, call.path, json=call.body, params=call.params)).json()

    async def close(self) -> None:
        """See `Rig.close`."""
        await self._http.aclose()

    async def __aenter__(self) -> Self:
        return self

    async def __aexit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None) -> None:
        await self.close()


def _options(
    tolerance_mm: float | None, tolerance_deg: float | None, hold_s: float | None, timeout_s: float | None
) -> dict[str, float | None]:
    return {"tolerance_mm": tolerance_mm, "tolerance_deg": tolerance_deg, "hold_s": hold_s, "timeout_s": timeout_s}


def _headers(token: str | None) -> dict[str, str]:
    token = token or os.environ.get("PALMLOOP_TOKEN")
    return {"Authorization": f"Bearer {token}"} if token else {}


def _checked(reply: httpx.Response) -> httpx.Response:
    """The reply, or its problem raised."""
    if reply.is_success:
        return reply
    try:
        detail = reply.json()["detail"]
    except (ValueError, KeyError, TypeError):
        detail = f"HTTP status {reply.status_code}: is this a palmloop server?"
    raise Refused(reply.status_code, detail)


@contextlib.contextmanager
def _readable() -> Iterator[None]:
    """httpx's errors as ours."""
    try:
        yield
    except httpx.InvalidURL as error:
        raise NoAnswer(f"not an address: {error}") from error
    except httpx.TimeoutException as error:
        raise NoAnswer(f"{error.request.url}: no answer in time") from error
    except httpx.TransportError as error:
        raise NoAnswer(f"{error.request.url}: {error}; is palmloop serve running there?") from error
