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
    """The certificate for one hand and one part, ready to be asked every tick (about 5 µs)."""

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
        hand = self.hand.arrays
        gaps = np.empty(self.hand.n_fingers)
        margin_mm = ring_margin(hand, self.arrays, centre_lines_kernel(hand, joints), pose, gaps)
        return RingCertificate(margin_mm > 0.0, margin_mm, gaps)


@njit(cache=True)
def ring_margin(hand: HandArrays, ring: RingArrays, lines_mm: Array, pose: Array, gaps_mm: Array) -> float:
    """Kernel of `Ring.certify`: fills `gaps_mm` and returns the margin, −passes_mm where no ring runs round the part."""
    n = lines_mm.shape[0]
    cos, sin = math.cos(pose[2]), math.sin(pose[2])
    eye_x = pose[0] + cos * ring.centre_mm[0] - sin * ring.centre_mm[1]
    eye_y = pose[1] + sin * ring.centre_mm[0] + cos * ring.centre_mm[1]
    seen, turns = np.empty(lines_mm.shape), np.zeros((n, MAX_LINKS + 1), np.int64)  # centre lines as seen from the core's centre
    for f in range(n):
        for k in range(hand.first[f + 1] - hand.first[f] + 1):
            seen[f, k, 0], seen[f, k, 1] = lines_mm[f, k, 0] - eye_x, lines_mm[f, k, 1] - eye_y
            if k > 0:
                turns[f, k] = turns[f, k - 1] + _turn(seen[f, k - 1, 0], seen[f, k - 1, 1], seen[f, k, 0], seen[f, k, 1])
    narrowest = np.empty((n, n, 2 * N_TURNS + 1))
    narrowest[:] = 2.0 * ring.passes_mm
    for f in range(n):
        for g in range(n):
            _lay_bridges(hand, ring, seen, turns, pose, f, g, narrowest)
    for k in range(n):
        f, g = ring.order[k], ring.order[(k + 1) % n]
        round_part = 1 if _bearing(seen[g, 0]) <= _bearing(seen[f, 0]) else 0
        gaps_mm[k] = min(narrowest[f, g, N_TURNS + round_part], narrowest[g, f, N_TURNS - round_part])
    return ring.passes_mm - _widest_of_best_ring(narrowest, 2.0 * ring.passes_mm)


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
def _bearing(point_mm: Array) -> float:
    """Bearing of a point in [0, 2π)."""
    return math.atan2(point_mm[1], point_mm[0]) % (2.0 * math.pi)


@njit(cache=True)
def _lay_bridges(
    hand: HandArrays, ring: RingArrays, seen: Array, turns: NDArray[np.int64], pose: Array, f: int, g: int, narrowest: Array
) -> None:
    """Bridges from every joint of finger f, and its tip, to the joints and the flanks of finger g."""
    n_f, n_g = hand.first[f + 1] - hand.first[f], hand.first[g + 1] - hand.first[g]
    for i in range(n_f + 1):
        ax, ay = seen[f, i, 0], seen[f, i, 1]
        r_f = _joint_radius(hand, f, i)
        for j in range(n_g + 1):
            bx, by = seen[g, j, 0], seen[g, j, 1]
            turned = turns[f, i] - turns[g, j]
            if f < g or (f == g and i + 1 < j):
                gap, k = _bridge(ring, pose, ax, ay, bx, by, r_f, _joint_radius(hand, g, j), turned)
                narrowest[f, g, k] = min(narrowest[f, g, k], gap)
            if j == n_g or (f == g and (i == j or i == j + 1)):
                continue
            ux, uy = seen[g, j + 1, 0] - bx, seen[g, j + 1, 1] - by
            square = ux * ux + uy * uy
            share = (ax - bx) * ux + (ay - by) * uy
            if 0.0 < share < square:
                cx, cy = bx + ux * share / square, by + uy * share / square
                r_g = hand.link_radius_mm[hand.first[g] + j]
                gap, k = _bridge(ring, pose, ax, ay, cx, cy, r_f, r_g, turned - _turn(bx, by, cx, cy))
                narrowest[f, g, k] = min(narrowest[f, g, k], gap)


@njit(cache=True)
def _joint_radius(hand: HandArrays, f: int, k: int) -> float:
    """Radius about the k-th point of a finger's centre line that is surely solid."""
    n = hand.first[f + 1] - hand.first[f]
    radius = hand.tip_radius_mm[f] if k == n else hand.link_radius_mm[hand.first[f] + k]
    return radius if k == 0 else max(radius, hand.link_radius_mm[hand.first[f] + k - 1])


@njit(cache=True)
def _bridge(
    ring: RingArrays, pose: Array, ax: float, ay: float, bx: float, by: float, r_a: float, r_b: float, turned: int
) -> tuple[float, int]:
    """Gap and class of turns of the bridge from a to b (relative to the core's centre); `turned`: turns of a less those of b."""
    length = math.sqrt((bx - ax) ** 2 + (by - ay) ** 2)
    gap = length - r_a - r_b
    if gap >= 2.0 * ring.passes_mm:
        return np.inf, 0
    turned += _turn(ax, ay, bx, by)
    if 2.0 * ring.radius_mm <= gap < ring.passes_mm:
        turned += _straddled(ring, pose, ax, ay, bx, by, length, r_a, r_b)
    return (gap, N_TURNS + turned) if -N_TURNS <= turned <= N_TURNS else (np.inf, 0)


@njit(cache=True)
def _straddled(
    ring: RingArrays, pose: Array, ax: float, ay: float, bx: float, by: float, length: float, r_a: float, r_b: float
) -> int:
    """Turns to add where the core straddles the bridge a–b with its centre on the side that its body is not held on.

    The core lies on the side of the bridge away from where its support lines at the chord meet; docs/model.md, section 4.
    """
    cos, sin = math.cos(pose[2]), math.sin(pose[2])
    ux, uy = (bx - ax) / length, (by - ay) / length
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
