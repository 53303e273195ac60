"""Which way to a pose: carrying within a grasp's reach, grasping anew where reaches overlap.

The cells of all reaches are the nodes of one graph. Neighbouring cells of a reach are joined by a carry; cells of different reaches that
hold the part at the same pose are joined, through a hub for that pose, by a regrasp. The time to the goal from every node at once
(Dijkstra 1959) is what the controller descends; so it needs no new plan when the part does not follow exactly.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.sparse.csgraph import dijkstra

from control.grasping.reach import PITCH, Node, Reach
from hw_profiles.geometry import Array

STEP_S = np.array([0.13, 0.13, 0.08])  # to carry the part by one cell
REGRASP_S = 0.8
N_YAW = round(2.0 * math.pi / PITCH[2])


@dataclass(frozen=True, slots=True, eq=False)
class Remaining:
    """Seconds to the goal from every cell: one array of cells for each reach; inf where the goal cannot be reached from."""

    by_reach: tuple[Array, ...]

    def at(self, reach_index: int, cell: Node) -> float:
        """Seconds from a cell of a reach; inf outside it."""
        values = self.by_reach[reach_index]
        if not all(0 <= k < n for k, n in zip(cell, values.shape, strict=True)):
            return math.inf
        return float(values[cell])


class Roadmap:
    """The graph of the cells of all reaches of a library."""

    def __init__(self, reaches: tuple[Reach, ...]) -> None:
        self.reaches = reaches
        self._held = [reach.held_cells() for reach in reaches]
        ids, n_cells = [], 0
        for held in self._held:
            numbered = np.full(held.shape, -1)
            numbered[held] = n_cells + np.arange(held.sum())
            ids.append(numbered)
            n_cells += int(held.sum())
        self._ids, self._n_cells = ids, n_cells
        rows, columns, weights = [], [], []
        for numbered in ids:
            for axis in range(3):
                a = np.take(numbered, range(numbered.shape[axis] - 1), axis=axis).ravel()
                b = np.take(numbered, range(1, numbered.shape[axis]), axis=axis).ravel()
                both = (a >= 0) & (b >= 0)
                rows.append(a[both])
                columns.append(b[both])
                weights.append(np.full(int(both.sum()), STEP_S[axis]))
        hubs, n_hubs = self._hubs()
        rows.append(np.arange(n_cells))
        columns.append(n_cells + hubs)
        weights.append(np.full(n_cells, REGRASP_S / 2.0))
        row, column = np.concatenate(rows), np.concatenate(columns)
        n = n_cells + n_hubs
        self._graph = csr_array((np.concatenate(weights), (row, column)), shape=(n, n))

    def _hubs(self) -> tuple[NDArray[np.int64], int]:
        """Number of the pose hub of every cell: position on the common lattice, angle modulo a turn."""
        keys = []
        for reach, held in zip(self.reaches, self._held, strict=True):
            centres = (reach.origin + PITCH * (np.argwhere(held) + 0.5)) / PITCH
            index = np.floor(centres).astype(np.int64)
            index[:, 2] %= N_YAW
            keys.append(index)
        _, number = np.unique(np.concatenate(keys), axis=0, return_inverse=True)
        return number.ravel(), int(number.max()) + 1

    def remaining(self, goal: Array) -> Remaining:
        """Seconds to a goal pose (3,) from every cell; a yaw of nan stands for any angle."""
        goals: list[int] = []
        for reach, numbered in zip(self.reaches, self._ids, strict=True):
            yaw = reach.origin[2] if math.isnan(goal[2]) else reach.yaw_near(float(goal[2]))
            i, j, k = reach.cell(np.array([goal[0], goal[1], yaw]))
            n_x, n_y, n_yaw = numbered.shape
            if 0 <= i < n_x and 0 <= j < n_y and 0 <= k < n_yaw:
                found = numbered[i, j] if math.isnan(goal[2]) else numbered[i, j, k : k + 1]
                goals.extend(int(one) for one in found[found >= 0])
        if not goals:
            return Remaining(tuple(np.full(numbered.shape, np.inf) for numbered in self._ids))
        seconds = dijkstra(self._graph, directed=False, indices=goals, min_only=True)[: self._n_cells]
        padded = np.append(seconds, np.inf)
        return Remaining(tuple(padded[numbered] for numbered in self._ids))
