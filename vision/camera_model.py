"""The camera as geometry: hand frame to pixels and back onto planes parallel to the plate.

Pixel coordinates (u_px, v_px) put integer values on pixel centres. Pinhole with radial and tangential distortion (Brown 1971,
coefficients k1 k2 p1 p2 k3 in OpenCV's order). A plane z = const of the hand frame and the undistorted image are related by a
homography (Hartley & Zisserman, Multiple View Geometry, ch. 8), so points of known height need no 6-DoF pose.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numba import njit
from numpy.typing import ArrayLike

from hw_profiles.camera import Camera
from hw_profiles.geometry import Array


class CameraModel:
    """A camera profile as arrays, ready for kernels.

    Attributes
    ----------
    lens : (9,) fx, fy, cx, cy [px], k1, k2, p1, p2, k3; read-only.
    motion : (3, 4) rigid motion [mm] from the hand frame to the camera frame; read-only.
    """

    def __init__(self, camera: Camera) -> None:
        self.camera = camera
        self.lens = np.array([*camera.focal_px, *camera.principal_px, *camera.distortion])
        self.motion = np.ascontiguousarray(camera.camera_from_hand[:3])
        self.lens.setflags(write=False)
        self.motion.setflags(write=False)

    def project(self, points_mm: ArrayLike) -> Array:
        """Pixels (..., 2) of points (..., 3) [mm] of the hand frame."""
        points = np.asarray(points_mm, dtype=float)
        flat = _project_all(self.lens, self.motion, np.ascontiguousarray(points.reshape(-1, 3)))
        return np.asarray(flat.reshape(*points.shape[:-1], 2))

    def project_plane(self, points_mm: ArrayLike, z_mm: float) -> Array:
        """Pixels (..., 2) of points (..., 2) [mm] on the plane at height z_mm."""
        points = np.asarray(points_mm, dtype=float)
        return self.project(np.concatenate([points, np.full((*points.shape[:-1], 1), z_mm)], axis=-1))

    def undistort(self, points_px: ArrayLike) -> Array:
        """Ideal pinhole coordinates (..., 2), x/z and y/z of the camera frame, of pixels (..., 2)."""
        points = np.asarray(points_px, dtype=float)
        flat = undistort_all(self.lens, np.ascontiguousarray(points.reshape(-1, 2)))
        return np.asarray(flat.reshape(points.shape))

    def pinhole_from_plane(self, z_mm: float) -> Array:
        """Homography (3, 3) from the plane z = z_mm of the hand frame to ideal pinhole coordinates.

        [r1 r2 r3·z + t], the columns of the rigid motion (Zhang 2000, Eq. (2), for a plane off the origin).
        """
        turn, shift = self.motion[:, :3], self.motion[:, 3]
        return np.stack([turn[:, 0], turn[:, 1], turn[:, 2] * z_mm + shift], axis=1)

    def plane_points(self, points_px: ArrayLike, z_mm: float) -> Array:
        """Points (..., 2) [mm] of the hand frame at height z_mm that pixels (..., 2) show."""
        ideal = self.undistort(points_px)
        plane_from_pinhole = np.linalg.inv(self.pinhole_from_plane(z_mm))
        mapped = ideal @ plane_from_pinhole[:, :2].T + plane_from_pinhole[:, 2]
        return np.asarray(mapped[..., :2] / mapped[..., 2:])

    def px_per_mm(self, point_mm: ArrayLike, z_mm: float) -> float:
        """Image scale at a point (2,) of a plane: square root of the area a square millimetre fills."""
        x, y = np.asarray(point_mm, dtype=float)
        _, _, a, b, c, d = project_with_slope(self.lens, self.motion, float(x), float(y), z_mm)
        return math.sqrt(abs(a * d - b * c))


@lru_cache(maxsize=8)
def model_of(camera: Camera) -> CameraModel:
    """The model of a camera profile, made once."""
    return CameraModel(camera)


@njit(cache=True)
def distort(lens: Array, x: float, y: float) -> tuple[float, float]:
    """Pixel of an ideal pinhole point (Brown 1971)."""
    k1, k2, p1, p2, k3 = lens[4], lens[5], lens[6], lens[7], lens[8]
    r2 = x * x + y * y
    radial = 1.0 + r2 * (k1 + r2 * (k2 + r2 * k3))
    xd = x * radial + 2.0 * p1 * x * y + p2 * (r2 + 2.0 * x * x)
    yd = y * radial + p1 * (r2 + 2.0 * y * y) + 2.0 * p2 * x * y
    return lens[0] * xd + lens[2], lens[1] * yd + lens[3]


@njit(cache=True)
def distortion_slope(lens: Array, x: float, y: float) -> tuple[float, float, float, float]:
    """d(u, v)/d(x, y) of `distort`: du/dx, du/dy, dv/dx, dv/dy."""
    k1, k2, p1, p2, k3 = lens[4], lens[5], lens[6], lens[7], lens[8]
    r2 = x * x + y * y
    radial = 1.0 + r2 * (k1 + r2 * (k2 + r2 * k3))
    slope = 2.0 * (k1 + r2 * (2.0 * k2 + r2 * 3.0 * k3))  # d radial / dx = x · slope
    ux = radial + x * x * slope + 2.0 * p1 * y + 6.0 * p2 * x
    cross = x * y * slope + 2.0 * p1 * x + 2.0 * p2 * y
    vy = radial + y * y * slope + 6.0 * p1 * y + 2.0 * p2 * x
    return lens[0] * ux, lens[0] * cross, lens[1] * cross, lens[1] * vy


@njit(cache=True)
def project_with_slope(lens: Array, motion: Array, x: float, y: float, z: float) -> tuple[float, float, float, float, float, float]:
    """Pixel of a hand point and its slope along the plane: u, v, du/dx, du/dy, dv/dx, dv/dy [px/mm]."""
    cx = motion[0, 0] * x + motion[0, 1] * y + motion[0, 2] * z + motion[0, 3]
    cy = motion[1, 0] * x + motion[1, 1] * y + motion[1, 2] * z + motion[1, 3]
    cz = motion[2, 0] * x + motion[2, 1] * y + motion[2, 2] * z + motion[2, 3]
    px, py = cx / cz, cy / cz
    u, v = distort(lens, px, py)
    a, b, c, d = distortion_slope(lens, px, py)
    px_x, px_y = (motion[0, 0] - px * motion[2, 0]) / cz, (motion[0, 1] - px * motion[2, 1]) / cz
    py_x, py_y = (motion[1, 0] - py * motion[2, 0]) / cz, (motion[1, 1] - py * motion[2, 1]) / cz
    return u, v, a * px_x + b * py_x, a * px_y + b * py_y, c * px_x + d * py_x, c * px_y + d * py_y


@njit(cache=True)
def _project_all(lens: Array, motion: Array, points: Array) -> Array:
    pixels = np.empty((points.shape[0], 2))
    for i in range(points.shape[0]):
        x, y, z = points[i, 0], points[i, 1], points[i, 2]
        depth = motion[2, 0] * x + motion[2, 1] * y + motion[2, 2] * z + motion[2, 3]
        px = (motion[0, 0] * x + motion[0, 1] * y + motion[0, 2] * z + motion[0, 3]) / depth
        py = (motion[1, 0] * x + motion[1, 1] * y + motion[1, 2] * z + motion[1, 3]) / depth
        pixels[i, 0], pixels[i, 1] = distort(lens, px, py)
    return pixels


@njit(cache=True)
def undistort_all(lens: Array, pixels: Array) -> Array:
    """Ideal points (n, 2) of pixels (n, 2): Newton's method on `distort`, to 1e-9 px."""
    ideal = np.empty_like(pixels)
    for i in range(pixels.shape[0]):
        x, y = (pixels[i, 0] - lens[2]) / lens[0], (pixels[i, 1] - lens[3]) / lens[1]
        for _ in range(20):
            u, v = distort(lens, x, y)
            du, dv = u - pixels[i, 0], v - pixels[i, 1]
            if du * du + dv * dv < 1e-18:
                break
            a, b, c, d = distortion_slope(lens, x, y)
            det = a * d - b * c
            x -= (d * du - b * dv) / det
            y -= (a * dv - c * du) / det
        ideal[i, 0], ideal[i, 1] = x, y
    return ideal
