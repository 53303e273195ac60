"""Planar rigid motions and polygons: the geometry that vision and control share.

Frames are named in variables as ``target_from_source``; composition cancels by adjacency,
``hand_from_part = hand_from_camera @ camera_from_part``. Lengths in mm, angles in rad, polygons counter-clockwise.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]


def wrap_angle(angle_rad: float) -> float:
    """The same direction in (-π, π]."""
    return math.pi - (math.pi - angle_rad) % (2.0 * math.pi)


def unit(angle_rad: float) -> Array:
    """Unit vector (2,) at an angle from the x axis."""
    return np.array([math.cos(angle_rad), math.sin(angle_rad)])


@dataclass(frozen=True, slots=True)
class Pose2:
    """A planar pose, or the rigid motion that carries the source frame onto the target frame: x, y [mm], yaw [rad]."""

    x_mm: float
    y_mm: float
    yaw_rad: float

    @classmethod
    def from_array(cls, values: ArrayLike) -> Pose2:
        """Pose from (3,) x, y [mm], yaw [rad]."""
        x_mm, y_mm, yaw_rad = np.asarray(values, dtype=float)
        return cls(float(x_mm), float(y_mm), float(yaw_rad))

    def as_array(self) -> Array:
        """(3,) x, y [mm], yaw [rad]."""
        return np.array([self.x_mm, self.y_mm, self.yaw_rad])

    @property
    def xy_mm(self) -> Array:
        """Position (2,) [mm]."""
        return np.array([self.x_mm, self.y_mm])

    def __matmul__(self, other: Pose2) -> Pose2:
        cos, sin = math.cos(self.yaw_rad), math.sin(self.yaw_rad)
        return Pose2(
            self.x_mm + cos * other.x_mm - sin * other.y_mm,
            self.y_mm + sin * other.x_mm + cos * other.y_mm,
            wrap_angle(self.yaw_rad + other.yaw_rad),
        )

    def inverse(self) -> Pose2:
        """The motion that undoes this one."""
        cos, sin = math.cos(self.yaw_rad), math.sin(self.yaw_rad)
        return Pose2(-cos * self.x_mm - sin * self.y_mm, sin * self.x_mm - cos * self.y_mm, wrap_angle(-self.yaw_rad))

    def apply(self, points_mm: ArrayLike) -> Array:
        """Points (..., 2) [mm] of the source frame, in the target frame."""
        return self.rotate(points_mm) + self.xy_mm

    def rotate(self, vectors: ArrayLike) -> Array:
        """Vectors (..., 2) of the source frame, in the target frame (no translation)."""
        cos, sin = math.cos(self.yaw_rad), math.sin(self.yaw_rad)
        return np.asarray(np.asarray(vectors, dtype=float) @ np.array([[cos, sin], [-sin, cos]]))


IDENTITY = Pose2(0.0, 0.0, 0.0)


def signed_area(polygon_mm: ArrayLike) -> float:
    """Area [mm²] of a simple polygon (n, 2), positive when counter-clockwise (shoelace formula)."""
    p = np.asarray(polygon_mm, dtype=float)
    q = np.roll(p, -1, axis=0)
    return float(0.5 * np.sum(p[:, 0] * q[:, 1] - q[:, 0] * p[:, 1]))


def centroid(polygon_mm: ArrayLike) -> Array:
    """Centroid (2,) [mm] of the area of a simple polygon (n, 2)."""
    p = np.asarray(polygon_mm, dtype=float)
    q = np.roll(p, -1, axis=0)
    cross = p[:, 0] * q[:, 1] - q[:, 0] * p[:, 1]
    return np.asarray(((p + q) * cross[:, None]).sum(axis=0) / (3.0 * cross.sum()))


def gyration_radius_sq(polygon_mm: ArrayLike) -> float:
    """Polar second moment of area about the centroid per unit area [mm²], so that inertia = mass × this value."""
    p = np.asarray(polygon_mm, dtype=float)
    p = p - centroid(p)
    q = np.roll(p, -1, axis=0)
    cross = p[:, 0] * q[:, 1] - q[:, 0] * p[:, 1]
    squares = (p * p).sum(1) + (p * q).sum(1) + (q * q).sum(1)
    return float((cross * squares).sum() / (6.0 * cross.sum()))


def is_simple(polygon_mm: ArrayLike) -> bool:
    """Whether no two edges that are not neighbours touch and no edge has length zero."""
    p = np.asarray(polygon_mm, dtype=float)
    n = len(p)
    if np.any(np.linalg.norm(np.roll(p, -1, axis=0) - p, axis=1) < 1e-9):
        return False
    for i in range(n):
        for j in range(i + 2, n):
            if (i, j) != (0, n - 1) and _segments_touch(p[i], p[(i + 1) % n], p[j], p[(j + 1) % n]):
                return False
    return True


def _segments_touch(a: Array, b: Array, c: Array, d: Array) -> bool:
    def side(p: Array, q: Array, r: Array) -> float:
        return float((q[0] - p[0]) * (r[1] - p[1]) - (q[1] - p[1]) * (r[0] - p[0]))

    def within(p: Array, q: Array, r: Array) -> bool:
        return bool(np.all(np.minimum(p, q) <= r) and np.all(r <= np.maximum(p, q)))

    s1, s2, s3, s4 = side(a, b, c), side(a, b, d), side(c, d, a), side(c, d, b)
    if s1 * s2 < 0 and s3 * s4 < 0:
        return True
    touching = ((s1, a, b, c), (s2, a, b, d), (s3, c, d, a), (s4, c, d, b))
    return any(s == 0 and within(p, q, r) for s, p, q, r in touching)


def is_convex(polygon_mm: ArrayLike) -> bool:
    """Whether a counter-clockwise polygon (n, 2) turns left (or not at all) at every vertex."""
    p = np.asarray(polygon_mm, dtype=float)
    e = np.roll(p, -1, axis=0) - p
    f = np.roll(e, -1, axis=0)
    return bool(np.all(e[:, 0] * f[:, 1] - e[:, 1] * f[:, 0] >= -1e-9))


def convex_hull(points_mm: ArrayLike) -> Array:
    """Corners (m, 2) [mm] of the convex hull, counter-clockwise (Andrew's monotone chain, 1979)."""
    points = sorted({(float(x), float(y)) for x, y in np.asarray(points_mm, dtype=float)})
    if len(points) < 3:
        return np.array(points)

    def half(ordered: list[tuple[float, float]]) -> list[tuple[float, float]]:
        chain: list[tuple[float, float]] = []
        for x, y in ordered:
            while len(chain) >= 2:
                (ax, ay), (bx, by) = chain[-2], chain[-1]
                if (bx - ax) * (y - ay) - (by - ay) * (x - ax) > 0:
                    break
                chain.pop()
            chain.append((x, y))
        return chain[:-1]

    return np.array(half(points) + half(points[::-1]))


def minimum_width(polygon_mm: ArrayLike) -> float:
    """Least distance [mm] between two parallel lines that hold the polygon (n, 2) between them.

    The least is reached with one line on a hull edge (rotating calipers; Shamos 1978), so hull edges are enough.
    """
    hull = convex_hull(polygon_mm)
    edges = np.roll(hull, -1, axis=0) - hull
    normals = np.stack([-edges[:, 1], edges[:, 0]], axis=1) / np.linalg.norm(edges, axis=1)[:, None]
    offsets = np.einsum("ek,pk->ep", normals, hull)
    return float((offsets.max(axis=1) - offsets.min(axis=1)).min())


def contains(polygon_mm: ArrayLike, points_mm: ArrayLike) -> NDArray[np.bool_]:
    """Whether each point (..., 2) lies inside the simple polygon (n, 2) (even-odd crossing count)."""
    p = np.asarray(polygon_mm, dtype=float)
    q = np.roll(p, -1, axis=0)
    points = np.asarray(points_mm, dtype=float)[..., None, :]
    straddles = (p[:, 1] > points[..., 1]) != (q[:, 1] > points[..., 1])
    rise = np.where(q[:, 1] == p[:, 1], 1.0, q[:, 1] - p[:, 1])
    crossing_x = p[:, 0] + (points[..., 1] - p[:, 1]) * (q[:, 0] - p[:, 0]) / rise
    return np.asarray(np.count_nonzero(straddles & (points[..., 0] < crossing_x), axis=-1) % 2 == 1)


def boundary_distance(polygon_mm: ArrayLike, points_mm: ArrayLike) -> Array:
    """Distance [mm] of each point (..., 2) to the outline of the polygon (n, 2), inside or out."""
    p = np.asarray(polygon_mm, dtype=float)
    e = np.roll(p, -1, axis=0) - p
    offset = np.asarray(points_mm, dtype=float)[..., None, :] - p
    along = np.clip((offset * e).sum(-1) / (e * e).sum(-1), 0.0, 1.0)
    return np.asarray(np.linalg.norm(offset - along[..., None] * e, axis=-1).min(axis=-1))


def inscribed_radius(polygon_mm: ArrayLike) -> float:
    """Radius [mm] of the largest circle inside a simple polygon, to 0.01 mm (grid refined about the best cells)."""
    p = np.asarray(polygon_mm, dtype=float)
    centres = p.mean(axis=0, keepdims=True)
    half = float(np.ptp(p, axis=0).max()) / 2.0
    steps = np.linspace(-1.0, 1.0, 17)
    offsets = np.stack(np.meshgrid(steps, steps), axis=-1).reshape(-1, 2)
    best = 0.0
    while half > 1e-3:
        grid = (centres[:, None, :] + half * offsets).reshape(-1, 2)
        radii = np.where(contains(p, grid), boundary_distance(p, grid), 0.0)
        keep = np.argsort(radii)[::-1][:6]
        best, centres, half = max(best, float(radii[keep[0]])), grid[keep], half / 4.0
    return best
