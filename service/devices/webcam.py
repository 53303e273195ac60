"""A webcam through V4L2: resolution, rate and exposure locked, newest frame first, mid-exposure times, reconnecting after a pull.

A thread of its own takes every frame from the driver, so that `read` never gets one that has waited in a queue. A frame's time is
that of its arrival less the profile's latency_ms (measured from the middle of the exposure until the frame is in memory). Where the
driver stamps its buffers on the monotonic clock, arrivals are taken from the stamps, moved by their median lag: the scheduling
jitter of the thread is gone, the latency stays what was measured.
"""

from __future__ import annotations

import threading
from collections import deque
from collections.abc import Callable
from statistics import median
from typing import Protocol

import cv2
import numpy as np

from hw_profiles.camera import Camera
from hw_profiles.errors import DeviceError, DeviceTimeout
from service.devices.picture import as_promised
from service.ports import Clock
from vision.frames import Frame, Pixels

RETRY_S = 0.5
STAMP_WINDOW = 64
MAX_STAMP_LAG_US = 500_000
MANUAL_EXPOSURE = 1.0  # V4L2_EXPOSURE_MANUAL
EXPOSURE_UNIT_MS = 0.1  # V4L2_CID_EXPOSURE_ABSOLUTE counts 100 µs


class Capture(Protocol):
    """What is used of cv2.VideoCapture."""

    def isOpened(self) -> bool: ...  # noqa: N802  # OpenCV's name
    def read(self) -> tuple[bool, Pixels | None]: ...
    def get(self, propId: int, /) -> float: ...  # noqa: N803
    def set(self, propId: int, value: float, /) -> bool: ...  # noqa: N803
    def release(self) -> None: ...


def open_v4l2(device: str) -> Capture:
    """OpenCV's capture of a V4L2 device."""
    return cv2.VideoCapture(device, cv2.CAP_V4L2)  # type: ignore[return-value]  # its stubs type pixels more loosely


class Webcam:
    """A V4L2 camera as its profile describes it.

    `refused` names the settings that the camera did not take; a picture whose exposure floats still tracks, but its time is less
    certain and it may blur.
    """

    def __init__(self, profile: Camera, device: str, clock: Clock, opener: Callable[[str], Capture] = open_v4l2) -> None:
        """Open and set up the camera. Raises DeviceError where it is missing, busy, or does not give the profile's resolution."""
        self.refused: tuple[str, ...] = ()
        self._profile, self._device, self._clock, self._opener = profile, device, clock, opener
        self._lags: deque[int] = deque(maxlen=STAMP_WINDOW)
        self._fresh = threading.Condition()
        self._newest: Frame | None = None
        self._trouble: DeviceError | None = None
        self._closing = threading.Event()
        self._capture: Capture | None = self._open()
        self._thread = threading.Thread(target=self._run, name=f"webcam {device}", daemon=True)
        self._thread.start()

    def read(self, timeout_s: float) -> Frame:
        """The newest frame not yet read; see `service.ports.Camera`."""
        with self._fresh:
            self._fresh.wait_for(lambda: self._newest is not None or self._trouble is not None or self._closing.is_set(), timeout_s)
            if self._trouble is not None:
                raise self._trouble
            if self._closing.is_set():
                raise DeviceError(f"{self._device} is closed")
            if self._newest is None:
                state = "gives no frames" if self._capture is not None else "is unplugged; waiting for it to come back"
                raise DeviceTimeout(f"{self._device} {state} ({timeout_s:g} s)")
            frame, self._newest = self._newest, None
            return frame

    def close(self) -> None:
        """Stop the thread and give the device back."""
        self._closing.set()
        with self._fresh:
            self._fresh.notify_all()
        self._thread.join()

    def _run(self) -> None:
        try:
            while not self._closing.is_set():
                if self._capture is None:
                    self._reconnect()
                else:
                    self._take(self._capture)
        except DeviceError as error:
            with self._fresh:
                self._trouble = error
                self._fresh.notify_all()
        finally:
            if self._capture is not None:
                self._capture.release()

    def _take(self, capture: Capture) -> None:
        good, pixels = capture.read()
        arrived_us = self._clock.now_us()
        if not good or pixels is None:
            capture.release()
            self._capture = None
            return
        frame = Frame(self._exposed_us(capture, arrived_us), as_promised(pixels, self._profile, self._device))
        with self._fresh:
            self._newest = frame
            self._fresh.notify_all()

    def _exposed_us(self, capture: Capture, arrived_us: int) -> int:
        """Middle of the exposure of a frame that has just arrived."""
        stamp_us = round(capture.get(cv2.CAP_PROP_POS_MSEC) * 1e3)
        lag = arrived_us - stamp_us
        if stamp_us > 0 and 0 <= lag < MAX_STAMP_LAG_US:
            self._lags.append(lag)
            arrived_us = stamp_us + round(median(self._lags))
        return arrived_us - round(self._profile.latency_ms * 1e3)

    def _reconnect(self) -> None:
        if self._closing.wait(RETRY_S):
            return
        try:
            self._capture = self._open()
        except DeviceError:
            self._lags.clear()  # not there yet; the next turn tries again

    def _open(self) -> Capture:
        capture, profile = self._opener(self._device), self._profile
        if not capture.isOpened():
            capture.release()
            raise DeviceError(f"camera {self._device} cannot be opened: is it plugged in, and does no other program use it?")
        wanted = {
            "MJPG": (cv2.CAP_PROP_FOURCC, float(cv2.VideoWriter.fourcc(*"MJPG"))),
            "width": (cv2.CAP_PROP_FRAME_WIDTH, float(profile.width_px)),
            "height": (cv2.CAP_PROP_FRAME_HEIGHT, float(profile.height_px)),
            "fps": (cv2.CAP_PROP_FPS, profile.fps),
            "manual exposure": (cv2.CAP_PROP_AUTO_EXPOSURE, MANUAL_EXPOSURE),
            "exposure time": (cv2.CAP_PROP_EXPOSURE, np.round(profile.exposure_ms / EXPOSURE_UNIT_MS)),
        }
        for key, value in wanted.values():
            capture.set(key, value)
        capture.set(cv2.CAP_PROP_BUFFERSIZE, 2.0)
        self.refused = tuple(name for name, (key, value) in wanted.items() if abs(capture.get(key) - value) > 0.01 * abs(value) + 0.5)
        size = int(capture.get(cv2.CAP_PROP_FRAME_WIDTH)), int(capture.get(cv2.CAP_PROP_FRAME_HEIGHT))
        if size != (profile.width_px, profile.height_px):
            capture.release()
            given, asked = f"{size[0]} × {size[1]}", f"{profile.width_px} × {profile.height_px}"
            raise DeviceError(f"camera {self._device} gives {given} px, camera '{profile.name}' says {asked}")
        return capture
