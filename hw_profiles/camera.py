"""The overhead camera: intrinsics, and its pose over the plate."""

from __future__ import annotations

import math
from typing import Literal

import numpy as np
from pydantic import Field, model_validator

from hw_profiles.base import Name, NonNegative, Positive, Profile, refuse
from hw_profiles.geometry import Array


class Mount(Profile):
    """Where the camera hangs, in the hand frame: its eye, the point it looks at, and how it is rolled."""

    eye_mm: tuple[float, float, float]
    target_mm: tuple[float, float, float] = (0.0, 0.0, 0.0)
    roll_deg: float = 0.0

    @model_validator(mode="after")
    def _hangs_above(self) -> Mount:
        if self.eye_mm[2] <= self.target_mm[2] + 20.0:
            raise refuse(f"eye_mm z {self.eye_mm[2]:g} must be at least 20 above target_mm z {self.target_mm[2]:g}")
        tilt = math.degrees(math.acos((self.eye_mm[2] - self.target_mm[2]) / math.dist(self.eye_mm, self.target_mm)))
        if tilt > 50.0:
            raise refuse(f"eye_mm and target_mm tilt the camera by {tilt:.1f} deg; allowed: up to 50")
        return self


class Camera(Profile):
    """A pinhole camera with radial and tangential distortion (Brown 1971), as OpenCV orders the coefficients."""

    name: Name
    title: str = ""
    width_px: int = Field(ge=160, le=8192)
    height_px: int = Field(ge=120, le=8192)
    pixel_format: Literal["mono8", "bgr8"] = "bgr8"
    fps: Positive = Field(le=240)
    exposure_ms: Positive
    latency_ms: NonNegative = Field(description="from the middle of the exposure until the frame is in memory")
    focal_px: tuple[Positive, Positive]
    principal_px: tuple[float, float]
    distortion: tuple[float, float, float, float, float] = (0.0, 0.0, 0.0, 0.0, 0.0)
    noise_sd: NonNegative = Field(2.0, description="sensor noise in grey levels of 255")
    mount: Mount

    @model_validator(mode="after")
    def _fits_its_frame(self) -> Camera:
        if self.exposure_ms >= 1000.0 / self.fps:
            raise refuse(f"exposure_ms {self.exposure_ms:g} must be shorter than a frame, {1000.0 / self.fps:.2f} at fps {self.fps:g}")
        for key, value, size in zip("uv", self.principal_px, (self.width_px, self.height_px), strict=True):
            if not 0 <= value <= size:
                raise refuse(f"principal_px {key} {value:g} lies outside the image, allowed: 0 … {size}")
        return self

    @property
    def matrix(self) -> Array:
        """Intrinsic matrix (3, 3) [px]."""
        (fx, fy), (cx, cy) = self.focal_px, self.principal_px
        return np.array([[fx, 0.0, cx], [0.0, fy, cy], [0.0, 0.0, 1.0]])

    @property
    def camera_from_hand(self) -> Array:
        """Rigid motion (4, 4) [mm] from the hand frame to the camera frame (x right, y down, z forward in the image)."""
        eye, target = np.array(self.mount.eye_mm), np.array(self.mount.target_mm)
        forward = (target - eye) / np.linalg.norm(target - eye)
        up = np.array([0.0, 1.0, 0.0]) - forward * forward[1]
        up /= np.linalg.norm(up)
        right = np.cross(forward, up)
        roll = math.radians(self.mount.roll_deg)
        x_axis = math.cos(roll) * right - math.sin(roll) * up
        rotation = np.stack([x_axis, np.cross(forward, x_axis), forward])
        motion = np.eye(4)
        motion[:3, :3], motion[:3, 3] = rotation, -rotation @ eye
        return motion
