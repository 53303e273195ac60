"""Frames to measure vision with: cameras of any size and tilt, tags of any size, seeded motions, and what spoils a picture."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import cv2
import numpy as np

from control.model.kinematics import HandModel
from hw_profiles.camera import Camera, Mount
from hw_profiles.geometry import Array, Pose2
from hw_profiles.load import load_camera, load_hand, load_part
from hw_profiles.part import Fiducial, Part
from service.simulated.camera import Renderer
from vision import pattern
from vision.camera_model import model_of
from vision.frames import Frame, Pixels

FRAME_US = 20_000


def camera_of(width_px: int = 1280, height_px: int = 720, tilt_deg: float = 15.0, roll_deg: float = 0.0) -> Camera:
    """The shipped camera at another resolution, tilt and roll, 430 mm from the plate."""
    shipped = load_camera("overhead-720p")
    scale, tilt = height_px / 720.0, math.radians(tilt_deg)
    eye = (0.0, -430.0 * math.sin(tilt), 430.0 * math.cos(tilt))
    return shipped.model_copy(
        update={
            "width_px": width_px,
            "height_px": height_px,
            "focal_px": (1050.0 * scale, 1050.0 * scale),
            "principal_px": ((641.5 + 0.5) * scale - 0.5, (357.0 + 0.5) * scale - 0.5),
            "mount": Mount(eye_mm=eye, target_mm=(0.0, 0.0, 0.0), roll_deg=roll_deg),
        }
    )


def part_of(name: str = "roller-40", tag_mm: float = 16.0) -> Part:
    """A shipped part, its tag, if it has one, of another size."""
    part = load_part(name)
    if not isinstance(part.fiducial, Fiducial):
        return part
    return part.model_copy(update={"fiducial": part.fiducial.model_copy(update={"size_mm": tag_mm})})


@dataclass(frozen=True)
class Spoiled:
    """What is wrong with a frame; the values of a good one are the defaults."""

    occlusion: float = 0.0
    blur_px: float = 0.0
    gain: float = 1.0
    noise: float = 1.0
    glare: float = 0.0  # grey levels added at the middle of a bright spot on the tag
    exposure_ms: float = 4.0  # smears the part along its motion

    def apply(self, pixels: Pixels, spot_px: Array, rng: np.random.Generator) -> Pixels:
        """Blur, gain and glare, in this order, on a rendered frame."""
        if self.blur_px > 0.0:
            pixels = np.asarray(cv2.GaussianBlur(pixels, (0, 0), self.blur_px), np.uint8)
        if self.gain != 1.0:
            pixels = np.asarray(cv2.convertScaleAbs(pixels, alpha=self.gain), np.uint8)
        if self.glare > 0.0:
            pixels = _with_glare(pixels, spot_px + rng.normal(0.0, 12.0, 2), self.glare, float(rng.uniform(10.0, 40.0)))
        return pixels


def _with_glare(pixels: Pixels, spot_px: Array, height: float, width_px: float) -> Pixels:
    v, u = np.mgrid[: pixels.shape[0], : pixels.shape[1]].astype(np.float32)
    spot = height * np.exp(-((u - spot_px[0]) ** 2 + (v - spot_px[1]) ** 2) / np.float32(2.0 * width_px**2))
    return np.clip(pixels + (spot[..., None] if pixels.ndim == 3 else spot), 0, 255).astype(np.uint8)


def motion(rng: np.random.Generator, n: int, box_mm: float = 12.0, speed: float = 60.0, turn: float = 2.1) -> tuple[Array, Array]:
    """Poses (n, 3) and twists (n, 3) of a part pushed about: speeds [mm/s, rad/s] that wander, walls at ± box_mm."""
    poses, twists = np.empty((n, 3)), np.empty((n, 3))
    pose = np.array([*rng.uniform(-box_mm, box_mm, 2), rng.uniform(-math.pi, math.pi)])
    twist = np.zeros(3)
    for i in range(n):
        wish = np.array([*rng.normal(0.0, speed, 2), rng.normal(0.0, turn)])
        wish[:2] -= speed * np.clip(pose[:2] / box_mm, -2.0, 2.0)
        twist = np.clip(0.85 * twist + 0.3 * wish, [-speed, -speed, -turn], [speed, speed, turn])
        pose = pose + twist * FRAME_US * 1e-6
        poses[i], twists[i] = pose, twist
    return poses, twists


class Bench:
    """A rendered bench whose fingers keep clear of the part unless told otherwise."""

    def __init__(self, camera: Camera, part: Part, seed: int, hand: str = "trefoil") -> None:
        self.camera, self.part = camera, part
        self.hand = HandModel(load_hand(hand))
        self._renderer = Renderer(camera, self.hand, part, seed)
        self._rng = np.random.default_rng(seed)
        self.away = np.array(self.hand.low)  # joints that leave the middle of the plate free

    def frame(self, index: int, pose: Array, twist: Array, spoiled: Spoiled, joints: Array | None = None) -> Frame:
        """One frame of the part at pose (3,) moving with twist (3,)."""
        smeared = twist * spoiled.exposure_ms / self.camera.exposure_ms
        seen = Pose2.from_array(pose)
        pixels = self._renderer.render(seen, self.away if joints is None else joints, spoiled.noise, spoiled.occlusion, smeared)
        spot = model_of(self.camera).project_plane(seen.xy_mm, self.part.height_mm)
        return Frame(FRAME_US * index, spoiled.apply(pixels, spot, self._rng))

    def run(self, n: int, rng: np.random.Generator, spoiled: Spoiled) -> Iterator[tuple[Pose2, Frame]]:
        """True poses and frames of a seeded motion."""
        poses, twists = motion(rng, n)
        for index in range(n):
            yield Pose2.from_array(poses[index]), self.frame(index, poses[index], twists[index], spoiled)


def leaning_tag(camera: Camera, part: Part, pose: Pose2, lean_rad: float, about_rad: float) -> Pixels:
    """A grey picture of the part's tag alone, its plane leaning about an axis through the tag's middle; four samples a pixel each way."""
    model, tag, fine = model_of(camera), part.fiducial, 4
    hand_from_tag = pose @ tag.part_from_tag
    axis = np.array([math.cos(about_rad), math.sin(about_rad), 0.0])
    flat_x = np.array([math.cos(hand_from_tag.yaw_rad), math.sin(hand_from_tag.yaw_rad), 0.0])
    flat_y = np.array([-flat_x[1], flat_x[0], 0.0])
    along_x, along_y = (
        v * math.cos(lean_rad) + np.cross(axis, v) * math.sin(lean_rad) + axis * (axis @ v) * (1.0 - math.cos(lean_rad))
        for v in (flat_x, flat_y)
    )
    middle = np.array([*hand_from_tag.xy_mm, part.height_mm])
    turn, shift = model.motion[:, :3], model.motion[:, 3]
    plane_from_pinhole = np.linalg.inv(np.stack([turn @ along_x, turn @ along_y, turn @ middle + shift], axis=1))
    pixels = np.full((camera.height_px, camera.width_px), 150.0)
    u, v = model.project(middle)
    reach = int(tag.size_mm * model.px_per_mm(hand_from_tag.xy_mm, part.height_mm))
    steps = (np.arange(2 * reach * fine) + 0.5) / fine - 0.5
    columns, rows = np.meshgrid(int(u) - reach + steps, int(v) - reach + steps)
    ideal = model.undistort(np.stack([columns, rows], axis=-1))
    on_plane = ideal @ plane_from_pinhole[:, :2].T + plane_from_pinhole[:, 2]
    cell = on_plane[..., :2] / on_plane[..., 2:] / (tag.size_mm / pattern.N_CELLS) + pattern.N_CELLS / 2
    column, row = np.floor(cell[..., 0]).astype(int), pattern.N_CELLS - 1 - np.floor(cell[..., 1]).astype(int)
    lowest, highest = np.minimum(column, row), np.maximum(column, row)
    code = np.where(pattern.cells(tag.id)[np.clip(row, 0, 7), np.clip(column, 0, 7)], 225.0, 32.0)
    value = np.where((lowest >= 0) & (highest < 8), code, np.where((lowest >= -1) & (highest <= 8), 225.0, 150.0))
    mean = value.reshape(2 * reach, fine, 2 * reach, fine).mean(axis=(1, 3))
    pixels[int(v) - reach : int(v) + reach, int(u) - reach : int(u) + reach] = mean
    return np.round(cv2.GaussianBlur(pixels, (0, 0), 0.5)).astype(np.uint8)
