"""What blocks the sweep of one link: the values of its joint at which it would run into the part, in closed form.

The link is a capsule that starts at its joint and may end in a round tip; the part is a set of edges, each inflated by the radius (a
stadium). A turning link meets a stadium over one interval of directions, because the stadium within the link's reach is convex; its tip,
running on a circle, meets it over at most two. A sliding link meets it from the first entry on. All in the part frame; docs/model.md,
section 2.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from hw_profiles.geometry import Array

FAR = 1e9  # stands for "from here on", in any unit
TOUCH = 1e-10  # an interval's own ends are free


@njit(cache=True)
def blocked_turns(x: float, y: float, length: float, radius: float, tip: float, outline_mm: Array, disc_mm: float, out: Array) -> int:
    """Directions [rad] in which a link of `length` from the joint (x, y) runs into the part.

    Parameters
    ----------
    radius, tip : of the link and of the round tip at its end [mm]; tip 0 for none.
    outline_mm, disc_mm : corners (m, 2) counter-clockwise and 0, or one point (1, 2) and the radius of a disc.
    out : (≥ 3 m, 2) receives intervals: start and width.

    Returns
    -------
    Number of intervals, −1 when the joint itself is inside the part so that every direction is blocked.
    """
    n, m = 0, outline_mm.shape[0]
    r, big = radius + disc_mm, tip + disc_mm
    has_bulb = tip > radius
    reach = length + max(r, big)
    for i in range(m):
        cx, cy = outline_mm[i, 0] - x, outline_mm[i, 1] - y
        dx, dy = outline_mm[(i + 1) % m, 0] - x, outline_mm[(i + 1) % m, 1] - y
        ex, ey = dx - cx, dy - cy
        square = ex * ex + ey * ey
        share = min(max(-(cx * ex + cy * ey) / square, 0.0), 1.0) if square > 0.0 else 0.0
        nx, ny = cx + share * ex, cy + share * ey
        near = math.sqrt(nx * nx + ny * ny)
        if near >= reach:
            continue
        if near < r:
            return -1
        edge = math.sqrt(square)
        far = max(cx * cx + cy * cy, dx * dx + dy * dy)
        if near < length + r:
            low, high = _link_span(cx, cy, dx, dy, ex, ey, edge, nx, ny, length, r)
            out[n, 0], out[n, 1] = math.atan2(ny, nx) + low, high - low
            n += 1
        if has_bulb and (length < big or far > (length - big) ** 2):
            added = _tip_spans(cx, cy, dx, dy, ex, ey, edge, length, big, out, n)
            if added < 0:
                return -1
            n += added
    return n


@njit(cache=True)
def _link_span(
    cx: float, cy: float, dx: float, dy: float, ex: float, ey: float, edge: float, nx: float, ny: float, length: float, r: float
) -> tuple[float, float]:
    """Directions, from that of the edge's nearest point n, under which the stadium about c–d within the link's reach is seen."""
    low, high = np.inf, -np.inf
    for end in range(2):
        px, py = (cx, cy) if end == 0 else (dx, dy)
        square = px * px + py * py
        distance = math.sqrt(square)
        if distance - r < length:
            at = math.atan2(nx * py - ny * px, nx * px + ny * py)
            if square - r * r <= length * length:
                half = math.asin(min(r / distance, 1.0))  # tangent to the end's circle
            else:
                half = math.acos((square + length * length - r * r) / (2.0 * distance * length))  # law of cosines
            low, high = min(low, at - half), max(high, at + half)
    if edge > 0.0:
        ux, uy = ex / edge, ey / edge
        offset = uy * cx - ux * cy  # of the edge's line along its normal (u_y, −u_x)
        first, last = ux * cx + uy * cy, ux * dx + uy * dy
        for side in range(4):
            h = offset + (r if side < 2 else -r)
            if abs(h) < length:
                t = math.sqrt(length * length - h * h) * (1.0 if side % 2 == 0 else -1.0)
                if first <= t <= last:
                    px, py = uy * h + ux * t, -ux * h + uy * t
                    at = math.atan2(nx * py - ny * px, nx * px + ny * py)
                    low, high = min(low, at), max(high, at)
    return low, high


@njit(cache=True)
def _tip_spans(
    cx: float, cy: float, dx: float, dy: float, ex: float, ey: float, edge: float, length: float, r: float, out: Array, n: int
) -> int:
    """Append the directions in which a point at `length` lies within r of the edge c–d; returns how many, −1 for every direction."""
    ends = np.empty(8)
    k = 0
    ux, uy = (ex / edge, ey / edge) if edge > 0.0 else (1.0, 0.0)
    offset = uy * cx - ux * cy
    first, last = ux * cx + uy * cy, ux * dx + uy * dy
    if edge > 0.0:
        for side in range(4):  # where the circle crosses the straight sides
            h = offset + (r if side < 2 else -r)
            if abs(h) < length:
                t = math.sqrt(length * length - h * h) * (1.0 if side % 2 == 0 else -1.0)
                if first <= t <= last:
                    ends[k] = math.atan2(-ux * h + uy * t, uy * h + ux * t)
                    k += 1
    for end in range(2):  # where it crosses the round ends
        px, py = (cx, cy) if end == 0 else (dx, dy)
        distance = math.sqrt(px * px + py * py)
        if abs(distance - length) < r and distance > 0.0:
            at, half = math.atan2(py, px), math.acos((distance * distance + length * length - r * r) / (2.0 * distance * length))
            for turn in (at - half, at + half):
                t = length * (ux * math.cos(turn) + uy * math.sin(turn))
                if (end == 0 and (t < first or edge == 0.0)) or (end == 1 and t > last and edge > 0.0):
                    ends[k] = turn
                    k += 1
    if k < 2:
        along = min(max(ux * length, first), last)
        is_within = (ux * along + uy * offset - length) ** 2 + (uy * along - ux * offset) ** 2 < r * r
        return -1 if k == 0 and is_within else 0
    for i in range(k):  # insertion sort, from 0 to 2π
        turn, j = ends[i] % (2.0 * math.pi), i
        while j > 0 and ends[j - 1] > turn:
            ends[j] = ends[j - 1]
            j -= 1
        ends[j] = turn
    middle = 0.5 * (ends[0] + ends[1])
    mx, my = length * math.cos(middle), length * math.sin(middle)
    along = min(max(ux * mx + uy * my, first), last)
    start = 0 if (ux * along + uy * offset - mx) ** 2 + (uy * along - ux * offset - my) ** 2 < r * r else 1
    for i in range(k // 2):
        a, b = ends[(2 * i + start) % k], ends[(2 * i + start + 1) % k]
        out[n + i, 0], out[n + i, 1] = a, (b - a) % (2.0 * math.pi)
    return k // 2


@njit(cache=True)
def blocked_slides(
    x: float, y: float, ux: float, uy: float, radius: float, tip: float, outline_mm: Array, disc_mm: float, out: Array
) -> int:
    """Lengths [mm] at which a link sliding out of (x, y) along the unit vector u runs into the part; see `blocked_turns`."""
    n, m = 0, outline_mm.shape[0]
    entry = np.inf
    for i in range(m):
        cx, cy = outline_mm[i, 0] - x, outline_mm[i, 1] - y
        dx, dy = outline_mm[(i + 1) % m, 0] - x, outline_mm[(i + 1) % m, 1] - y
        low, high = _ray_span(cx, cy, dx, dy, ux, uy, radius + disc_mm)
        if low < high and high > 0.0:
            if low < 0.0:
                return -1
            entry = min(entry, low)
        if tip > radius:
            low, high = _ray_span(cx, cy, dx, dy, ux, uy, tip + disc_mm)
            if low < high and high > 0.0:
                out[n, 0], out[n, 1] = low, high - low
                n += 1
    if entry < np.inf:
        out[n, 0], out[n, 1] = entry, FAR
        n += 1
    return n


@njit(cache=True)
def _ray_span(cx: float, cy: float, dx: float, dy: float, ux: float, uy: float, r: float) -> tuple[float, float]:
    """Where the line through the origin along u runs within r of the edge c–d: from, to; empty when from ≥ to."""
    low, high = np.inf, -np.inf
    for end in range(2):
        px, py = (cx, cy) if end == 0 else (dx, dy)
        at, off = ux * px + uy * py, ux * py - uy * px
        if abs(off) < r:
            half = math.sqrt(r * r - off * off)
            low, high = min(low, at - half), max(high, at + half)
    ex, ey = dx - cx, dy - cy
    edge = math.sqrt(ex * ex + ey * ey)
    if edge > 0.0:
        vx, vy = ex / edge, ey / edge
        first, last = vx * cx + vy * cy, vx * dx + vy * dy
        offset = vy * cx - vx * cy
        a, b = _within(ux * vx + uy * vy, first, last)
        c, d = _within(ux * vy - uy * vx, offset - r, offset + r)
        a, b = max(a, c), min(b, d)
        if a < b:
            low, high = min(low, a), max(high, b)
    return low, high


@njit(cache=True)
def _within(slope: float, low: float, high: float) -> tuple[float, float]:
    """For which t low < slope · t < high."""
    if abs(slope) < 1e-12:
        return (-np.inf, np.inf) if low < 0.0 < high else (np.inf, -np.inf)
    a, b = low / slope, high / slope
    return min(a, b), max(a, b)


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
    up = down = 0.0
    for _ in range(n + 1):
        is_still = True
        for i in range(n):
            inside = value + up - spans[i, 0]
            if period > 0.0:
                inside %= period
            if TOUCH < inside < spans[i, 1] - TOUCH:
                up += spans[i, 1] - inside
                is_still = False
        if is_still or up > high:
            break
    for _ in range(n + 1):
        is_still = True
        for i in range(n):
            inside = value + down - spans[i, 0]
            if period > 0.0:
                inside %= period
            if TOUCH < inside < spans[i, 1] - TOUCH:
                down -= inside
                is_still = False
        if is_still or down < low:
            break
    up = up if up <= high else np.inf
    down = down if down >= low else -np.inf
    return up if up <= -down else down
