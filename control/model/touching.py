"""Every place where a finger touches the part or nearly does, as linear constraints on small motions of both.

A contact is a corner of the part beside a link, or a joint or tip of a finger beside an edge; a link flush with an edge has two or more.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from control.model.kinematics import MAX_LINKS, HandArrays
from hw_profiles.geometry import Array

MARGIN_MM = 3.0  # contacts further apart than this are left out
MAX_CONTACTS = 48
# A contact row: gap [mm]; normal from the part into the finger (2); place about the part's origin, in the hand frame (2); how the finger's
# joints move the contact along the normal, and along the tangent, which is the normal turned by +90° (MAX_LINKS each).
GAP, NORMAL, PLACE, ALONG, ACROSS = 0, 1, 3, 5, 5 + MAX_LINKS
N_COLUMNS = 5 + 2 * MAX_LINKS


@njit(cache=True)
def near_contacts(
    hand: HandArrays, joints: Array, lines_mm: Array, pose: Array, outline_mm: Array, disc_mm: float, rows: Array, owner: NDArray[np.int64]
) -> int:
    """Fill `rows` (MAX_CONTACTS, N_COLUMNS) and `owner` (MAX_CONTACTS,), the finger of each; returns how many."""
    n, m = 0, outline_mm.shape[0]
    cos, sin = math.cos(pose[2]), math.sin(pose[2])
    corners = np.empty((m, 2))
    for i in range(m):
        corners[i, 0] = cos * outline_mm[i, 0] - sin * outline_mm[i, 1]
        corners[i, 1] = sin * outline_mm[i, 0] + cos * outline_mm[i, 1]
    for f in range(lines_mm.shape[0]):
        n_links = hand.first[f + 1] - hand.first[f]
        for k in range(n_links):
            ax, ay = lines_mm[f, k, 0] - pose[0], lines_mm[f, k, 1] - pose[1]
            bx, by = lines_mm[f, k + 1, 0] - pose[0], lines_mm[f, k + 1, 1] - pose[1]
            link_mm = hand.link_radius_mm[hand.first[f] + k]
            is_tip = k == n_links - 1
            end_mm = hand.tip_radius_mm[f] if is_tip else max(link_mm, hand.link_radius_mm[hand.first[f] + k + 1])
            if disc_mm > 0.0:
                x, y, _ = _foot(0.0, 0.0, ax, ay, bx, by)
                n = _add(hand, joints, lines_mm, pose, f, k, x, y, link_mm, 0.0, 0.0, disc_mm, rows, owner, n)
                n = _add(hand, joints, lines_mm, pose, f, k, bx, by, end_mm, 0.0, 0.0, disc_mm, rows, owner, n)
                continue
            for i in range(m):
                cx, cy = corners[i]
                x, y, share = _foot(cx, cy, ax, ay, bx, by)
                if 0.0 < share < 1.0:
                    n = _add(hand, joints, lines_mm, pose, f, k, x, y, link_mm, cx, cy, 0.0, rows, owner, n)
                else:
                    n = _add(hand, joints, lines_mm, pose, f, k, bx, by, end_mm, cx, cy, 0.0, rows, owner, n)
                dx, dy = corners[(i + 1) % m]
                x, y, share = _foot(bx, by, cx, cy, dx, dy)
                if 0.0 < share < 1.0 and (dy - cy) * (bx - cx) - (dx - cx) * (by - cy) > 0.0:  # beside the edge, on its outer side
                    n = _add(hand, joints, lines_mm, pose, f, k, bx, by, end_mm, x, y, 0.0, rows, owner, n)
    return n


@njit(cache=True)
def _foot(x: float, y: float, ax: float, ay: float, bx: float, by: float) -> tuple[float, float, float]:
    """Point of the segment a–b nearest to (x, y), and its share of the way."""
    ux, uy = bx - ax, by - ay
    square = ux * ux + uy * uy
    share = min(max(((x - ax) * ux + (y - ay) * uy) / square, 0.0), 1.0) if square > 0.0 else 0.0
    return ax + share * ux, ay + share * uy, share


@njit(cache=True)
def _add(
    hand: HandArrays,
    joints: Array,
    lines_mm: Array,
    pose: Array,
    f: int,
    k: int,
    x: float,
    y: float,
    finger_mm: float,
    part_x: float,
    part_y: float,
    part_mm: float,
    rows: Array,
    owner: NDArray[np.int64],
    n: int,
) -> int:
    """Add the contact of a circle on link k of finger f with a circle on the part, if they are near; both about the part's origin."""
    distance = math.hypot(x - part_x, y - part_y)
    gap = distance - finger_mm - part_mm
    if gap > MARGIN_MM or distance < 1e-6 or n == MAX_CONTACTS:
        return n
    nx, ny = (x - part_x) / distance, (y - part_y) / distance
    px, py = part_x + part_mm * nx, part_y + part_mm * ny
    row = rows[n]
    row[GAP], row[NORMAL], row[NORMAL + 1], row[PLACE], row[PLACE + 1] = gap, nx, ny, px, py
    yaw = hand.base_yaw_rad[f]
    for j in range(MAX_LINKS):
        row[ALONG + j] = row[ACROSS + j] = 0.0
        if j > k:
            continue
        index = hand.first[f] + j
        if hand.is_slide[index]:
            vx, vy = math.cos(yaw), math.sin(yaw)
        else:
            yaw += joints[index]
            vx, vy = -(py + pose[1] - lines_mm[f, j, 1]), px + pose[0] - lines_mm[f, j, 0]
        row[ALONG + j], row[ACROSS + j] = vx * nx + vy * ny, -vx * ny + vy * nx
    owner[n] = f
    return n + 1
