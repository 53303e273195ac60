"""The ring certificate: is the part caged by a closed ring of fingers, told in microseconds.

A bridge is the straight line between the centre lines of two bodies of the hand; its gap is the free length of it. Bridges are laid from
the shortest up, until centre lines and bridges hold a closed curve that winds round the part. No part can be carried across a centre line,
for the fingers are solid, nor across a bridge whose gap is below the least width of a convex body in it ("The Width of a Chair", Strang,
Amer. Math. Monthly 1982; in the plane). So with every gap of that curve below the width, the part is caged: its pose lies in a bounded
component of free space (Rodriguez, Mason, Ferry, "From caging to grasping", IJRR 2012). docs/model.md, section 4, proves it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

from control.model.core import ConvexCore
from control.model.kinematics import MAX_LINKS, HandArrays, HandModel, centre_lines_kernel
from hw_profiles.geometry import Array
from hw_profiles.part import Part

N_TURNS = 2  # bridges that go round the part more often than this are not considered
# A finger's spine: the points of its centre line as seen from the core's centre. Columns: x, y, turns since the base, and the radius that
# is solid about the point and about the link that follows it.
TURNS, JOINT_RADIUS, LINK_RADIUS, N_SPINE = 2, 3, 4, 5


@dataclass(frozen=True, slots=True, eq=False)
class RingCertificate:
    """What the ring of fingers says about the part.

    is_caged : the certificate holds. False means "not shown", not "escapes".
    margin_mm : how much wider the widest gap of the best ring could become; negative without a certificate.
    gaps_mm : (n_fingers,) from each finger to the next, counter-clockwise in the order of their bases round the palm: the narrowest
        bridge that passes the part on its outer side, at most twice the part's width.
    """

    is_caged: bool
    margin_mm: float
    gaps_mm: Array


class RingArrays(NamedTuple):
    """A ring's question as kernels take it: the order of the fingers round the palm, and the part's `ConvexCore`."""

    order: NDArray[np.int64]
    core_mm: Array
    centre_mm: Array
    radius_mm: float
    passes_mm: float


class Ring:
    """The certificate for one hand and one part, ready to be asked every tick (2–4 µs, and as much again to call it)."""

    def __init__(self, hand: HandModel, part: Part) -> None:
        self.hand = hand
        core = ConvexCore.of(part)
        bearings = np.arctan2(hand.base_mm[:, 1], hand.base_mm[:, 0])
        order: NDArray[np.int64] = np.argsort(bearings, kind="stable")
        self.arrays = RingArrays(order, core.outline_mm, core.centre_mm, core.radius_mm, core.width_mm)

    @property
    def passes_mm(self) -> float:
        """A gap below this holds the part [mm]."""
        return self.arrays.passes_mm

    def certify(self, joints: Array, pose: Array) -> RingCertificate:
        """The certificate of a posture (n_joints,) about a part at `pose` (3,): mm, mm, rad."""
        gaps = np.empty(self.hand.n_fingers)
        margin_mm = _certify(self.hand.arrays, self.arrays, joints, pose, gaps)
        return RingCertificate(margin_mm > 0.0, margin_mm, gaps)

    def bridges(self, joints: Array, pose: Array) -> Array:
        """The bridges (n_fingers, 2, 2) [mm] that `gaps_mm` are of, end to end on the fingers' surfaces; nan where there is none."""
        bridges, gaps = np.empty((self.hand.n_fingers, 4)), np.empty(self.hand.n_fingers)
        survey(self.hand.arrays, self.arrays, centre_lines_kernel(self.hand.arrays, joints), pose, gaps, bridges)
        return bridges.reshape(-1, 2, 2)


@njit(cache=True)
def _certify(hand: HandArrays, ring: RingArrays, joints: Array, pose: Array, gaps_mm: Array) -> float:
    return ring_margin(hand, ring, centre_lines_kernel(hand, joints), pose, gaps_mm)


@njit(cache=True)
def ring_margin(hand: HandArrays, ring: RingArrays, lines_mm: Array, pose: Array, gaps_mm: Array) -> float:
    """Kernel of `Ring.certify`: fills `gaps_mm` and returns the margin, −passes_mm where no ring runs round the part."""
    bridges = np.empty((lines_mm.shape[0], 4))
    return survey(hand, ring, lines_mm, pose, gaps_mm, bridges)


@njit(cache=True)
def survey(hand: HandArrays, ring: RingArrays, lines_mm: Array, pose: Array, gaps_mm: Array, bridges_mm: Array) -> float:
    """`ring_margin`, and the bridges (n_fingers, 4) that the gaps are of: x, y of either end, on the fingers' surfaces."""
    n, limit_mm = lines_mm.shape[0], 2.0 * ring.passes_mm
    cos, sin = math.cos(pose[2]), math.sin(pose[2])
    eye_x = pose[0] + cos * ring.centre_mm[0] - sin * ring.centre_mm[1]
    eye_y = pose[1] + sin * ring.centre_mm[0] + cos * ring.centre_mm[1]
    spine, n_links = _spines(hand, lines_mm, eye_x, eye_y)
    narrowest, ends = np.empty((n, n, 2 * N_TURNS + 1)), np.empty((n, n, 2 * N_TURNS + 1, 4))
    narrowest[:] = limit_mm
    for f in range(n):
        for g in range(n):
            _lay_bridges(ring, spine, n_links, limit_mm, pose, f, g, narrowest, ends)
    for k in range(n):
        f, g = ring.order[k], ring.order[(k + 1) % n]
        round_part = 1 if _bearing(spine[g, 0, 0], spine[g, 0, 1]) <= _bearing(spine[f, 0, 0], spine[f, 0, 1]) else 0
        there, back = narrowest[f, g, N_TURNS + round_part], narrowest[g, f, N_TURNS - round_part]
        gaps_mm[k] = min(there, back)
        for axis in range(4):
            end = ends[f, g, N_TURNS + round_part, axis] if there <= back else ends[g, f, N_TURNS - round_part, axis]
            bridges_mm[k, axis] = np.nan if gaps_mm[k] >= limit_mm else end + (eye_x if axis % 2 == 0 else eye_y)
    return ring.passes_mm - _widest_of_best_ring(narrowest, limit_mm)


@njit(cache=True)
def _spines(hand: HandArrays, lines_mm: Array, eye_x: float, eye_y: float) -> tuple[Array, NDArray[np.int64]]:
    """The spine of every finger (n_fingers, MAX_LINKS + 1, N_SPINE), and how many links it has."""
    n = lines_mm.shape[0]
    spine, n_links = np.empty((n, MAX_LINKS + 1, N_SPINE)), np.empty(n, np.int64)
    for f in range(n):
        first, m = hand.first[f], hand.first[f + 1] - hand.first[f]
        n_links[f] = m
        for k in range(m + 1):
            x, y = lines_mm[f, k, 0] - eye_x, lines_mm[f, k, 1] - eye_y
            outer = hand.link_radius_mm[first + k] if k < m else hand.tip_radius_mm[f]
            inner = hand.link_radius_mm[first + k - 1] if k > 0 else 0.0
            before = spine[f, k - 1, TURNS] + _turn(spine[f, k - 1, 0], spine[f, k - 1, 1], x, y) if k > 0 else 0.0
            spine[f, k, 0], spine[f, k, 1], spine[f, k, TURNS] = x, y, before
            spine[f, k, JOINT_RADIUS], spine[f, k, LINK_RADIUS] = max(inner, outer), outer
    return spine, n_links


@njit(cache=True)
def _turn(ax: float, ay: float, bx: float, by: float) -> int:
    """Crossings of the x axis to the right of the origin on the step from a to b, counter-clockwise ones counting +1."""
    if (ay >= 0.0) == (by >= 0.0):
        return 0
    side = ax * by - ay * bx
    if by >= 0.0:
        return 1 if side > 0.0 else 0
    return -1 if side < 0.0 else 0


@njit(cache=True)
def _bearing(x: float, y: float) -> float:
    """Bearing of a point in [0, 2π)."""
    return math.atan2(y, x) % (2.0 * math.pi)


@njit(cache=True)
def _lay_bridges(
    ring: RingArrays, spine: Array, n_links: NDArray[np.int64], limit_mm: float, pose: Array, f: int, g: int, narrowest: Array, ends: Array
) -> None:
    """Bridges shorter than the limit from every joint of finger f, and its tip, to the joints and the flanks of finger g."""
    narrow_mm, passes_mm = 2.0 * ring.radius_mm, ring.passes_mm
    for i in range(n_links[f] + 1):
        ax, ay, r_f = spine[f, i, 0], spine[f, i, 1], spine[f, i, JOINT_RADIUS]
        for j in range(n_links[g] + 1):
            for to_flank in range(2):
                bx, by = spine[g, j, 0], spine[g, j, 1]
                turned = spine[f, i, TURNS] - spine[g, j, TURNS]
                if to_flank:
                    if j == n_links[g] or (f == g and (i == j or i == j + 1)):
                        continue
                    ux, uy = spine[g, j + 1, 0] - bx, spine[g, j + 1, 1] - by
                    square, along = ux * ux + uy * uy, (ax - bx) * ux + (ay - by) * uy
                    if not 0.0 < along < square:
                        continue
                    cx, cy = bx + ux * along / square, by + uy * along / square
                    turned -= _turn(bx, by, cx, cy)
                    bx, by, r_g = cx, cy, spine[g, j, LINK_RADIUS]
                else:
                    if f > g or (f == g and i + 1 >= j):
                        continue
                    r_g = spine[g, j, JOINT_RADIUS]
                length = math.sqrt((bx - ax) * (bx - ax) + (by - ay) * (by - ay))
                gap = length - r_f - r_g
                if gap >= limit_mm:
                    continue
                turned += _turn(ax, ay, bx, by)
                if narrow_mm <= gap < passes_mm:
                    turned += _straddled(ring, pose, ax, ay, bx, by, length, r_f, r_g)
                k = N_TURNS + int(turned)
                if 0 <= k <= 2 * N_TURNS and gap < narrowest[f, g, k]:
                    narrowest[f, g, k] = gap
                    vx, vy = (bx - ax) / max(length, 1e-9), (by - ay) / max(length, 1e-9)
                    ends[f, g, k, 0], ends[f, g, k, 1] = ax + r_f * vx, ay + r_f * vy
                    ends[f, g, k, 2], ends[f, g, k, 3] = bx - r_g * vx, by - r_g * vy


@njit(cache=True)
def _straddled(ring: RingArrays, pose: Array, ax: float, ay: float, bx: float, by: float, length: float, r_a: float, r_b: float) -> int:
    """Turns to add where the core straddles the bridge a–b with its centre on the side that its body is not held on.

    The core lies on the side of the bridge away from where its support lines at the chord meet; docs/model.md, section 4.
    """
    cos, sin = math.cos(pose[2]), math.sin(pose[2])
    ux, uy = (bx - ax) / max(length, 1e-9), (by - ay) / max(length, 1e-9)
    vx, vy = cos * ux + sin * uy, -sin * ux + cos * uy  # the bridge's direction in the part frame
    off = ux * ay - uy * ax  # left of the bridge is positive; the centre stands at −off
    start = -(ux * ax + uy * ay)  # the centre's place along the bridge
    m = ring.core_mm.shape[0]
    low, high, lean = np.inf, -np.inf, 0.0
    for i in range(m):
        px, py = ring.core_mm[i, 0] - ring.centre_mm[0], ring.core_mm[i, 1] - ring.centre_mm[1]
        qx, qy = ring.core_mm[(i + 1) % m, 0] - ring.centre_mm[0], ring.core_mm[(i + 1) % m, 1] - ring.centre_mm[1]
        p_left, q_left = vx * py - vy * px - off, vx * qy - vy * qx - off
        if (p_left > 0.0) != (q_left > 0.0):
            share = p_left / (p_left - q_left)
            at = start + vx * (px + share * (qx - px)) + vy * (py + share * (qy - py))
            low, high = min(low, at), max(high, at)
            # Outward normal (e_y, −e_x) of the edge, along the bridge's right normal (v_y, −v_x).
            lean += ((qy - py) * vy + (qx - px) * vx) / math.hypot(qx - px, qy - py)
    if high <= r_a or low >= length - r_b:
        return 0
    if lean > 0.0:  # support lines meet on the right: the core is on the left
        return 1 if off > 0.0 else 0
    return -1 if off < 0.0 else 0


@njit(cache=True)
def _widest_of_best_ring(narrowest: Array, limit_mm: float) -> float:
    """The widest gap of the ring whose widest gap is least, at most the limit: bridges are joined by length, with their turns.

    The order is Kruskal's (1956); the first bridge that closes a curve of other than 0 turns is the widest of the best ring.
    """
    n = narrowest.shape[0]
    gaps = narrowest.copy().ravel()
    joined, turns = np.arange(n), np.zeros(n, np.int64)
    while True:
        index = 0
        for candidate in range(gaps.shape[0]):
            if gaps[candidate] < gaps[index]:
                index = candidate
        gap_mm, gaps[index] = gaps[index], np.inf
        if gap_mm >= limit_mm:
            return limit_mm
        f, g, k = index // (n * (2 * N_TURNS + 1)), (index // (2 * N_TURNS + 1)) % n, index % (2 * N_TURNS + 1) - N_TURNS
        over = turns[f] + k - turns[g]
        if joined[f] == joined[g]:
            if over != 0:
                return float(gap_mm)
            continue
        was = joined[g]
        for h in range(n):
            if joined[h] == was:
                joined[h] = joined[f]
                turns[h] += over
