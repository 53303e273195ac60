"""Frames from files: a video, or the pictures of a folder in the order of their names."""

from __future__ import annotations

from pathlib import Path

import cv2
import numpy as np

from hw_profiles.camera import Camera
from hw_profiles.errors import DeviceEnded, DeviceError
from service.devices.picture import as_promised
from vision.frames import Frame

PICTURES = (".png", ".jpg", ".jpeg", ".bmp", ".tif", ".tiff")


class VideoFile:
    """A video as a camera; frames carry the times of the file, starting at 0, less nothing: a file has no latency."""

    def __init__(self, profile: Camera, path: Path) -> None:
        """Open the file. Raises DeviceError where it is missing or no video."""
        self._profile, self._path, self._n_read, self._last_us = profile, path, 0, -1
        self._capture = cv2.VideoCapture(str(path)) if path.is_file() else None
        if self._capture is None or not self._capture.isOpened():
            raise DeviceError(f"{path}: no video that can be read")
        rate = self._capture.get(cv2.CAP_PROP_FPS)
        self._period_us = 1e6 / (rate if 1.0 <= rate <= 1000.0 else profile.fps)

    def read(self, timeout_s: float) -> Frame:
        """The next frame of the file, at once. Raises DeviceEnded after the last."""
        if self._capture is None:
            raise DeviceError(f"{self._path} is closed")
        stamp_us = round(self._capture.get(cv2.CAP_PROP_POS_MSEC) * 1e3)
        good, pixels = self._capture.read()
        if not good:
            raise DeviceEnded(f"{self._path} has ended after {self._n_read} frames")
        if stamp_us <= self._last_us:  # a file without usable times
            stamp_us = round(self._last_us + self._period_us)
        self._n_read, self._last_us = self._n_read + 1, stamp_us
        return Frame(stamp_us, as_promised(np.asarray(pixels, np.uint8), self._profile, str(self._path)))

    def close(self) -> None:
        """Give the file back."""
        if self._capture is not None:
            self._capture.release()
        self._capture = None


class PictureFolder:
    """The pictures of a folder as a camera; their times are those of the profile's frame rate."""

    def __init__(self, profile: Camera, folder: Path) -> None:
        """List the folder. Raises DeviceError where it holds no pictures."""
        self._profile, self._folder, self._n_read, self._is_open = profile, folder, 0, True
        self.paths = sorted(path for path in folder.iterdir() if path.suffix.lower() in PICTURES) if folder.is_dir() else []
        if not self.paths:
            raise DeviceError(f"{folder}: no pictures in it; allowed: {', '.join(PICTURES)}")

    def read(self, timeout_s: float) -> Frame:
        """The next picture, at once. Raises DeviceEnded after the last."""
        if not self._is_open:
            raise DeviceError(f"{self._folder} is closed")
        if self._n_read == len(self.paths):
            raise DeviceEnded(f"{self._folder} has ended after {self._n_read} pictures")
        path = self.paths[self._n_read]
        pixels = cv2.imread(str(path), cv2.IMREAD_COLOR)
        if pixels is None:
            raise DeviceError(f"{path}: no picture that can be read")
        captured_at_us = round(self._n_read * 1e6 / self._profile.fps)
        self._n_read += 1
        return Frame(captured_at_us, as_promised(np.asarray(pixels, np.uint8), self._profile, str(path)))

    def close(self) -> None:
        """Read no more."""
        self._is_open = False
