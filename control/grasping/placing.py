"""Placing fingers about a part so that each one, by whatever of it is nearest, stands off or presses by a wanted amount.

A tip is put over its contact along the contact's normal. Where the last link would then run into the part beside the tip (fingers that
wrap a part like an iris touch it with their flank), the tip is drawn back along the normal until the finger as a whole stands where it
should. One solve costs some 10 µs a finger.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from control.model.kinematics import HandModel, centre_lines_kernel, place_all
from hw_profiles.geometry import Array
from hw_profiles.part import Disc, Part

SETTLED_MM = 0.05
N_CORRECTIONS = 8


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


def place(
    hand: HandModel, shape: PartShape, contacts_mm: Array, normals: Array, turns_rad: Array, pose: Array, clearance_mm: float, near: Array
) -> tuple[Array, float, Array]:
    """Joint values that put every finger at a clearance about the part at `pose` (3,).

    Parameters
    ----------
    contacts_mm, normals : (n_fingers, 2) nominal contacts and outward normals in the part frame.
    turns_rad : (n_fingers,) from a contact's normal to the wanted direction of the last link; nan where it does not matter.
    clearance_mm : wanted distance of each finger to the part; negative presses that far in.

    Returns
    -------
    joints (n_joints,); the worst distance [mm] that inverse kinematics or the clearance fall short by; and where each finger is
    nearest: (n_fingers, 5) point and outward normal in the part frame [mm], and the signed clearance [mm].
    """
    joints, left_mm, touch = _place_about(
        hand.base_mm,
        hand.base_yaw_rad,
        hand.first,
        hand.is_slide,
        hand.link_mm,
        hand.link_radius_mm,
        hand.tip_radius_mm,
        hand.contact_radius_mm,
        hand.low,
        hand.high,
        hand.contact_back_mm,
        shape.outline_mm,
        shape.radius_mm,
        contacts_mm,
        normals,
        turns_rad,
        pose,
        clearance_mm,
        near,
    )
    return joints, float(left_mm), touch


@njit(cache=True)
def _place_about(
    base_mm: Array,
    base_yaw_rad: Array,
    first: NDArray[np.int64],
    is_slide: NDArray[np.bool_],
    link_mm: Array,
    link_radius_mm: Array,
    tip_radius_mm: Array,
    contact_radius_mm: Array,
    low: Array,
    high: Array,
    back: Array,
    outline_mm: Array,
    disc_mm: float,
    contacts_mm: Array,
    normals: Array,
    turns_rad: Array,
    pose: Array,
    clearance_mm: float,
    near: Array,
) -> tuple[Array, float, Array]:
    n = base_mm.shape[0]
    cos, sin = math.cos(pose[2]), math.sin(pose[2])
    drawn_back, left_mm = np.zeros(n), np.empty(n)
    centres, yaws, touch = np.empty((n, 2)), np.empty(n), np.empty((n, 5))
    joints = near
    for _ in range(N_CORRECTIONS):
        for f in range(n):
            off = contact_radius_mm[f] + clearance_mm + drawn_back[f]
            px, py = contacts_mm[f, 0] + normals[f, 0] * off, contacts_mm[f, 1] + normals[f, 1] * off
            centres[f, 0], centres[f, 1] = pose[0] + cos * px - sin * py, pose[1] + sin * px + cos * py
            yaws[f] = math.atan2(normals[f, 1], normals[f, 0]) + turns_rad[f] + pose[2]
        joints = place_all(base_mm, base_yaw_rad, first, is_slide, link_mm, low, high, back, centres, yaws, joints, left_mm)
        lines = centre_lines_kernel(base_mm, base_yaw_rad, first, is_slide, link_mm, joints)
        short = 0.0
        for f in range(n):
            n_links = first[f + 1] - first[f]
            nearest_on_finger(
                lines[f], n_links, link_radius_mm[first[f] : first[f + 1]], tip_radius_mm[f], pose, outline_mm, disc_mm, touch[f]
            )
            lack = clearance_mm - touch[f, 4]
            if lack > SETTLED_MM:
                drawn_back[f] += 1.2 * lack
            short = max(short, lack)
        if short <= SETTLED_MM:
            break
    return joints, max(left_mm.max(), short), touch


@njit(cache=True)
def nearest_on_finger(
    line_mm: Array, n_links: int, link_radius_mm: Array, tip_radius_mm: float, pose: Array, outline_mm: Array, disc_mm: float, touch: Array
) -> None:
    """Where a finger is nearest to the part: fills `touch` with the point on the outline and its outward normal, in the part frame
    [mm], and the signed clearance [mm] (right to within the link's radius of depth)."""
    cos, sin = math.cos(pose[2]), math.sin(pose[2])
    touch[4] = np.inf
    local = np.empty((n_links + 1, 2))
    for k in range(n_links + 1):
        x, y = line_mm[k, 0] - pose[0], line_mm[k, 1] - pose[1]
        local[k, 0], local[k, 1] = cos * x + sin * y, -sin * x + cos * y
    for k in range(n_links):
        _nearest_on_link(local[k], local[k + 1], link_radius_mm[k], outline_mm, disc_mm, touch)
    _nearest_on_link(local[n_links], local[n_links], tip_radius_mm, outline_mm, disc_mm, touch)


@njit(cache=True)
def _nearest_on_link(a: Array, b: Array, radius_mm: float, outline_mm: Array, disc_mm: float, touch: Array) -> None:
    if disc_mm > 0.0:
        x, y = _toward(0.0, 0.0, a, b)
        distance = math.hypot(x, y)
        if distance - disc_mm - radius_mm < touch[4]:
            touch[2], touch[3] = x / max(distance, 1e-9), y / max(distance, 1e-9)
            touch[0], touch[1] = disc_mm * touch[2], disc_mm * touch[3]
            touch[4] = distance - disc_mm - radius_mm
        return
    n = outline_mm.shape[0]
    for i in range(n):
        c, d = outline_mm[i], outline_mm[(i + 1) % n]
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
            # The outward side of an edge is to its right.
            is_inside = edge_y * gap_x - edge_x * gap_y < 0.0 and _is_inside(px, py, outline_mm)
            signed = -gap if is_inside else gap
            if signed - radius_mm < touch[4]:
                touch[4] = signed - radius_mm
                touch[0], touch[1] = qx, qy
                if gap > 1e-6 and not is_inside:
                    touch[2], touch[3] = gap_x / gap, gap_y / gap
                else:
                    touch[2], touch[3] = edge_y / length, -edge_x / length


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
