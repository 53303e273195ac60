"""Energy maps for one command after another over the same poses: a table of what blocks each finger where, made once for a part.

For every cell of a grid and every value of a finger's first joint on a fine march, the table keeps the values of its second joint that are
blocked. None of that depends on the command, so a new command asks for look-ups only. Between two values of the first joint the ends of a
blocked interval are taken as straight. Fingers of three joints would need a table a hundred times as large; they are computed directly.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from control.model.energy import Energy, PoseGrid, add_finger
from control.model.finger_energy import (
    COMMAND,
    HIGH,
    LOW,
    SLIDES,
    STALL,
    STIFFNESS,
    Start,
    blocked,
    chain_after,
    finger_chain,
    is_free,
    part_start,
    working_room,
)
from control.model.kinematics import centre_lines_kernel
from control.model.pieces import Pieces
from hw_profiles.geometry import Array

N_KEPT = 3  # blocked intervals kept for one posture; what lies between further ones counts as blocked
MARCH_RAD, MARCH_MM = 0.02, 1.5
TINY = 1e-9
N_HALVINGS = 10
Table = NDArray[np.float32]


@dataclass(frozen=True, eq=False)
class EnergyTable:
    """What blocks every finger over a grid of poses.

    tables : one (n_x, n_y, n_yaw, n_first, N_KEPT, 2) float32 array a finger, from and to [rad or mm] of blocked intervals, nan for none;
    None for a finger that is computed directly. firsts : values (n_first,) of each finger's first joint.
    """

    energy: Energy
    grid: PoseGrid
    tables: tuple[Table | None, ...]
    firsts: tuple[Array, ...]

    @classmethod
    def of(cls, energy: Energy, grid: PoseGrid) -> EnergyTable:
        """Make the table: some 0.3 s for 64 × 64 poses, three fingers and a hexagon; about 10 MB a finger."""
        hand = energy.hand
        tables: list[Table | None] = []
        firsts: list[Array] = []
        for f in range(hand.n_fingers):
            chain = finger_chain(hand.arrays, energy.springs, hand.home, f)
            first = _march(chain) if len(chain) == 2 else np.zeros(1)
            firsts.append(first)
            if len(chain) > 2:
                tables.append(None)
                continue
            table = np.full((*grid.shape, len(first), N_KEPT, 2), np.nan, np.float32)
            base_mm, base_yaw = hand.base_mm[f], float(hand.base_yaw_rad[f])
            fill_table(chain, first, base_mm, base_yaw, energy.pieces, grid.x_mm, grid.y_mm, grid.yaw_rad, table)
            tables.append(table)
        return cls(energy, grid, tuple(tables), tuple(firsts))

    def over(self, command: Array) -> Array:
        """Energies (n_x, n_y, n_yaw) [mJ] at a command (n_joints,), read-only; see `Energy.over`."""
        energy, hand = self.energy, self.energy.hand
        command = energy.checked(command)
        values = np.zeros(self.grid.shape)
        lines = centre_lines_kernel(hand.arrays, command)
        for f, (table, first) in enumerate(zip(self.tables, self.firsts, strict=True)):
            chain = finger_chain(hand.arrays, energy.springs, command, f)
            if table is None:
                grid = self.grid
                add_finger(hand.arrays, chain, lines[f], f, grid.x_mm, grid.y_mm, grid.yaw_rad, energy.pieces, energy.reach_mm, values)
            else:
                base_mm, base_yaw = hand.base_mm[f], float(hand.base_yaw_rad[f])
                look_up(chain, first, base_mm, base_yaw, energy.pieces, self.grid.x_mm, self.grid.y_mm, self.grid.yaw_rad, table, values)
        values.setflags(write=False)
        return values


def _march(chain: Array) -> Array:
    step = MARCH_MM if chain[0, SLIDES] else MARCH_RAD
    return np.linspace(chain[0, LOW], chain[0, HIGH], math.ceil((chain[0, HIGH] - chain[0, LOW]) / step) + 1)


@njit(cache=True)
def fill_table(
    chain: Array,
    firsts: Array,
    base_mm: Array,
    base_yaw: float,
    pieces: Pieces,
    x_mm: Array,
    y_mm: Array,
    yaw_rad: Array,
    table: Table,
) -> None:
    """Kernel of `EnergyTable.of` for one finger of one or two joints."""
    spans = working_room(chain.shape[0], pieces)
    last = chain.shape[0] - 1
    for i in range(x_mm.shape[0]):
        for j in range(y_mm.shape[0]):
            for k in range(yaw_rad.shape[0]):
                start = part_start(base_mm, base_yaw, x_mm[i], y_mm[j], yaw_rad[k])
                n = blocked(chain, pieces, spans, 0, start) if last == 1 else 0
                for m in range(firsts.shape[0]):
                    here, is_open = start, True
                    if last == 1:
                        shift = firsts[m] - chain[0, COMMAND]
                        is_open = n >= 0 and is_free(chain, spans, 0, start, n, shift)
                        here = chain_after(chain, 0, start, shift)
                    found = blocked(chain, pieces, spans, last, here) if is_open else -1
                    _keep(chain, last, here[2], spans[last], found, table[i, j, k, m])


@njit(cache=True)
def _keep(chain: Array, k: int, yaw: float, spans: Array, n: int, kept: Table) -> None:
    """Write the joint values that n intervals block within its limits, merged and in order; all of them when n is −1."""
    low, high = chain[k, LOW], chain[k, HIGH]
    if n < 0:
        kept[0, 0], kept[0, 1] = -np.inf, np.inf
        return
    here, filled = low, 0  # when no row is left, the last one grows
    for _ in range(2 * n + 1):  # the next blocked value from here on
        start = np.inf
        for i in range(n):
            at = spans[i, 0] if chain[k, SLIDES] else here + (spans[i, 0] - yaw - here) % (2.0 * math.pi)
            inside = here - spans[i, 0] if chain[k, SLIDES] else (here + yaw - spans[i, 0]) % (2.0 * math.pi)
            if 0.0 <= inside < spans[i, 1]:
                at = here
            if at >= here:
                start = min(start, at)
        if start >= high:
            return
        end, is_growing = start, True
        while is_growing and end < high:
            is_growing = False
            for i in range(n):
                inside = end - spans[i, 0] if chain[k, SLIDES] else (end + yaw - spans[i, 0] + TINY) % (2.0 * math.pi) - TINY
                if -TINY <= inside < spans[i, 1] - TINY:
                    end += spans[i, 1] - inside
                    is_growing = True
        row = min(filled, kept.shape[0] - 1)
        if filled < kept.shape[0]:
            kept[row, 0] = -np.inf if start <= low else start
        kept[row, 1] = np.inf if end >= high else end
        filled = row + 1
        here = end + TINY
        if here >= high:
            return


@njit(cache=True)
def look_up(
    chain: Array,
    firsts: Array,
    base_mm: Array,
    base_yaw: float,
    pieces: Pieces,
    x_mm: Array,
    y_mm: Array,
    yaw_rad: Array,
    table: Table,
    values: Array,
) -> None:
    """Kernel of `EnergyTable.over` for one finger: add its energy to every cell."""
    n_first, last = firsts.shape[0], chain.shape[0] - 1
    own, middle = np.zeros(n_first), 0
    for m in range(n_first):
        own[m] = _spring(chain, 0, firsts[m]) if last == 1 else 0.0
        middle = m if own[m] < own[middle] else middle
    spans = working_room(chain.shape[0], pieces)
    for i in range(x_mm.shape[0]):
        for j in range(y_mm.shape[0]):
            for k in range(yaw_rad.shape[0]):
                start = part_start(base_mm, base_yaw, x_mm[i], y_mm[j], yaw_rad[k])
                values[i, j, k] += _least_in(chain, pieces, spans, start, firsts, own, middle, table[i, j, k])


@njit(cache=True)
def _least_in(chain: Array, pieces: Pieces, spans: Array, start: Start, firsts: Array, own: Array, middle: int, cell: Table) -> float:
    """Least energy of a finger in one cell: nodes of the march outward from the command, then between the best and its neighbours."""
    last, n_first = chain.shape[0] - 1, firsts.shape[0]
    best, where = np.inf, -1
    for reach in range(n_first):
        is_done = True
        for side in range(2):
            m = middle + reach if side == 0 else middle - reach
            if m < 0 or m >= n_first or own[m] >= best:
                continue
            is_done = False
            energy = own[m] + _node(chain, last, cell[m])
            if energy < best:
                best, where = energy, m
        if is_done:
            break
    if last == 0 or where < 0:
        return best
    if where == middle and best <= own[middle]:  # free at the node nearest to the command, so taken as free at the command
        return 0.0
    is_shift_only = best <= own[where]
    for m in (where - 1, where):
        if m >= 0 and m + 1 < n_first:
            best = min(best, _between(chain, firsts, cell, m))
    inner = where + 1 if where < middle else where - 1
    if is_shift_only and best - own[inner] > 0.0:
        best = min(best, _transition(chain, pieces, spans, start, firsts[where], firsts[inner]))
    return best


@njit(cache=True)
def _transition(chain: Array, pieces: Pieces, spans: Array, start: Start, free: float, not_free: float) -> float:
    """Energy of the first joint alone at the edge between a free value and one that is not, the second joint at its command."""
    n = blocked(chain, pieces, spans, 0, start)
    for _ in range(N_HALVINGS):
        tried = 0.5 * (free + not_free)
        shift = tried - chain[0, COMMAND]
        is_clear = is_free(chain, spans, 0, start, n, shift)
        if is_clear:
            here = chain_after(chain, 0, start, shift)
            found = blocked(chain, pieces, spans, 1, here)
            is_clear = found >= 0 and is_free(chain, spans, 1, here, found, 0.0)
        free, not_free = (tried, not_free) if is_clear else (free, tried)
    return _spring(chain, 0, free)


@njit(cache=True)
def _node(chain: Array, k: int, kept: Table) -> float:
    """Least energy of the last joint at one node: 0 off its blocked intervals, else to the nearer end."""
    command = chain[k, COMMAND]
    for row in range(kept.shape[0]):
        if kept[row, 0] < command < kept[row, 1]:
            return min(_spring(chain, k, kept[row, 0]), _spring(chain, k, kept[row, 1]))
    return 0.0


@njit(cache=True)
def _between(chain: Array, firsts: Array, cell: Table, m: int) -> float:
    """Least energy between nodes m and m + 1: the ends of each interval, joined to those of the one it overlaps, run straight."""
    command, best = chain[1, COMMAND], np.inf
    for a in range(cell.shape[1]):
        for b in range(cell.shape[1]):
            overlaps = cell[m, a, 0] < cell[m + 1, b, 1] and cell[m + 1, b, 0] < cell[m, a, 1]
            covers = min(cell[m, a, 0], cell[m + 1, b, 0]) < command < max(cell[m, a, 1], cell[m + 1, b, 1])
            if overlaps and covers:
                for end in range(2):
                    first, second = cell[m, a, end], cell[m + 1, b, end]
                    if abs(first) < np.inf and abs(second) < np.inf:
                        best = min(best, _straight(chain, firsts[m], firsts[m + 1], first, second, 1.0 if end else -1.0))
    return best


@njit(cache=True)
def _straight(chain: Array, x_0: float, x_1: float, y_0: float, y_1: float, sense: float) -> float:
    """Least H of both joints on a straight line of values, the second pushed one way only; convex, so thirds will do."""
    low, high = 0.0, 1.0
    for _ in range(24):
        a, b = low + (high - low) / 3.0, high - (high - low) / 3.0
        if _at(chain, x_0, x_1, y_0, y_1, sense, a) < _at(chain, x_0, x_1, y_0, y_1, sense, b):
            high = b
        else:
            low = a
    return _at(chain, x_0, x_1, y_0, y_1, sense, 0.5 * (low + high))


@njit(cache=True)
def _at(chain: Array, x_0: float, x_1: float, y_0: float, y_1: float, sense: float, share: float) -> float:
    pushed = y_0 + share * (y_1 - y_0)
    if sense * (pushed - chain[1, COMMAND]) < 0.0:
        pushed = chain[1, COMMAND]
    return _spring(chain, 0, x_0 + share * (x_1 - x_0)) + _spring(chain, 1, pushed)


@njit(cache=True)
def _spring(chain: Array, k: int, value: float) -> float:
    """H of joint k at a value; inf beyond its limits."""
    if not abs(value) < np.inf:
        return np.inf
    shift, stiffness, stall = abs(value - chain[k, COMMAND]), chain[k, STIFFNESS], chain[k, STALL]
    bend = stall / stiffness
    return 0.5 * stiffness * shift * shift if shift <= bend else stall * (shift - 0.5 * bend)
