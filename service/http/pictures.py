"""Camera pictures for the web: every picture is drawn on and encoded once, however many look."""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import cv2

from control.model.kinematics import HandModel
from hw_profiles.errors import DeviceError, DeviceTimeout
from service.http.feed import Feed
from service.picture import annotated

BOUNDARY = "picture"
QUALITY = 80
WAIT_S = 2.0


@dataclass(frozen=True, slots=True)
class Jpeg:
    """An encoded picture: its version, when it was captured, and its bytes."""

    version: int
    captured_at_us: int
    data: bytes


class Pictures:
    """Encodes the newest picture when somebody asks for it."""

    def __init__(self, feed: Feed) -> None:
        self._feed, self._hand = feed, feed.hand
        self._model = HandModel(feed.hand.rig.hand)
        self._worker = ThreadPoolExecutor(1, thread_name_prefix="pictures")
        self._newest: dict[bool, tuple[int, asyncio.Future[Jpeg]]] = {}
        self.n_encoded = 0

    async def after(self, version: int, overlay: bool) -> Jpeg:
        """The newest picture that is newer than `version`. Raises DeviceTimeout where none comes."""
        if not await self._feed.wait(lambda: self._hand.picture_version() > version, WAIT_S):
            raise DeviceTimeout(f"no new camera frame within {WAIT_S:g} s")
        now = self._hand.picture_version()
        encoded = self._newest.get(overlay)
        if encoded is None or encoded[0] < now:
            encoded = (now, asyncio.get_running_loop().run_in_executor(self._worker, self._encode, overlay))
            self._newest[overlay] = encoded
        return await asyncio.shield(encoded[1])

    def _encode(self, overlay: bool) -> Jpeg:
        version, frame = self._hand.picture()
        pixels = annotated(frame.pixels, self._hand.rig, self._model, self._hand.snapshot().parsed()) if overlay else frame.pixels
        _, data = cv2.imencode(".jpg", pixels, [cv2.IMWRITE_JPEG_QUALITY, QUALITY])
        self.n_encoded += 1
        return Jpeg(version, frame.captured_at_us, data.tobytes())

    async def stream(self, overlay: bool) -> AsyncIterator[bytes]:
        """Pictures as the parts of a multipart/x-mixed-replace body, as fast as they come and are read."""
        version = 0
        while not self._feed.is_closing:
            try:
                jpeg = await self.after(version, overlay)
            except DeviceError:
                continue  # the camera may come back; the stream stays open
            version = jpeg.version
            head = f"--{BOUNDARY}\r\nContent-Type: image/jpeg\r\nContent-Length: {len(jpeg.data)}\r\n\r\n"
            yield head.encode() + jpeg.data + b"\r\n"

    def close(self) -> None:
        """End the worker."""
        self._worker.shutdown(wait=True, cancel_futures=True)
