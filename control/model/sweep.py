"""What blocks the sweep of one link: the values of its joint at which it would run into the part, in closed form.

The link is a capsule that starts at its joint and may end in a round tip; the part is a union of convex pieces, each inflated by the
radius. A turning link meets an inflated piece over one interval of directions, because what of it lies within the link's reach is convex;
the tip, running on a circle, meets it over a few. A sliding link meets it from the first entry on. All in the part frame; docs/model.md,
section 2.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from hw_profiles.geometry import Array

FAR = 1e9  # stands for "from here on", in any unit
TOUCH = 1e-10  # an interval's own ends are free
FULL_TURN = 2.0 * math.pi


@njit(cache=True)
def span_room(n_corners: int) -> int:
    """Rows that `blocked_turns` and `blocked_slides` may need for their answer and their working."""
    return 6 * n_corners + 8


@njit(cache=True)
def blocked_turns(
    x: float,
    y: float,
    length: float,
    radius: float,
    tip: float,
    corners_mm: Array,
    first: NDArray[np.int64],
    round_mm: float,
    out: Array,
) -> int:
    """Directions [rad] in which a link of `length` from the joint (x, y) runs into the part.

    Parameters
    ----------
    radius, tip : of the link and of the round tip at its end [mm]; tip 0 for none.
    corners_mm, first, round_mm : the part's `Pieces`.
    out : (≥ span_room, 2) receives intervals: start and width.

    Returns
    -------
    Number of intervals, −1 when the joint itself is inside the part so that every direction is blocked.
    """
    n = 0
    for piece in range(first.shape[0] - 1):
        a, b = first[piece], first[piece + 1]
        near_x, near_y, is_outside = _nearest(x, y, corners_mm, a, b)
        near = math.sqrt(near_x * near_x + near_y * near_y)
        if not is_outside or near < radius + round_mm:
            return -1
        if near < length + radius + round_mm:
            n += _link_span(x, y, near_x, near_y, near, length, radius + round_mm, corners_mm, a, b, out, n)
        if tip > radius and near < length + tip + round_mm:
            added = _tip_spans(x, y, length, tip + round_mm, corners_mm, a, b, out, n)
            if added < 0:
                return -1
            n += added
    return n


@njit(cache=True)
def _nearest(x: float, y: float, corners_mm: Array, a: int, b: int) -> tuple[float, float, bool]:
    """From (x, y) to the nearest point of the outline of corners a:b, and whether (x, y) lies outside it."""
    best, near_x, near_y = np.inf, 0.0, 0.0
    is_outside = b - a < 3
    for i in range(a, b):
        k = i + 1 if i + 1 < b else a
        cx, cy = corners_mm[i, 0] - x, corners_mm[i, 1] - y
        ex, ey = corners_mm[k, 0] - corners_mm[i, 0], corners_mm[k, 1] - corners_mm[i, 1]
        square, along = ex * ex + ey * ey, -(cx * ex + cy * ey)
        is_outside = is_outside or ex * cy - ey * cx > 0.0
        if along > 0.0:
            share = along / square if along < square else 1.0
            cx, cy = cx + share * ex, cy + share * ey
        distance = cx * cx + cy * cy
        if distance < best:
            best, near_x, near_y = distance, cx, cy
    return near_x, near_y, is_outside


@njit(cache=True)
def _link_span(
    x: float,
    y: float,
    near_x: float,
    near_y: float,
    near: float,
    length: float,
    r: float,
    corners_mm: Array,
    a: int,
    b: int,
    out: Array,
    n: int,
) -> int:
    """Write the directions under which the piece, inflated by r, is seen within the link's reach; always one interval.

    Directions are compared by how far they are turned from that of the nearest point, up to half a turn either way.
    """
    right_x, right_y, right = near_x, near_y, 0.0
    left_x, left_y, left = near_x, near_y, 0.0
    reach = length * length
    for i in range(a, b):
        k = i + 1 if i + 1 < b else a
        cx, cy = corners_mm[i, 0] - x, corners_mm[i, 1] - y
        square = cx * cx + cy * cy
        if square < (length + r) * (length + r):
            if square - r * r <= reach:  # tangent to the corner's circle: sin = r / distance
                cos, sin = math.sqrt(square - r * r), r
            else:  # where that circle is in reach: law of cosines, times the distance
                cos = (square + reach - r * r) / (2.0 * length)
                sin = math.sqrt(max(square - cos * cos, 0.0))
            for sign in (-1.0, 1.0):
                px, py = cx * cos - sign * cy * sin, sign * cx * sin + cy * cos
                turn = _turned(near_x, near_y, px, py)
                if turn < right:
                    right, right_x, right_y = turn, px, py
                if turn > left:
                    left, left_x, left_y = turn, px, py
        if k != i:  # where the link's end crosses the side of the inflated edge
            ex, ey = corners_mm[k, 0] - corners_mm[i, 0], corners_mm[k, 1] - corners_mm[i, 1]
            edge = math.sqrt(ex * ex + ey * ey)
            ux, uy = ex / edge, ey / edge
            h = uy * cx - ux * cy + r  # outward normal (u_y, −u_x)
            if abs(h) < length:
                start, half = ux * cx + uy * cy, math.sqrt(reach - h * h)
                for t in (-half, half):
                    if start <= t <= start + edge:
                        px, py = uy * h + ux * t, -ux * h + uy * t
                        turn = _turned(near_x, near_y, px, py)
                        if turn < right:
                            right, right_x, right_y = turn, px, py
                        if turn > left:
                            left, left_x, left_y = turn, px, py
    out[n, 0] = math.atan2(right_y, right_x)
    out[n, 1] = (math.atan2(left_y, left_x) - out[n, 0]) % FULL_TURN
    return 1


@njit(cache=True)
def _turned(ax: float, ay: float, bx: float, by: float) -> float:
    """A measure that grows with the turn from a to b: −2 … 2 for minus to plus half a turn."""
    along, across = ax * bx + ay * by, ax * by - ay * bx
    share = across / (abs(along) + abs(across))
    if along >= 0.0:
        return share
    return 2.0 - share if across >= 0.0 else -2.0 - share


@njit(cache=True)
def _tip_spans(x: float, y: float, length: float, r: float, corners_mm: Array, a: int, b: int, out: Array, n: int) -> int:
    """Append the directions in which a point at `length` lies within r of the piece; returns how many, −1 for every direction."""
    room = out.shape[0] - 1  # crossings of the circle with the outline of the inflated piece are kept from the far end of `out` on
    k = 0
    for i in range(a, b):
        after, before = i + 1 if i + 1 < b else a, i - 1 if i > a else b - 1
        cx, cy = corners_mm[i, 0] - x, corners_mm[i, 1] - y
        ex, ey = corners_mm[after, 0] - corners_mm[i, 0], corners_mm[after, 1] - corners_mm[i, 1]
        edge = math.sqrt(ex * ex + ey * ey)
        if edge > 0.0:
            ux, uy = ex / edge, ey / edge
            h = uy * cx - ux * cy + r
            if abs(h) < length:
                start, half = ux * cx + uy * cy, math.sqrt(length * length - h * h)
                for t in (-half, half):
                    if start <= t <= start + edge:
                        out[room - k, 0] = math.atan2(-ux * h + uy * t, uy * h + ux * t) % FULL_TURN
                        k += 1
        square = cx * cx + cy * cy
        if (length - r) * (length - r) < square < (length + r) * (length + r):  # the corner's circle is crossed; where, beside no edge?
            cos = (square + length * length - r * r) / (2.0 * length)
            sin = math.sqrt(max(square - cos * cos, 0.0))
            bx, by = corners_mm[before, 0] - corners_mm[i, 0], corners_mm[before, 1] - corners_mm[i, 1]
            for sign in (-1.0, 1.0):
                px, py = (cx * cos - sign * cy * sin) / square * length, (sign * cx * sin + cy * cos) / square * length
                if (px - cx) * ex + (py - cy) * ey <= 0.0 and (px - cx) * bx + (py - cy) * by <= 0.0:
                    out[room - k, 0] = math.atan2(py, px) % FULL_TURN
                    k += 1
    if k < 2:
        near_x, near_y, is_outside = _nearest(x + length, y, corners_mm, a, b)
        return -1 if k == 0 and (not is_outside or near_x * near_x + near_y * near_y < r * r) else 0
    for i in range(1, k):  # insertion sort
        turn, j = out[room - i, 0], i
        while j > 0 and out[room - j + 1, 0] > turn:
            out[room - j, 0] = out[room - j + 1, 0]
            j -= 1
        out[room - j, 0] = turn
    middle = 0.5 * (out[room, 0] + out[room - 1, 0])
    near_x, near_y, is_outside = _nearest(x + length * math.cos(middle), y + length * math.sin(middle), corners_mm, a, b)
    start = 0 if not is_outside or near_x * near_x + near_y * near_y < r * r else 1
    for i in range(k // 2):
        low, high = out[room - (2 * i + start) % k, 0], out[room - (2 * i + start + 1) % k, 0]
        out[n + i, 0], out[n + i, 1] = low, (high - low) % FULL_TURN
    return k // 2


@njit(cache=True)
def blocked_slides(
    x: float,
    y: float,
    ux: float,
    uy: float,
    radius: float,
    tip: float,
    corners_mm: Array,
    first: NDArray[np.int64],
    round_mm: float,
    out: Array,
) -> int:
    """Lengths [mm] at which a link sliding out of (x, y) along the unit vector u runs into the part; see `blocked_turns`."""
    n, entry = 0, np.inf
    for piece in range(first.shape[0] - 1):
        a, b = first[piece], first[piece + 1]
        low, high = _ray_span(x, y, ux, uy, radius + round_mm, corners_mm, a, b)
        if low < high and high > 0.0:
            if low < 0.0:
                return -1
            entry = min(entry, low)
        if tip > radius:
            low, high = _ray_span(x, y, ux, uy, tip + round_mm, corners_mm, a, b)
            if low < high and high > 0.0:
                out[n, 0], out[n, 1] = low, high - low
                n += 1
    if entry < np.inf:
        out[n, 0], out[n, 1] = entry, FAR
        n += 1
    return n


@njit(cache=True)
def _ray_span(x: float, y: float, ux: float, uy: float, r: float, corners_mm: Array, a: int, b: int) -> tuple[float, float]:
    """Where the line through (x, y) along u runs within r of the piece: from, to; empty when from ≥ to."""
    low, high = np.inf, -np.inf
    for i in range(a, b):
        k = i + 1 if i + 1 < b else a
        cx, cy = corners_mm[i, 0] - x, corners_mm[i, 1] - y
        at, off = ux * cx + uy * cy, ux * cy - uy * cx
        if abs(off) < r:
            half = math.sqrt(r * r - off * off)
            low, high = min(low, at - half), max(high, at + half)
        ex, ey = corners_mm[k, 0] - corners_mm[i, 0], corners_mm[k, 1] - corners_mm[i, 1]
        edge = math.sqrt(ex * ex + ey * ey)
        if edge > 0.0:
            vx, vy = ex / edge, ey / edge
            start, h = vx * cx + vy * cy, vy * cx - vx * cy + r  # the side of the inflated edge: a segment at offset h
            across = ux * vy - uy * vx
            if abs(across) > 1e-12:
                t = h / across
                if start <= t * (ux * vx + uy * vy) <= start + edge:
                    low, high = min(low, t), max(high, t)
    return low, high


@njit(cache=True)
def is_blocked(value: float, period: float, spans: Array, n: int) -> bool:
    """Whether a value lies inside one of n intervals, modulo `period` (0 for none)."""
    for i in range(n):
        inside = value - spans[i, 0]
        if period > 0.0:
            inside %= period
        if TOUCH < inside < spans[i, 1] - TOUCH:
            return True
    return False


@njit(cache=True)
def nearest_free(value: float, period: float, spans: Array, n: int, low: float, high: float) -> float:
    """Shift from `value` to the nearest value outside n intervals that stays within low … high (as shifts); inf when there is none."""
    up = edge_of_block(value, period, spans, n, 1.0)
    down = -edge_of_block(value, period, spans, n, -1.0) if up > 0.0 else 0.0
    up = up if up <= high else np.inf
    down = down if down >= low else -np.inf
    return up if up <= -down else down


@njit(cache=True)
def edge_of_block(value: float, period: float, spans: Array, n: int, sense: float) -> float:
    """How far one must go from `value`, upward (sense 1) or downward (−1), to leave the intervals that cover it."""
    moved = 0.0
    for _ in range(n + 1):
        is_still = True
        for i in range(n):
            inside = value + sense * moved - spans[i, 0]
            if period > 0.0:
                inside -= period * math.floor(inside / period)
            if TOUCH < inside < spans[i, 1] - TOUCH:
                moved += spans[i, 1] - inside if sense > 0.0 else inside
                is_still = False
        if is_still:
            break
    return moved
