"""The least energy at which one finger makes room for the part.

The last joint's answer is in closed form (`sweep`). The joints before it are marched outward from their targets until their own energy
alone is above the best found, and every valley met on the way is narrowed by golden section (Kiefer 1953).

In every kernel here `chain` are the finger's joints (rows of `finger_chain`), `pieces` the part's, `spans` (n, room, 2) working room for
the blocked intervals of each joint, and `start` the place and direction (x, y, yaw) in the part frame from which joint k goes on.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from control.model.kinematics import HandArrays
from control.model.pieces import Pieces
from control.model.sweep import blocked_slides, blocked_turns, edge_of_block, is_blocked, nearest_free, span_room
from hw_profiles.geometry import Array

SLIDES, LENGTH, RADIUS, TIP, LOW, HIGH, STIFFNESS, STALL, COMMAND, N_COLUMNS = range(10)  # columns of a chain

TURN_STEP, SLIDE_STEP = 0.03, 1.5  # of the march [rad], [mm]
N_STEPS = 128
SLACK = 2.0  # how many steps at stall torque deeper than its marched floor a valley between blocked ones may be
GOLDEN = 0.5 * (math.sqrt(5.0) - 1.0)
N_GOLDEN, N_GOLDEN_OUTER = 16, 14

Start = tuple[float, float, float]


@njit(cache=True)
def finger_chain(hand: HandArrays, springs: Array, command: Array, f: int) -> Array:
    """The joints of a finger as rows (n, N_COLUMNS); `springs` (n_joints, 2) are stiffness and stall. TIP is 0 but for the last."""
    first, n = hand.first[f], hand.first[f + 1] - hand.first[f]
    chain = np.zeros((n, N_COLUMNS))
    for j in range(n):
        k = first + j
        chain[j, SLIDES] = 1.0 if hand.is_slide[k] else 0.0
        chain[j, LENGTH], chain[j, RADIUS] = hand.link_mm[k], hand.link_radius_mm[k]
        chain[j, LOW], chain[j, HIGH], chain[j, COMMAND] = hand.low[k], hand.high[k], command[k]
        chain[j, STIFFNESS], chain[j, STALL] = springs[k, 0], springs[k, 1]
    chain[n - 1, TIP] = hand.tip_radius_mm[f]
    return chain


@njit(cache=True)
def is_far(line_mm: Array, n_links: int, thickest_mm: float, pose: Array, reach_mm: float) -> bool:
    """Whether a commanded finger is surely clear of the part: its centre line (4, 2) keeps off the part's circumcircle."""
    off = reach_mm + thickest_mm
    for k in range(n_links):
        ax, ay = line_mm[k, 0] - pose[0], line_mm[k, 1] - pose[1]
        ux, uy = line_mm[k + 1, 0] - line_mm[k, 0], line_mm[k + 1, 1] - line_mm[k, 1]
        square = ux * ux + uy * uy
        share = min(max(-(ax * ux + ay * uy) / square, 0.0), 1.0) if square > 0.0 else 0.0
        if (ax + share * ux) ** 2 + (ay + share * uy) ** 2 < off * off:
            return False
    return True


@njit(cache=True)
def finger_least(chain: Array, base_mm: Array, base_yaw: float, pose: Array, pieces: Pieces, spans: Array, shifts: Array) -> float:
    """Least energy [mJ] of a finger that clears the part at `pose`; fills `shifts` (≥ n,), how far its joints are pushed off."""
    start = part_start(base_mm, base_yaw, pose[0], pose[1], pose[2])
    n = chain.shape[0]
    if n == 1:
        energy, shifts[0] = _last(chain, pieces, spans, 0, start)
    elif n == 2:
        energy, shifts[0], shifts[1] = _pair(chain, pieces, spans, 0, start, np.inf, True)
    else:
        energy = _three(chain, pieces, spans, start, shifts)
    return energy


@njit(cache=True)
def part_start(base_mm: Array, base_yaw: float, x_mm: float, y_mm: float, yaw_rad: float) -> Start:
    """Where a finger stands and looks in the frame of a part at (x, y, yaw)."""
    cos, sin = math.cos(yaw_rad), math.sin(yaw_rad)
    dx, dy = base_mm[0] - x_mm, base_mm[1] - y_mm
    return cos * dx + sin * dy, -sin * dx + cos * dy, base_yaw - yaw_rad


@njit(cache=True)
def working_room(n_joints: int, pieces: Pieces) -> Array:
    """Room for `spans`."""
    return np.empty((n_joints, span_room(pieces.corners_mm.shape[0]), 2))


@njit(cache=True)
def spring(chain: Array, k: int, shift: float) -> float:
    """Energy [mJ] of joint k pushed off its target (eq. 2): a spring up to the stall torque, that torque beyond."""
    stiffness, stall = chain[k, STIFFNESS], chain[k, STALL]
    bend = stall / stiffness
    if abs(shift) <= bend:
        return 0.5 * stiffness * shift * shift
    return stall * (abs(shift) - 0.5 * bend)


@njit(cache=True)
def march_step(chain: Array, k: int) -> float:
    """Step of the march over joint k [rad or mm]."""
    return max(SLIDE_STEP if chain[k, SLIDES] else TURN_STEP, (chain[k, HIGH] - chain[k, LOW]) / (N_STEPS - 4))


@njit(cache=True)
def blocked(chain: Array, pieces: Pieces, spans: Array, k: int, start: Start) -> int:
    """Fill the blocked values of joint k; how many intervals, −1 for all."""
    x, y, yaw = start
    radius, tip = chain[k, RADIUS], chain[k, TIP]
    corners, first, rounding = pieces.corners_mm, pieces.first, pieces.round_mm
    if chain[k, SLIDES]:
        return blocked_slides(x, y, math.cos(yaw), math.sin(yaw), radius, tip, corners, first, rounding, spans[k])
    return blocked_turns(x, y, chain[k, LENGTH], radius, tip, corners, first, rounding, spans[k])


@njit(cache=True)
def is_free(chain: Array, spans: Array, k: int, start: Start, n: int, shift: float) -> bool:
    """Whether joint k may be shifted so: its own link clears the part."""
    value = chain[k, COMMAND] + shift
    if chain[k, SLIDES]:
        return not is_blocked(value, 0.0, spans[k], n)
    return not is_blocked(start[2] + value, 2.0 * math.pi, spans[k], n)


@njit(cache=True)
def _cleared(chain: Array, spans: Array, k: int, start: Start, n: int, sense: float) -> float:
    """The least shift of joint k, upward (sense 1) or downward (−1), at which its own link clears the part."""
    if chain[k, SLIDES]:
        return sense * edge_of_block(chain[k, COMMAND], 0.0, spans[k], n, sense)
    return sense * edge_of_block(start[2] + chain[k, COMMAND], 2.0 * math.pi, spans[k], n, sense)


@njit(cache=True)
def chain_after(chain: Array, k: int, start: Start, shift: float) -> Start:
    """Where the chain has come to behind joint k, shifted off its target."""
    x, y, yaw = start
    value = chain[k, COMMAND] + shift
    length = value
    if not chain[k, SLIDES]:
        yaw, length = yaw + value, chain[k, LENGTH]
    return x + length * math.cos(yaw), y + length * math.sin(yaw), yaw


@njit(cache=True)
def _last(chain: Array, pieces: Pieces, spans: Array, k: int, start: Start) -> tuple[float, float]:
    """Least energy of the last joint, and its shift: to the nearest free value, for H grows with |d|."""
    n = blocked(chain, pieces, spans, k, start)
    if n < 0:
        return np.inf, 0.0
    command = chain[k, COMMAND]
    low, high = chain[k, LOW] - command, chain[k, HIGH] - command
    if chain[k, SLIDES]:
        shift = nearest_free(command, 0.0, spans[k], n, low, high)
    else:
        shift = nearest_free(start[2] + command, 2.0 * math.pi, spans[k], n, low, high)
    return (spring(chain, k, shift), shift) if abs(shift) < np.inf else (np.inf, 0.0)


@njit(cache=True)
def _pair_at(chain: Array, pieces: Pieces, spans: Array, k: int, start: Start, n: int, shift: float) -> tuple[float, float]:
    """Energy of joints k and k + 1 with k shifted so and k + 1 at its best; and the shift of k + 1."""
    if not is_free(chain, spans, k, start, n, shift):
        return np.inf, 0.0
    energy, last = _last(chain, pieces, spans, k + 1, chain_after(chain, k, start, shift))
    return energy + spring(chain, k, shift), last


@njit(cache=True)
def _is_valley(marched: Array, i: int, slack: float, best: float) -> bool:
    """Whether the march has a floor at i that may, between its neighbours, lie below the best."""
    floor = marched[i]
    if floor > marched[i - 1] or floor > marched[i + 1] or floor == np.inf:
        return False
    steepest = max(marched[i - 1] - floor, marched[i + 1] - floor)
    return floor - min(max(steepest, 0.25 * slack), slack) < best


@njit(cache=True)
def _pair(chain: Array, pieces: Pieces, spans: Array, k: int, start: Start, budget: float, is_final: bool) -> tuple[float, float, float]:
    """Least energy of the last two joints, k and k + 1, if below the budget (else inf), and their shifts; marched only, or narrowed."""
    n = blocked(chain, pieces, spans, k, start)
    if n < 0:
        return np.inf, 0.0, 0.0
    step = march_step(chain, k)
    low, high = chain[k, LOW] - chain[k, COMMAND], chain[k, HIGH] - chain[k, COMMAND]
    marched = np.full(2 * N_STEPS + 1, np.inf)
    best, shift, last = budget, 0.0, 0.0
    for side in range(2):  # rest, or where the joint's own link just clears the part
        tried = _cleared(chain, spans, k, start, n, 1.0 - 2.0 * side)
        if low <= tried <= high and spring(chain, k, tried) < best:
            energy, pushed = _pair_at(chain, pieces, spans, k, start, n, tried)
            if energy < best:
                best, shift, last = energy, tried, pushed
    widest = 0
    for i in range(2 * N_STEPS - 2):
        steps = (i + 1) // 2 if i % 2 else -(i // 2)
        tried = min(max(steps * step, low), high)
        if spring(chain, k, steps * step) >= best:
            break
        if abs(steps * step - tried) >= step:
            continue
        energy, pushed = _pair_at(chain, pieces, spans, k, start, n, tried)
        marched[N_STEPS + steps], widest = energy, abs(steps)
        if energy < best:
            best, shift, last = energy, tried, pushed
    if is_final and best > 0.0:
        for i in range(N_STEPS - widest, N_STEPS + widest + 1):
            if _is_valley(marched, i, SLACK * chain[k, STALL] * step, best):
                middle = (i - N_STEPS) * step
                bottom, tried, pushed = _narrow(
                    chain, pieces, spans, k, start, n, max(middle - step, low), min(middle + step, high), N_GOLDEN
                )
                if bottom < best:
                    best, shift, last = bottom, tried, pushed
    return (best, shift, last) if best < budget else (np.inf, 0.0, 0.0)


@njit(cache=True)
def _narrow(
    chain: Array, pieces: Pieces, spans: Array, k: int, start: Start, n: int, low: float, high: float, n_golden: int
) -> tuple[float, float, float]:
    """Golden section on the shift of joint k within low … high; the best energy seen, and the shifts of k and k + 1."""
    best, best_shift, best_last = np.inf, 0.0, 0.0
    left, right = high - GOLDEN * (high - low), low + GOLDEN * (high - low)
    left_energy, left_last = _pair_at(chain, pieces, spans, k, start, n, left)
    right_energy, right_last = _pair_at(chain, pieces, spans, k, start, n, right)
    for _ in range(n_golden):
        if left_energy < best:
            best, best_shift, best_last = left_energy, left, left_last
        if right_energy < best:
            best, best_shift, best_last = right_energy, right, right_last
        if left_energy < right_energy or (left_energy == right_energy and abs(low) < abs(high)):
            high, right, right_energy, right_last = right, left, left_energy, left_last
            left = high - GOLDEN * (high - low)
            left_energy, left_last = _pair_at(chain, pieces, spans, k, start, n, left)
        else:
            low, left, left_energy, left_last = left, right, right_energy, right_last
            right = low + GOLDEN * (high - low)
            right_energy, right_last = _pair_at(chain, pieces, spans, k, start, n, right)
    return best, best_shift, best_last


@njit(cache=True)
def _three(chain: Array, pieces: Pieces, spans: Array, start: Start, shifts: Array) -> float:
    """Least energy of a finger of three joints; fills their shifts."""
    n = blocked(chain, pieces, spans, 0, start)
    if n < 0:
        return np.inf
    step = march_step(chain, 0)
    slack = SLACK * chain[0, STALL] * step
    low, high = chain[0, LOW] - chain[0, COMMAND], chain[0, HIGH] - chain[0, COMMAND]
    marched, middles = np.full(2 * N_STEPS + 1, np.inf), np.zeros(2 * N_STEPS + 1)
    best, widest = np.inf, 0
    for i in range(2 * N_STEPS - 2):
        steps = (i + 1) // 2 if i % 2 else -(i // 2)
        tried = min(max(steps * step, low), high)
        if spring(chain, 0, steps * step) >= best:
            break
        if abs(steps * step - tried) >= step or not is_free(chain, spans, 0, start, n, tried):
            continue
        own = spring(chain, 0, tried)
        energy, middle, pushed = _pair(chain, pieces, spans, 1, chain_after(chain, 0, start, tried), best + slack - own, False)
        marched[N_STEPS + steps], middles[N_STEPS + steps], widest = energy + own, middle, abs(steps)
        if energy + own < best:
            best = energy + own
            shifts[0], shifts[1], shifts[2] = tried, middle, pushed
    if 0.0 < best < np.inf:
        for i in range(N_STEPS - widest, N_STEPS + widest + 1):
            if _is_valley(marched, i, slack, best):
                at = (i - N_STEPS) * step
                best = _narrow_three(chain, pieces, spans, start, n, max(at - step, low), min(at + step, high), middles[i], best, shifts)
    return best


@njit(cache=True)
def _three_at(chain: Array, pieces: Pieces, spans: Array, start: Start, n: int, shift: float, near: float) -> tuple[float, float, float]:
    """Energy of a finger of three joints with the first shifted so and the second near a shift; and the shifts of both others."""
    if not is_free(chain, spans, 0, start, n, shift):
        return np.inf, near, 0.0
    here = chain_after(chain, 0, start, shift)
    m = blocked(chain, pieces, spans, 1, here)
    if m < 0:
        return np.inf, near, 0.0
    step = 1.5 * march_step(chain, 1)
    low, high = max(near - step, chain[1, LOW] - chain[1, COMMAND]), min(near + step, chain[1, HIGH] - chain[1, COMMAND])
    energy, second, last = _narrow(chain, pieces, spans, 1, here, m, low, high, N_GOLDEN_OUTER)
    for side in range(2):
        tried = _cleared(chain, spans, 1, here, m, 1.0 - 2.0 * side)
        if low <= tried <= high:
            energy_there, last_there = _pair_at(chain, pieces, spans, 1, here, m, tried)
            if energy_there < energy:
                energy, second, last = energy_there, tried, last_there
    return energy + spring(chain, 0, shift), second, last


@njit(cache=True)
def _narrow_three(
    chain: Array,
    pieces: Pieces,
    spans: Array,
    start: Start,
    n: int,
    low: float,
    high: float,
    near: float,
    best: float,
    shifts: Array,
) -> float:
    """Golden section on the shift of the first of three joints; improves `best` and `shifts`, the second joint starting near a shift."""
    left, right = high - GOLDEN * (high - low), low + GOLDEN * (high - low)
    left_energy, left_near, left_last = _three_at(chain, pieces, spans, start, n, left, near)
    right_energy, right_near, right_last = _three_at(chain, pieces, spans, start, n, right, near)
    for _ in range(N_GOLDEN_OUTER):
        if left_energy < best:
            best, shifts[0], shifts[1], shifts[2] = left_energy, left, left_near, left_last
        if right_energy < best:
            best, shifts[0], shifts[1], shifts[2] = right_energy, right, right_near, right_last
        if left_energy <= right_energy:
            high, right, right_energy, right_near, right_last = right, left, left_energy, left_near, left_last
            left = high - GOLDEN * (high - low)
            left_energy, left_near, left_last = _three_at(chain, pieces, spans, start, n, left, right_near)
        else:
            low, left, left_energy, left_near, left_last = left, right, right_energy, right_near, right_last
            right = low + GOLDEN * (high - low)
            right_energy, right_near, right_last = _three_at(chain, pieces, spans, start, n, right, left_near)
    return best
