"""Pixels as a camera profile promises them, whatever a driver or a file delivers."""

from __future__ import annotations

import cv2
import numpy as np

from hw_profiles.camera import Camera
from hw_profiles.errors import DeviceError
from vision.frames import Pixels


def as_promised(pixels: Pixels, profile: Camera, source: str) -> Pixels:
    """The picture in the profile's pixel format.

    Raises
    ------
    DeviceError
        A picture of another size than the profile's: its intrinsics would be wrong.
    """
    if pixels.shape[:2] != (profile.height_px, profile.width_px):
        given, wanted = f"{pixels.shape[1]} × {pixels.shape[0]}", f"{profile.width_px} × {profile.height_px}"
        raise DeviceError(f"{source} gives pictures of {given} px, camera '{profile.name}' says {wanted}")
    if profile.pixel_format == "mono8" and pixels.ndim == 3:
        pixels = np.asarray(cv2.cvtColor(pixels, cv2.COLOR_BGR2GRAY), np.uint8)
    elif profile.pixel_format == "bgr8" and pixels.ndim == 2:
        pixels = np.asarray(cv2.cvtColor(pixels, cv2.COLOR_GRAY2BGR), np.uint8)
    return pixels
