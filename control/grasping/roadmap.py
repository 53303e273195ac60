"""Which way to a pose: carrying within a grasp's reach, grasping anew where reaches overlap.

The cells of all reaches are the nodes of one graph. Neighbouring cells of a reach are joined by a carry; cells of different reaches that
hold the part at the same pose are joined, through a hub for that pose, by a regrasp. The time to the goal from every node at once
is what the controller descends; so it needs no new plan when the part does not follow exactly.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components

from control.grasping.hold import OPEN_MARGIN_MM, Bench
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

    def __init__(self, reaches: tuple[Reach, ...], bench: Bench) -> None:
        self.reaches, self._bench = reaches, bench
        self._held = [reach.held for reach in reaches]
        ids: list[NDArray[np.int64]] = []
        n_cells = 0
        for held in self._held:
            numbered = np.full(held.shape, -1)
            numbered[held] = n_cells + np.arange(held.sum())
            ids.append(numbered)
            n_cells += int(held.sum())
        self._ids, self._n_cells = ids, n_cells
        starts, ends, seconds = [], [], []
        for numbered in ids:
            for axis in range(3):
                a = np.take(numbered, range(numbered.shape[axis] - 1), axis=axis).ravel()
                b = np.take(numbered, range(1, numbered.shape[axis]), axis=axis).ravel()
                both = (a >= 0) & (b >= 0)
                starts.append(a[both])
                ends.append(b[both])
                seconds.append(np.full(int(both.sum()), STEP_S[axis]))
        cells, hubs, n_hubs = self._hubs()
        starts.append(cells)
        ends.append(n_cells + hubs)
        seconds.append(np.full(len(cells), REGRASP_S / 2.0))
        start, end, cost = np.concatenate(starts), np.concatenate(ends), np.concatenate(seconds)
        n = n_cells + n_hubs
        both_ways = (np.concatenate([cost, cost]), (np.concatenate([start, end]), np.concatenate([end, start])))
        self._graph = csr_array(both_ways, shape=(n, n))

    def _hubs(self) -> tuple[NDArray[np.int64], NDArray[np.int64], int]:
        """Cells at which the fingers can change grasp, and the number of the hub of each.

        A hub stands for a pose on the common lattice, angle modulo a turn.
        """
        required = self._bench.demands.margin_mm > -math.inf
        keys, cells = [], []
        for reach, numbered in zip(self.reaches, self._ids, strict=True):
            openable = reach.openable(OPEN_MARGIN_MM if required else -math.inf)
            centres = reach.origin + PITCH * (np.argwhere(openable) + 0.5)
            index = np.floor(centres / PITCH).astype(np.int64)
            index[:, 2] = index[:, 2] % N_YAW if self._bench.part.n_fold else 0  # a disc may be taken up at any angle
            keys.append(index)
            cells.append(numbered[openable])
        _, number = np.unique(np.concatenate(keys), axis=0, return_inverse=True)
        return np.concatenate(cells), number.ravel(), int(number.max(initial=-1)) + 1

    def connected(self) -> list[NDArray[np.bool_]]:
        """For each reach the cells of the largest set that can be got from one to another."""
        _, labels = connected_components(self._graph, directed=False)
        largest = np.bincount(labels[: self._n_cells]).argmax()
        is_in = np.append(labels[: self._n_cells] == largest, False)
        return [is_in[numbered] for numbered in self._ids]

    def remaining(self, goal: Array, blocked: frozenset[int] = frozenset()) -> Remaining:
        """Seconds to a goal pose (3,) from every cell; a yaw of nan stands for any angle.

        `blocked` are cells (see `cell_number`) at which no change of grasp worked out; they are not counted on again.
        """
        goals: list[int] = []
        for reach, numbered in zip(self.reaches, self._ids, strict=True):
            yaw = reach.origin[2] if math.isnan(goal[2]) else reach.yaw_near(float(goal[2]))
            i, j, k = reach.cell(np.array([goal[0], goal[1], yaw]))
            if all(0 <= place < n for place, n in zip((i, j, k), numbered.shape, strict=True)):
                found = numbered[i, j] if math.isnan(goal[2]) else numbered[i, j, k : k + 1]
                goals.extend(int(one) for one in found[found >= 0])
        no_regrasp = np.zeros(self._n_cells, dtype=np.bool_)
        no_regrasp[list(blocked)] = True
        graph = self._graph
        seconds = _shortest(graph.indptr, graph.indices, graph.data, np.array(goals, dtype=np.int64), no_regrasp)
        padded = np.append(seconds[: self._n_cells], np.inf)
        return Remaining(tuple(padded[numbered] for numbered in self._ids))

    def cells_about(self, reach_index: int, cell: Node) -> frozenset[int]:
        """Numbers of a reach's cell and of its neighbours."""
        numbered = self._ids[reach_index]
        low = [max(place - 1, 0) for place in cell]
        block = numbered[low[0] : cell[0] + 2, low[1] : cell[1] + 2, low[2] : cell[2] + 2]
        return frozenset(int(one) for one in block[block >= 0])


@njit(cache=True)
def _shortest(
    first: NDArray[np.int32], ends: NDArray[np.int32], seconds: Array, goals: NDArray[np.int64], no_regrasp: NDArray[np.bool_]
) -> Array:
    """Least seconds from every node to any goal (label correcting with a queue: Bellman–Ford–Moore, 1957–1959)."""
    n, n_cells = first.shape[0] - 1, no_regrasp.shape[0]
    least = np.full(n, np.inf)
    queue, is_queued = np.empty(n + 1, np.int64), np.zeros(n, np.bool_)
    head, tail = 0, 0
    for goal in goals:
        least[goal] = 0.0
        queue[tail], is_queued[goal] = goal, True
        tail += 1
    while head != tail:
        node = queue[head]
        head = (head + 1) % (n + 1)
        is_queued[node] = False
        for edge in range(first[node], first[node + 1]):
            other = ends[edge]
            if (node < n_cells <= other and no_regrasp[node]) or (other < n_cells <= node and no_regrasp[other]):
                continue
            if least[node] + seconds[edge] < least[other] - 1e-12:
                least[other] = least[node] + seconds[edge]
                if not is_queued[other]:
                    queue[tail], is_queued[other] = other, True
                    tail = (tail + 1) % (n + 1)
    return least
