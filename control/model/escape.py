"""How hard the part is to lose: the lowest pass over the elastic energy from where it is to outside the hand, and the route of that escape.

The grid is searched from the part outward, always on from the lowest cell met so far (Dijkstra's order with the highest point for a length:
a minimax flood), and energies are asked for only where the search comes by. The pass is then measured along the route itself, between its
cells too: a real path, so no escape needs more than that; the true pass may be lower by what a finer grid would find.
"""

from __future__ import annotations

import heapq
import math
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from control.model.contact import fingers_apart
from control.model.energy import Energy, energy_at
from control.model.free_space import is_beyond
from control.model.kinematics import HandArrays, centre_lines_kernel
from control.model.pieces import Pieces
from hw_profiles import geometry
from hw_profiles.geometry import Array, Pose2
from hw_profiles.part import Disc

N_BETWEEN = 4  # energies taken between two cells of the route


@dataclass(frozen=True, eq=False)
class Escape:
    """The easiest way out that the grid shows.

    Attributes
    ----------
    pass_mj : highest energy on the route; inf when no route leads out.
    start_mj : energy at the part's own pose; pass_mj − start_mj is what a disturbance must bring. Both count the work of a steady pull.
    route : (k, 3) poses from the part outward: mm, mm, rad. energies_mj : (k,) along it.
    pass_pose : where the route is highest; None without a route.
    fingers_apart_mm : least distance between two yielding fingers on the route. Below 0 they would have to pass through each other, which
        the energy does not forbid: then the true pass is at least as high, and pass_mj a lower bound.
    """

    pass_mj: float
    start_mj: float
    route: Array
    energies_mj: Array
    pass_pose: Pose2 | None
    fingers_apart_mm: float

    @property
    def is_lower_bound(self) -> bool:
        """Whether fingers would have to pass through each other on the route."""
        return self.fingers_apart_mm < 0.0


def escape(energy: Energy, command: Array, pose: Pose2, n: int = 48, n_yaw: int = 36, pull_n: tuple[float, float] = (0.0, 0.0)) -> Escape:
    """The lowest pass from `pose` to outside the hand's fingers at a command (n_joints,).

    Parameters
    ----------
    pull_n : a steady force on the part [N], such as its weight on a tilted bench; its work counts too.
    n, n_yaw : cells along x and y of a box that holds the hand, and over one period of the part's symmetry (a disc needs one).
    """
    hand, part = energy.hand, energy.part
    command, pull = energy.checked(command), np.array(pull_n, dtype=float)
    lines = centre_lines_kernel(hand.arrays, command)
    hull = geometry.convex_hull(lines.reshape(-1, 2))
    beyond_mm = float(max(hand.link_radius_mm.max(), hand.tip_radius_mm.max())) + part.circumradius_mm
    half_mm = (float(np.abs(hull - pose.xy_mm).max()) + beyond_mm) * (1.0 + 4.0 / n)
    period = 0.0 if isinstance(part.shape, Disc) else 2.0 * math.pi / part.n_fold
    size = (n, n, n_yaw if period else 1)
    cell = np.array([2.0 * half_mm / n, 2.0 * half_mm / n, period / size[2]])
    origin = pose.as_array() - cell * (np.array(size) // 2)
    came_from = np.full(size, -1, np.int64)
    end = minimax_kernel(
        hand.arrays, energy.springs, command, energy.pieces, part.circumradius_mm, pull, origin, cell, hull, beyond_mm, came_from
    )
    start_mj = energy.at(command, pose).energy_mj - float(pull @ pose.xy_mm)
    if end < 0:
        return Escape(math.inf, start_mj, np.zeros((0, 3)), np.zeros(0), None, math.inf)
    route = _straightened(energy, command, pull, _route(int(end), came_from, origin, cell), cell)
    return _measured(energy, command, pull, start_mj, route)


def _straightened(energy: Energy, command: Array, pull: Array, route: Array, cell: Array) -> Array:
    """The same way with its steps drawn straight wherever that costs no more than the route's highest point, in poses half a cell apart."""

    def along(a: Array, b: Array) -> Array:
        reach = np.array([1.0, 1.0, energy.reach_mm])
        n = max(1, math.ceil(float((np.abs(b - a) * reach).max()) / (0.5 * cell[0])))
        return np.linspace(a, b, n + 1)

    def highest(poses: Array) -> float:
        return max(energy.at(command, Pose2.from_array(pose)).energy_mj - float(pull @ pose[:2]) for pose in poses)

    level, here, kept = highest(route), 0, [route[:1]]
    while here < len(route) - 1:
        ahead = len(route) - 1
        while ahead > here + 1 and highest(along(route[here], route[ahead])) > level + 1e-9:
            ahead = here + max(1, (ahead - here) // 2)
        kept.append(along(route[here], route[ahead])[1:])
        here = ahead
    return np.concatenate(kept)


def _route(end: int, came_from: NDArray[np.int64], origin: Array, cell: Array) -> Array:
    """Poses from the part to the end cell, with yaw unwrapped and points in between."""
    cells = [end]
    while came_from.flat[cells[-1]] != cells[-1]:
        cells.append(int(came_from.flat[cells[-1]]))
    index = np.stack(np.unravel_index(cells[::-1], came_from.shape), axis=1)
    poses = origin + index * cell
    if cell[2]:
        poses[:, 2] = np.unwrap(poses[:, 2], period=cell[2] * came_from.shape[2])
    along = np.arange(len(poses))
    finer = np.linspace(0, len(poses) - 1, (len(poses) - 1) * N_BETWEEN + 1)
    return np.stack([np.interp(finer, along, column) for column in poses.T], axis=1)


def _measured(energy: Energy, command: Array, pull: Array, start_mj: float, route: Array) -> Escape:
    found = [energy.at(command, Pose2.from_array(pose)) for pose in route]
    energies = np.array([one.energy_mj for one in found]) - route[:, :2] @ pull
    hand = energy.hand.arrays
    apart = min(float(fingers_apart(hand, centre_lines_kernel(hand, one.joints))) for one in found)
    highest = int(np.argmax(energies))
    for array in (route, energies):
        array.setflags(write=False)
    return Escape(float(energies[highest]), start_mj, route, energies, Pose2.from_array(route[highest]), apart)


@njit(cache=True)
def minimax_kernel(
    hand: HandArrays,
    springs: Array,
    command: Array,
    pieces: Pieces,
    reach_mm: float,
    pull: Array,
    origin: Array,
    cell: Array,
    hull_mm: Array,
    beyond_mm: float,
    came_from: NDArray[np.int64],
) -> int:
    """Flat index of the first cell outside the hand, −1 when there is none; fills `came_from`, the middle cell coming from itself."""
    n_x, n_y, n_yaw = came_from.shape
    pose, joints = np.empty(3), np.empty(command.shape[0])
    lowest, is_done = np.full(came_from.shape, np.inf), np.zeros(came_from.shape, np.bool_)
    first = ((n_x // 2) * n_y + n_y // 2) * n_yaw + n_yaw // 2
    came_from[n_x // 2, n_y // 2, n_yaw // 2] = first
    heap = [(-np.inf, 0, first)]  # the pass so far, steps so far (the shortest of equal routes), cell
    while len(heap) > 0:
        level, steps, here = heapq.heappop(heap)
        i, j, k = here // (n_y * n_yaw), (here // n_yaw) % n_y, here % n_yaw
        if is_done[i, j, k]:
            continue
        is_done[i, j, k] = True
        if is_beyond(origin[0] + i * cell[0], origin[1] + j * cell[1], hull_mm, beyond_mm):
            return here
        for step in range(6 if n_yaw > 1 else 4):
            di, dj, dk = (step == 0) - (step == 1), (step == 2) - (step == 3), (step == 4) - (step == 5)
            u, v, w = i + di, j + dj, (k + dk) % n_yaw
            if u < 0 or v < 0 or u >= n_x or v >= n_y or is_done[u, v, w]:
                continue
            height = level
            for share in (0.5, 1.0):
                pose[0], pose[1] = origin[0] + (i + share * di) * cell[0], origin[1] + (j + share * dj) * cell[1]
                pose[2] = origin[2] + (k + share * dk) * cell[2]
                here_mj = energy_at(hand, springs, command, pose, pieces, reach_mm, joints)
                height = max(height, here_mj - pull[0] * pose[0] - pull[1] * pose[1])
            if height < lowest[u, v, w]:
                lowest[u, v, w], came_from[u, v, w] = height, here
                heapq.heappush(heap, (height, steps + 1, (u * n_y + v) * n_yaw + w))
    return -1
