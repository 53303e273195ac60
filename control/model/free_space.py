"""Caged, escapes or undecided: the part's free space among fingers that stand still, on a grid of poses.

A cell is blocked when no pose in it is free: at its middle the part and some finger overlap by at least as much as any point of the part
moves between the middle and a corner. Free space then lies within the cells that are not blocked, and a path of free poses passes from
cell to cell through faces only, for on an edge or corner it would touch the blocked cell beside it. So a part whose cells do not reach the
border is caged. It escapes when a path of free poses is found: steps between middles whose clearances together cover the step. Neither
answer can be wrong; between them lies "undecided", which a finer grid makes rarer. docs/model.md, section 4.
"""

from __future__ import annotations

import enum
import math
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from control.model.contact import PartShape, link_touch
from control.model.kinematics import HandArrays, HandModel, centre_lines_kernel
from hw_profiles import geometry
from hw_profiles.geometry import Array, Pose2
from hw_profiles.part import Disc, Part

UNKNOWN, OPEN, SHUT = 0, 1, 2
FIRST_HALF_MM = 40.0  # half side of the first box that is searched; doubled until it holds the whole hand
SYMMETRY_MM = 2e-3  # how far a part may differ from itself turned by its period


class Verdict(enum.Enum):
    """What the grid can show."""

    CAGED = "caged"
    ESCAPES = "escapes"
    UNDECIDED = "undecided"


@dataclass(frozen=True, eq=False)
class FreeSpace:
    """The answer for one posture and pose.

    Attributes
    ----------
    verdict : what was shown.
    half_mm : half side of the box about the part in which it was shown.
    cell : (3,) size of its cells [mm, mm, rad].
    room : bool (n, n, n_yaw), the cells that the part may reach as far as was searched.
    """

    verdict: Verdict
    half_mm: float
    cell: Array
    room: NDArray[np.bool_]


def free_space(hand: HandModel, part: Part, joints: Array, pose: Pose2, n: int = 64, n_yaw: int = 48, n_finer: int = 1) -> FreeSpace:
    """Whether a part at `pose` can leave the hand at a posture (n_joints,) whose fingers stand still.

    Parameters
    ----------
    n, n_yaw : cells along x and y, and over one period of the part's symmetry (a disc needs one).
    n_finer : how often to ask again with twice the cells each way when the answer is undecided.

    Notes
    -----
    Boxes about the part grow until one shows a cage or holds the hand. Cost: milliseconds for a tight cage, some 0.1 s for a whole grid,
    eight times as much for the next finer one.
    """
    found = _ask(hand, part, joints, pose, n, n_yaw)
    if found.verdict is Verdict.UNDECIDED and n_finer > 0:
        return free_space(hand, part, joints, pose, 2 * n, 2 * n_yaw, n_finer - 1)
    return found


def _ask(hand: HandModel, part: Part, joints: Array, pose: Pose2, n: int, n_yaw: int) -> FreeSpace:
    shape, period = PartShape.of(part), 0.0 if isinstance(part.shape, Disc) else 2.0 * math.pi / part.n_fold
    n_yaw = n_yaw if period else 1
    lines = centre_lines_kernel(hand.arrays, joints)
    hull = geometry.convex_hull(lines.reshape(-1, 2))
    thickest = float(max(hand.link_radius_mm.max(), hand.tip_radius_mm.max()))
    beyond_mm = thickest + part.circumradius_mm
    outer_mm = float(np.abs(hull - pose.xy_mm).max()) + beyond_mm
    inner_mm = float(_inner_radius(part))
    half_mm = min(FIRST_HALF_MM, outer_mm)
    while True:
        is_last = half_mm >= outer_mm
        half_mm = outer_mm * (1.0 + 4.0 / n) if is_last else half_mm
        cell = np.array([2.0 * half_mm / n, 2.0 * half_mm / n, period / n_yaw])
        space = _Box(hand, lines, shape, part.circumradius_mm, inner_mm, pose, cell, (n, n, n_yaw))
        reached, room = space.flood()
        if not reached:
            return FreeSpace(Verdict.CAGED, half_mm, cell, room)
        if is_last:
            verdict = Verdict.ESCAPES if space.escapes(hull, beyond_mm) else Verdict.UNDECIDED
            return FreeSpace(verdict, half_mm, cell, room)
        half_mm *= 2.0


def _inner_radius(part: Part) -> float:
    """Radius about the part frame's origin that is all part; 0 when the origin lies outside."""
    if isinstance(part.shape, Disc):
        return part.circumradius_mm
    outline = np.array(part.outline_mm)
    return float(geometry.boundary_distance(outline, np.zeros(2))) if geometry.contains(outline, np.zeros(2)) else 0.0


@dataclass(frozen=True, eq=False)
class _Box:
    """A grid of cells whose middle one has its middle at the part's pose."""

    hand: HandModel
    lines_mm: Array
    shape: PartShape
    outer_mm: float
    inner_mm: float
    pose: Pose2
    cell: Array
    size: tuple[int, int, int]

    @property
    def origin(self) -> Array:
        """Pose (3,) at the middle of cell (0, 0, 0)."""
        return self.pose.as_array() - np.array([(n // 2) * step for n, step in zip(self.size, self.cell, strict=True)])

    def flood(self) -> tuple[bool, NDArray[np.bool_]]:
        """Whether the cells that are not blocked lead to the border, and which were reached."""
        marks = np.zeros(self.size, np.int8)
        slack_mm = (
            SYMMETRY_MM + 0.5 * math.hypot(self.cell[0], self.cell[1]) + (0.5 * self.outer_mm * self.cell[2] if self.size[2] > 1 else 0.0)
        )
        reached = flood_kernel(self.hand.arrays, self.lines_mm, *self._part, self.origin, self.cell, slack_mm, marks)
        return bool(reached), marks == OPEN

    def escapes(self, hull_mm: Array, beyond_mm: float) -> bool:
        """Whether a path of free poses leads out of the hull of the fingers."""
        clear = np.full(self.size, np.nan)
        return bool(path_kernel(self.hand.arrays, self.lines_mm, *self._part, self.origin, self.cell, hull_mm, beyond_mm, clear))

    @property
    def _part(self) -> tuple[Array, float, float, float]:
        return self.shape.outline_mm, self.shape.radius_mm, self.outer_mm, self.inner_mm


@njit(cache=True)
def clearance(
    hand: HandArrays, lines_mm: Array, outline_mm: Array, disc_mm: float, outer_mm: float, inner_mm: float, pose: Array, enough_mm: float
) -> float:
    """Signed distance [mm] of the part to the nearest finger; a lower bound where it is above `enough_mm`, and where the part's inner
    circle alone overlaps a finger by more than that, an upper one."""
    cos, sin = math.cos(pose[2]), math.sin(pose[2])
    least = np.inf
    touch, a, b = np.empty(5), np.empty(2), np.empty(2)
    for f in range(lines_mm.shape[0]):
        m = hand.first[f + 1] - hand.first[f]
        for k in range(m + 1):
            p, q = lines_mm[f, min(k, m)], lines_mm[f, min(k + 1, m)]
            radius = hand.link_radius_mm[hand.first[f] + k] if k < m else hand.tip_radius_mm[f]
            px, py, ux, uy = p[0] - pose[0], p[1] - pose[1], q[0] - p[0], q[1] - p[1]
            square = ux * ux + uy * uy
            share = min(max(-(px * ux + py * uy) / square, 0.0), 1.0) if square > 0.0 else 0.0
            middle = math.sqrt((px + share * ux) ** 2 + (py + share * uy) ** 2) - radius
            if middle - outer_mm >= min(least, enough_mm):
                least = min(least, middle - outer_mm)
                continue
            if middle - inner_mm < -enough_mm:
                return middle - inner_mm
            a[0], a[1] = cos * px + sin * py, -sin * px + cos * py
            b[0], b[1] = a[0] + cos * ux + sin * uy, a[1] - sin * ux + cos * uy
            touch[4] = np.inf
            link_touch(a, b, radius, outline_mm, disc_mm, touch)
            least = min(least, touch[4])
    return least


@njit(cache=True)
def flood_kernel(
    hand: HandArrays,
    lines_mm: Array,
    outline_mm: Array,
    disc_mm: float,
    outer_mm: float,
    inner_mm: float,
    origin: Array,
    cell: Array,
    slack_mm: float,
    marks: NDArray[np.int8],
) -> bool:
    """Kernel of `_Box.flood`: from the middle cell over faces, each cell tested when first met; stops at the border."""
    n_x, n_y, n_yaw = marks.shape
    queue = np.empty((marks.size, 3), np.int64)
    queue[0] = n_x // 2, n_y // 2, n_yaw // 2
    marks[n_x // 2, n_y // 2, n_yaw // 2] = OPEN
    head, tail = 0, 1
    pose = np.empty(3)
    while head < tail:
        i, j, k = queue[head]
        head += 1
        if i == 0 or j == 0 or i == n_x - 1 or j == n_y - 1:
            return True
        for step in range(6 if n_yaw > 1 else 4):
            di, dj, dk = (step == 0) - (step == 1), (step == 2) - (step == 3), (step == 4) - (step == 5)
            u, v, w = i + di, j + dj, (k + dk) % n_yaw
            if marks[u, v, w] != UNKNOWN:
                continue
            pose[0], pose[1], pose[2] = origin[0] + u * cell[0], origin[1] + v * cell[1], origin[2] + w * cell[2]
            if clearance(hand, lines_mm, outline_mm, disc_mm, outer_mm, inner_mm, pose, slack_mm) <= -slack_mm:
                marks[u, v, w] = SHUT
                continue
            marks[u, v, w] = OPEN
            queue[tail] = u, v, w
            tail += 1
    return False


@njit(cache=True)
def path_kernel(
    hand: HandArrays,
    lines_mm: Array,
    outline_mm: Array,
    disc_mm: float,
    outer_mm: float,
    inner_mm: float,
    origin: Array,
    cell: Array,
    hull_mm: Array,
    beyond_mm: float,
    clear_mm: Array,
) -> bool:
    """Kernel of `_Box.escapes`; `clear_mm` comes as nan and keeps the clearance of every cell met."""
    n_x, n_y, n_yaw = clear_mm.shape
    queue, seen = np.empty((clear_mm.size, 3), np.int64), np.zeros(clear_mm.shape, np.bool_)
    start = (n_x // 2, n_y // 2, n_yaw // 2)
    queue[0], seen[start] = start, True
    pose = origin + cell * np.array([start[0], start[1], start[2]])
    enough_mm = max(cell[0], outer_mm * cell[2])
    clear_mm[start] = clearance(hand, lines_mm, outline_mm, disc_mm, outer_mm, inner_mm, pose, enough_mm)
    if clear_mm[start] <= 0.0:
        return False
    head, tail = 0, 1
    while head < tail:
        i, j, k = queue[head]
        head += 1
        if is_beyond(origin[0] + i * cell[0], origin[1] + j * cell[1], hull_mm, beyond_mm):
            return True
        for step in range(6 if n_yaw > 1 else 4):
            di, dj, dk = (step == 0) - (step == 1), (step == 2) - (step == 3), (step == 4) - (step == 5)
            u, v, w = i + di, j + dj, (k + dk) % n_yaw
            if u < 0 or v < 0 or u >= n_x or v >= n_y or seen[u, v, w]:
                continue
            if math.isnan(clear_mm[u, v, w]):
                pose[0], pose[1], pose[2] = origin[0] + u * cell[0], origin[1] + v * cell[1], origin[2] + w * cell[2]
                clear_mm[u, v, w] = clearance(hand, lines_mm, outline_mm, disc_mm, outer_mm, inner_mm, pose, enough_mm)
            length = cell[0] if step < 4 else outer_mm * cell[2]
            if clear_mm[u, v, w] > 0.0 and clear_mm[u, v, w] + clear_mm[i, j, k] >= length:
                seen[u, v, w] = True
                queue[tail] = u, v, w
                tail += 1
    return False


@njit(cache=True)
def is_beyond(x: float, y: float, hull_mm: Array, beyond_mm: float) -> bool:
    """Whether a point lies outside a convex polygon by at least so much."""
    for i in range(hull_mm.shape[0]):
        a, b = hull_mm[i], hull_mm[(i + 1) % hull_mm.shape[0]]
        ex, ey = b[0] - a[0], b[1] - a[1]
        if (ey * (x - a[0]) - ex * (y - a[1])) >= beyond_mm * math.sqrt(ex * ex + ey * ey):
            return True
    return False
