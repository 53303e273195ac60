"""Distances between fingers, and between fingers and the part.

A finger is a chain of capsules ending in a round tip; a part is a disc or a simple polygon. A distance is signed: negative where they
overlap, and then no larger in size than the depth to which some point of the finger's centre line lies in the part, plus its radius.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit

from control.model.kinematics import HandArrays, HandModel, centre_lines_kernel
from hw_profiles.geometry import Array, Pose2
from hw_profiles.part import Disc, Part


@dataclass(frozen=True, eq=False)
class PartShape:
    """A part as kernels take it: outline (m, 2) [mm] counter-clockwise, and the radius when it is a disc (else 0)."""

    outline_mm: Array
    radius_mm: float

    @classmethod
    def of(cls, part: Part) -> PartShape:
        """The part's own shape."""
        return cls(np.array(part.outline_mm), part.circumradius_mm if isinstance(part.shape, Disc) else 0.0)

    @classmethod
    def circle(cls, radius_mm: float) -> PartShape:
        """A disc, for instance the circumcircle of a part."""
        return cls(np.zeros((0, 2)), radius_mm)


@dataclass(frozen=True, eq=False)
class Clearances:
    """Distances for one hand and one part."""

    hand: HandModel
    shape: PartShape

    def to_part(self, joints: Array, pose: Pose2) -> Array:
        """Signed distance (n_fingers,) [mm] of every finger to the part at a pose."""
        hand = self.hand.arrays
        touch = np.empty((self.hand.n_fingers, 5))
        touches(hand, centre_lines_kernel(hand, joints), pose.as_array(), self.shape.outline_mm, self.shape.radius_mm, touch)
        return touch[:, 4]

    def between_fingers(self, joints: Array) -> float:
        """Least distance [mm] between the surfaces of two fingers; negative when they overlap."""
        return float(fingers_apart(self.hand.arrays, centre_lines_kernel(self.hand.arrays, joints)))


@njit(cache=True)
def fingers_apart(hand: HandArrays, lines_mm: Array) -> float:
    """Least surface distance [mm] between any two fingers, given their centre lines (n_fingers, 4, 2)."""
    least = np.inf
    spot = np.empty(4)
    for f in range(lines_mm.shape[0]):
        for g in range(f):
            least = min(least, finger_gap(hand, lines_mm, f, g, spot))
    return least


@njit(cache=True)
def finger_gap(hand: HandArrays, lines_mm: Array, f: int, g: int, spot: Array) -> float:
    """Surface distance [mm] of two fingers; `spot` receives where it is: link and share along it, on each centre line."""
    first, link_radius_mm, tip_radius_mm = hand.first, hand.link_radius_mm, hand.tip_radius_mm
    least = np.inf
    n_f, n_g = first[f + 1] - first[f], first[g + 1] - first[g]
    for i in range(n_f + 1):  # index n stands for the round tip
        a = lines_mm[f, i]
        b = lines_mm[f, i + 1] if i < n_f else a
        r_f = link_radius_mm[first[f] + i] if i < n_f else tip_radius_mm[f]
        for j in range(n_g + 1):
            c = lines_mm[g, j]
            d = lines_mm[g, j + 1] if j < n_g else c
            r_g = link_radius_mm[first[g] + j] if j < n_g else tip_radius_mm[g]
            distance, s, t = segment_distance(a, b, c, d)
            if distance - r_f - r_g < least:
                least = distance - r_f - r_g
                spot[0], spot[1] = (float(i), s) if i < n_f else (float(n_f - 1), 1.0)
                spot[2], spot[3] = (float(j), t) if j < n_g else (float(n_g - 1), 1.0)
    return least


@njit(cache=True)
def segment_distance(a: Array, b: Array, c: Array, d: Array) -> tuple[float, float, float]:
    """Distance of segments a–b and c–d, and where along each (0 … 1) it is (Ericson, Real-Time Collision Detection, 5.1.9)."""
    ux, uy, vx, vy = b[0] - a[0], b[1] - a[1], d[0] - c[0], d[1] - c[1]
    wx, wy = a[0] - c[0], a[1] - c[1]
    uu, vv, uv = ux * ux + uy * uy, vx * vx + vy * vy, ux * vx + uy * vy
    uw, vw = ux * wx + uy * wy, vx * wx + vy * wy
    s, t = 0.0, 0.0
    if uu > 1e-12:
        denominator = uu * vv - uv * uv
        if denominator > 1e-12:
            s = min(max((uv * vw - uw * vv) / denominator, 0.0), 1.0)
        elif vv <= 1e-12:
            s = min(max(-uw / uu, 0.0), 1.0)
    if vv > 1e-12:
        t = (uv * s + vw) / vv
        if t < 0.0:
            t = 0.0
            s = min(max(-uw / uu, 0.0), 1.0) if uu > 1e-12 else 0.0
        elif t > 1.0:
            t = 1.0
            s = min(max((uv - uw) / uu, 0.0), 1.0) if uu > 1e-12 else 0.0
    return math.hypot(wx + s * ux - t * vx, wy + s * uy - t * vy), s, t


@njit(cache=True)
def touches(hand: HandArrays, lines_mm: Array, pose: Array, outline_mm: Array, disc_mm: float, touch: Array) -> None:
    """Where every finger is nearest to the part at `pose` (3,): fills `touch` (n_fingers, 5) with the point on the outline and the
    outward normal there, in the part frame [mm], and the signed clearance [mm]."""
    cos, sin = math.cos(pose[2]), math.sin(pose[2])
    local = np.empty((4, 2))
    for f in range(lines_mm.shape[0]):
        n_links = hand.first[f + 1] - hand.first[f]
        touch[f, 4] = np.inf
        for k in range(n_links + 1):
            x, y = lines_mm[f, k, 0] - pose[0], lines_mm[f, k, 1] - pose[1]
            local[k, 0], local[k, 1] = cos * x + sin * y, -sin * x + cos * y
        for k in range(n_links):
            link_touch(local[k], local[k + 1], hand.link_radius_mm[hand.first[f] + k], outline_mm, disc_mm, touch[f])
        link_touch(local[n_links], local[n_links], hand.tip_radius_mm[f], outline_mm, disc_mm, touch[f])


@njit(cache=True)
def link_touch(a: Array, b: Array, radius_mm: float, outline_mm: Array, disc_mm: float, touch: Array) -> None:
    """Where one link with centre line a–b (in the part frame) is nearest to the part, if nearer than `touch` says; see `touches`."""
    if disc_mm > 0.0:
        x, y = _toward(0.0, 0.0, a, b)
        distance = math.hypot(x, y)
        if distance - disc_mm - radius_mm < touch[4]:
            touch[2], touch[3] = x / max(distance, 1e-9), y / max(distance, 1e-9)
            touch[0], touch[1] = disc_mm * touch[2], disc_mm * touch[3]
            touch[4] = distance - disc_mm - radius_mm
        return
    n = outline_mm.shape[0]
    pierces = _is_inside(a[0], a[1], outline_mm) or _is_inside(b[0], b[1], outline_mm)
    for i in range(n):
        c, d = outline_mm[i], outline_mm[(i + 1) % n]
        pierces = pierces or _cross(a, b, c, d)
        edge_x, edge_y = d[0] - c[0], d[1] - c[1]
        length = math.hypot(edge_x, edge_y)
        for which in range(4):  # least distance of two segments that do not cross: at an end of one of them
            if which < 2:
                p = a if which == 0 else b
                qx, qy = _toward(p[0], p[1], c, d)
                px, py = p[0], p[1]
            else:
                q = c if which == 2 else d
                px, py = _toward(q[0], q[1], a, b)
                qx, qy = q[0], q[1]
            gap_x, gap_y = px - qx, py - qy
            gap = math.hypot(gap_x, gap_y)
            if gap - radius_mm < touch[4]:
                touch[4] = gap - radius_mm
                touch[0], touch[1] = qx, qy
                if gap > 1e-6:
                    touch[2], touch[3] = gap_x / gap, gap_y / gap
                else:
                    touch[2], touch[3] = edge_y / length, -edge_x / length
    if pierces:
        _deepest_on_link(a, b, radius_mm, outline_mm, touch)


@njit(cache=True)
def _deepest_on_link(a: Array, b: Array, radius_mm: float, outline_mm: Array, touch: Array) -> None:
    """Of a link whose centre line runs through the polygon: how deep its ends and the points beside the corners and edges lie."""
    n = outline_mm.shape[0]
    for i in range(-2, 2 * n):
        if i < 0:
            px, py = (a[0], a[1]) if i == -2 else (b[0], b[1])
        else:
            c, d = outline_mm[i // 2], outline_mm[(i // 2 + 1) % n]
            at = 0.5 * (i % 2)
            px, py = _toward(c[0] + at * (d[0] - c[0]), c[1] + at * (d[1] - c[1]), a, b)
        if not _is_inside(px, py, outline_mm):
            continue
        depth, qx, qy, edge = np.inf, 0.0, 0.0, 0
        for k in range(n):
            x, y = _toward(px, py, outline_mm[k], outline_mm[(k + 1) % n])
            if math.hypot(px - x, py - y) < depth:
                depth, qx, qy, edge = math.hypot(px - x, py - y), x, y, k
        if -depth - radius_mm < touch[4]:
            edge_x, edge_y = outline_mm[(edge + 1) % n, 0] - outline_mm[edge, 0], outline_mm[(edge + 1) % n, 1] - outline_mm[edge, 1]
            length = math.hypot(edge_x, edge_y)
            touch[4], touch[0], touch[1] = -depth - radius_mm, qx, qy
            touch[2], touch[3] = edge_y / length, -edge_x / length


@njit(cache=True)
def _cross(a: Array, b: Array, c: Array, d: Array) -> bool:
    """Whether segments a–b and c–d cross."""
    ux, uy, vx, vy = b[0] - a[0], b[1] - a[1], d[0] - c[0], d[1] - c[1]
    c_left, d_left = ux * (c[1] - a[1]) - uy * (c[0] - a[0]), ux * (d[1] - a[1]) - uy * (d[0] - a[0])
    a_left, b_left = vx * (a[1] - c[1]) - vy * (a[0] - c[0]), vx * (b[1] - c[1]) - vy * (b[0] - c[0])
    return (c_left > 0.0) != (d_left > 0.0) and (a_left > 0.0) != (b_left > 0.0)


@njit(cache=True)
def _toward(x: float, y: float, a: Array, b: Array) -> tuple[float, float]:
    """Point of segment a–b nearest to (x, y)."""
    ux, uy = b[0] - a[0], b[1] - a[1]
    square = ux * ux + uy * uy
    s = 0.0
    if square > 0.0:
        s = min(max(((x - a[0]) * ux + (y - a[1]) * uy) / square, 0.0), 1.0)
    return a[0] + s * ux, a[1] + s * uy


@njit(cache=True)
def _is_inside(x: float, y: float, outline_mm: Array) -> bool:
    inside = False
    j = outline_mm.shape[0] - 1
    for i in range(outline_mm.shape[0]):
        if (outline_mm[i, 1] > y) != (outline_mm[j, 1] > y):
            along = (y - outline_mm[i, 1]) / (outline_mm[j, 1] - outline_mm[i, 1])
            if x < outline_mm[i, 0] + along * (outline_mm[j, 0] - outline_mm[i, 0]):
                inside = not inside
        j = i
    return inside
