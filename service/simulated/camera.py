"""Frames of the simulated camera: the plate, the part with its tag, and the fingers above it, through the profile's lens.

Modelled: true perspective of the plate (z = 0), the part's sides and its top face (z = height) with the tag, lens distortion, blur
of lens and pixel (0.58 px), motion during the exposure when a twist is given, fingers FINGER_ABOVE_MM above the top face so that
they hide what is under them, soft shadows on the plate, sensor noise. Not modelled: rolling shutter, defocus, shadows on the part,
specular glare, Bayer mosaic, compression. The plate has its noise baked in: N_PLATES noisy copies, one picked at random for each
frame; what moves gets noise from a seeded bank read at a random place.
"""

from __future__ import annotations

import math
from functools import lru_cache

import cv2
import numpy as np
from numpy.typing import NDArray

from control.model.kinematics import HandModel, centre_lines
from hw_profiles.camera import Camera
from hw_profiles.geometry import Array, Pose2
from hw_profiles.part import Part
from service.simulated import brush, scenery
from service.simulated.brush import BANK
from vision.camera_model import model_of
from vision.frames import Pixels

FINGER_ABOVE_MM = 4.0
ALLOY, RUBBER, HUB, CABLE = (128.0, 108.0, 58.0), (54.0, 50.0, 50.0), (150.0, 148.0, 142.0), (52.0, 58.0, 64.0)
SIDE = (120.0, 124.0, 126.0)
LIGHT = np.array([-0.35, 0.45, 0.82])  # toward the lamp, hand frame
GREY = np.array([0.114, 0.587, 0.299])  # luma weights of blue, green, red (ITU-R BT.601)
SHADOW_PER_MM = np.array([0.30, -0.38])  # how far a shadow falls beside its owner, per mm of height
N_PLATES = 6
GRAIN_SHIFT = 99_991
MAX_SUBFRAMES = 24


class Renderer:
    """Renders frames of one camera, hand and part. The same seed and the same calls give the same pixels."""

    def __init__(self, camera: Camera, hand_model: HandModel, part: Part, seed: int) -> None:
        self.camera, self.hand_model, self.part = camera, hand_model, part
        self._rng = np.random.default_rng(seed)
        self._model = model_of(camera)
        self._n_channels = 1 if camera.pixel_format == "mono8" else 3
        self._top_mm = self._plane_map(part.height_mm)
        self._finger_mm = self._plane_map(part.height_mm + FINGER_ABOVE_MM)
        self._plate_mm = self._plane_map(0.0)
        self._plate = scenery.plate_image(self._model, hand_model, self._plate_mm, np.random.default_rng(7))
        self._scale = self._model.px_per_mm((0.0, 0.0), part.height_mm)
        texture, self._texel_from_part = scenery.face_texture(part, self._scale)
        self._texture = np.dstack([self._as_pixels(texture[..., :3].astype(np.float32)), texture[..., 3]])
        self._unit_noise = self._rng.standard_normal(BANK, dtype=np.float32)
        self._noise_sd = -1.0
        self._set_noise(camera.noise_sd)
        self._cable_rad = float(self._rng.uniform(-math.pi, math.pi))

    def render(
        self,
        part_pose: Pose2,
        joints: Array,
        noise: float = 1.0,
        occlusion: float = 0.0,
        twist: Array | None = None,
    ) -> Pixels:
        """One frame, uint8 (height, width) or (height, width, 3) in BGR order.

        Parameters
        ----------
        part_pose : hand_from_part at the middle of the exposure.
        joints : (n_joints,) true joint values.
        noise : multiplies the profile's noise_sd.
        occlusion : 0 … 1, share of the tag's side that a cable hides, at a random place and a slowly turning angle.
        twist : (3,) velocity of the part [mm/s, mm/s, rad/s]; smears it over the exposure. None: at rest.
        """
        self._set_noise(noise * self.camera.noise_sd)
        canvas = self._noisy_plates[int(self._rng.integers(N_PLATES))].copy()
        start = int(self._rng.integers(BANK))
        capsules = self._capsules(joints)
        self._draw_shadows(canvas, part_pose, capsules)
        self._draw_walls(canvas, part_pose, start)
        self._draw_face(canvas, part_pose, twist, start)
        self._draw_bars(canvas, capsules, start)
        if occlusion > 0.0:
            self._draw_bars(canvas, self._cable(part_pose, occlusion), start)
        return canvas[..., 0] if self._n_channels == 1 else canvas

    def _set_noise(self, noise_sd: float) -> None:
        if noise_sd == self._noise_sd:
            return
        self._noise_sd = noise_sd
        self._bank = np.clip(np.round(self._unit_noise * noise_sd), -127, 127).astype(np.int8)
        plate = self._plate if self._n_channels == 3 else (self._plate @ GREY.astype(np.float32))[..., None]
        grain = _grain(plate.size)
        self._noisy_plates = []
        for index in range(N_PLATES):
            noise = grain[index * GRAIN_SHIFT : index * GRAIN_SHIFT + plate.size].reshape(plate.shape)
            noisy = plate + np.float32(noise_sd) * noise + np.float32(0.5)
            self._noisy_plates.append(np.clip(noisy, 0, 255, out=noisy).astype(np.uint8))

    def _plane_map(self, z_mm: float) -> NDArray[np.float32]:
        """Where on the plane z = z_mm each pixel looks (height, width, 2) [mm]."""
        plane_from_pinhole = np.linalg.inv(self._model.pinhole_from_plane(z_mm))
        mapped = _pinhole_map(self.camera) @ plane_from_pinhole[:, :2].T + plane_from_pinhole[:, 2]
        return np.asarray(mapped[..., :2] / mapped[..., 2:], dtype=np.float32)

    def _as_pixels(self, image: NDArray[np.float32]) -> Pixels:
        if self._n_channels == 1:
            image = (image @ GREY.astype(np.float32))[..., None]
        return np.clip(np.round(image), 0, 255).astype(np.uint8)

    def _colour(self, colour: scenery.Colour) -> list[float]:
        """Three numbers a kernel can use, whatever the pixel format."""
        return list(colour) if self._n_channels == 3 else [float(GREY @ np.array(colour))] * 3

    def _capsules(self, joints: Array) -> Array:
        """Fingers as capsules (n, 8): ax, ay, bx, by, radius [mm], blue, green, red; what is drawn later lies above."""
        hand, rows = self.hand_model, []
        alloy, hub, rubber = self._colour(ALLOY), self._colour(HUB), self._colour(RUBBER)
        for f, line in enumerate(centre_lines(hand, joints)):
            radii = hand.link_radius_mm[hand.joints_of(f)]
            for j, radius in enumerate(radii):
                rows.append([*line[j], *line[j + 1], radius, *alloy])
            for j, radius in enumerate(radii):
                rows.append([*line[j], *line[j], 0.62 * radius, *hub])
            rows.append([*line[-1], *line[-1], hand.tip_radius_mm[f], *rubber])
        return np.array(rows)

    def _cable(self, pose: Pose2, occlusion: float) -> Array:
        """A cable across the tag, as wide as the share of the tag's side it hides."""
        side = 2.0 * self.part.fiducial.half_mm[1]
        self._cable_rad += float(self._rng.normal(0.0, 0.05))
        width = occlusion * side
        beside = float(self._rng.uniform(-0.5, 0.5)) * (side - width)
        cos, sin = math.cos(self._cable_rad), math.sin(self._cable_rad)
        x, y = pose.apply([self.part.fiducial.x_mm, self.part.fiducial.y_mm]) + beside * np.array([-sin, cos])
        reach = 1.5 * side
        return np.array([[x - reach * cos, y - reach * sin, x + reach * cos, y + reach * sin, width / 2, *self._colour(CABLE)]])

    def _bars(self, capsules: Array, z_mm: float, outer_mm: Array, shift_mm: Array | float = 0.0) -> Array:
        """Where the image shows capsules of the plane z_mm: (n, 5) ends ua, va, ub, vb and a safe half width [px]."""
        ends = self._model.project_plane(capsules[:, :4].reshape(-1, 2, 2) + shift_mm, z_mm)
        return np.concatenate([ends.reshape(-1, 4), (outer_mm * self._scale * 1.12 + 1.0)[:, None]], axis=1)

    def _draw_bars(self, canvas: Pixels, capsules: Array, start: int) -> None:
        soft_mm = 1.6 / self._scale
        bars = self._bars(capsules, self.part.height_mm + FINGER_ABOVE_MM, capsules[:, 4] + soft_mm)
        brush.draw_capsules(canvas, self._finger_mm, capsules, bars, LIGHT, soft_mm, self._bank, start)

    def _cast(self, canvas: Pixels, capsules: Array, shift_mm: Array, soft_mm: float, depth: float) -> None:
        moved = capsules + np.array([*shift_mm, *shift_mm, 0.0, 0.0, 0.0, 0.0])
        brush.shade(canvas, self._plate_mm, moved, self._bars(moved, 0.0, moved[:, 4] + soft_mm), soft_mm, depth)

    def _draw_shadows(self, canvas: Pixels, pose: Pose2, capsules: Array) -> None:
        height = self.part.height_mm
        links = capsules[np.any(capsules[:, :2] != capsules[:, 2:4], axis=1)]
        self._cast(canvas, links, SHADOW_PER_MM * height * 0.8, 4.0, 0.28)
        middle, far = pose.xy_mm, pose.xy_mm + SHADOW_PER_MM * height
        radius = math.sqrt(2.0 * self.part.inertia_gmm2 / self.part.mass_g)
        self._cast(canvas, np.array([[*middle, *far, radius, 0.0, 0.0, 0.0]]), np.zeros(2), 5.0, 0.40)

    def _draw_walls(self, canvas: Pixels, pose: Pose2, start: int) -> None:
        """The walls that face the camera, each shaded by how it faces the lamp."""
        outline = pose.apply(self.part.outline_mm)[:: 2 if len(self.part.outline_mm) > 48 else 1]
        edge = np.roll(outline, -1, axis=0) - outline
        normal = np.stack([edge[:, 1], -edge[:, 0]], axis=1) / np.linalg.norm(edge, axis=1)[:, None]
        facing = np.sum(normal * (np.array(self.camera.mount.eye_mm[:2]) - outline), axis=1) > 0.0
        top, foot = self._model.project_plane(outline, self.part.height_mm), self._model.project_plane(outline, 0.0)
        quads = np.stack([foot, np.roll(foot, -1, axis=0), np.roll(top, -1, axis=0), top], axis=1)[facing]
        if len(quads) == 0:
            return
        low, high = self._box(quads.reshape(-1, 2))
        if np.any(high <= low):
            return
        light = 0.72 + 0.28 * normal[facing] @ LIGHT[:2] / math.hypot(LIGHT[0], LIGHT[1])
        cover, shade = np.zeros((2, high[1] - low[1], high[0] - low[0]), np.uint8)
        for quad, bright in zip(np.round((quads - low) * 16).astype(np.int32), light, strict=True):
            cv2.fillConvexPoly(cover, quad, 255, cv2.LINE_8, 4)
            cv2.fillConvexPoly(shade, quad, 200.0 * bright, cv2.LINE_8, 4)
        cover, shade = (cv2.GaussianBlur(layer, (3, 3), scenery.PIXEL_BLUR_PX) for layer in (cover, shade))
        brush.draw_shaded(canvas, cover, shade, np.array(self._colour(SIDE)) / 200.0, low[0], low[1], self._bank, start)

    def _box(self, points_px: Array) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """First and last-plus-one (column, row) of the pixels about some points (n, 2)."""
        size = np.array([self.camera.width_px, self.camera.height_px])
        low, high = np.floor(points_px.min(axis=0)) - 3, np.ceil(points_px.max(axis=0)) + 4
        return np.clip(low, 0, size).astype(np.int64), np.clip(high, 0, size).astype(np.int64)

    def _draw_face(self, canvas: Pixels, pose: Pose2, twist: Array | None, start: int) -> None:
        poses = self._exposure_poses(pose, twist)
        outlines = [Pose2.from_array(each).apply(self.part.outline_mm) for each in (poses[0], poses[-1])]
        low, high = self._box(self._model.project_plane(np.concatenate(outlines), self.part.height_mm))
        brush.draw_texture(canvas, self._top_mm, self._texture, self._texel_from_part, poses, low, high, self._bank, start)

    def _exposure_poses(self, pose: Pose2, twist: Array | None) -> Array:
        """Poses (n, 3) evenly over the exposure, half a pixel apart or less."""
        if twist is None:
            return pose.as_array()[None]
        exposure_s = self.camera.exposure_ms * 1e-3
        travel = exposure_s * (math.hypot(twist[0], twist[1]) + abs(twist[2]) * self.part.circumradius_mm)
        n = int(np.clip(math.ceil(2.0 * travel * self._scale), 1, MAX_SUBFRAMES))
        times = ((np.arange(n) + 0.5) / n - 0.5) * exposure_s
        return np.asarray(pose.as_array() + times[:, None] * twist)


@lru_cache(maxsize=2)
def _pinhole_map(camera: Camera) -> Array:
    """Ideal pinhole coordinates (height, width, 2) of every pixel."""
    v, u = np.mgrid[: camera.height_px, : camera.width_px].astype(float)
    return model_of(camera).undistort(np.stack([u, v], axis=-1))


@lru_cache(maxsize=2)
def _grain(size: int) -> NDArray[np.float32]:
    """Unit noise that the plates read from different places of; the same for every seed, the plates only have to differ."""
    return np.random.default_rng(11).standard_normal(size + N_PLATES * GRAIN_SHIFT, dtype=np.float32)
