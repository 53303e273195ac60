"""The least energy at which one finger makes room for the part.

The last joint's answer is in closed form (`sweep`). The joints before it are marched outward from their targets until their own energy
alone is above the best found, and every valley met on the way is narrowed by golden section (Kiefer 1953).
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from control.model.sweep import blocked_slides, blocked_turns, is_blocked, nearest_free
from hw_profiles.geometry import Array

SLIDES, LENGTH, RADIUS, LOW, HIGH, STIFFNESS, STALL, COMMAND = range(8)  # columns of a chain, one row a joint

TURN_STEP, SLIDE_STEP = 0.03, 1.5  # rad, mm
N_STEPS = 128
SLACK = 4.0  # how many times a step at stall torque a valley may turn out deeper than its marched floor
GOLDEN = 0.5 * (math.sqrt(5.0) - 1.0)
N_GOLDEN, N_GOLDEN_OUTER = 18, 16


@njit(cache=True)
def is_far(line_mm: Array, n_links: int, thickest_mm: float, tip_mm: float, pose: Array, reach_mm: float) -> bool:
    """Whether a commanded finger is surely clear of the part: its centre line (4, 2) keeps off the part's circumcircle."""
    off = reach_mm + max(thickest_mm, tip_mm)
    for k in range(n_links):
        ax, ay = line_mm[k, 0] - pose[0], line_mm[k, 1] - pose[1]
        ux, uy = line_mm[k + 1, 0] - line_mm[k, 0], line_mm[k + 1, 1] - line_mm[k, 1]
        square = ux * ux + uy * uy
        share = min(max(-(ax * ux + ay * uy) / square, 0.0), 1.0) if square > 0.0 else 0.0
        if (ax + share * ux) ** 2 + (ay + share * uy) ** 2 < off * off:
            return False
    return True


@njit(cache=True)
def spring(shift: float, stiffness: float, stall: float) -> float:
    """Energy [mJ] of a joint pushed off its target (eq. 2): a spring up to the stall torque, that torque beyond."""
    bend = stall / stiffness
    if abs(shift) <= bend:
        return 0.5 * stiffness * shift * shift
    return stall * (abs(shift) - 0.5 * bend)


@njit(cache=True)
def march_step(chain: Array, k: int) -> float:
    """Step of the march over joint k [rad or mm]."""
    return max(SLIDE_STEP if chain[k, SLIDES] else TURN_STEP, (chain[k, HIGH] - chain[k, LOW]) / (N_STEPS - 4))


@njit(cache=True)
def finger_least(
    chain: Array, base_mm: Array, base_yaw: float, tip: float, pose: Array, corners_mm: Array, disc_mm: float, joints: Array
) -> float:
    """Least energy [mJ] of a finger (chain rows of `energy.finger_chain`) that clears the part at `pose`; fills `joints` (≥ n,)."""
    n = chain.shape[0]
    spans = np.empty((3 * corners_mm.shape[0] + 1, 2))
    upper_spans = np.empty((2, 3 * corners_mm.shape[0] + 1, 2))
    cos, sin = math.cos(pose[2]), math.sin(pose[2])
    dx, dy = base_mm[0] - pose[0], base_mm[1] - pose[1]
    x, y, yaw = cos * dx + sin * dy, -sin * dx + cos * dy, base_yaw - pose[2]
    shifts = np.zeros(3)
    if n == 1:
        energy, shifts[0] = _last(chain, 0, x, y, yaw, tip, corners_mm, disc_mm, spans)
    elif n == 2:
        energy, shifts[0], shifts[1] = _pair(chain, 0, x, y, yaw, tip, corners_mm, disc_mm, spans, upper_spans[0], np.inf, True)
    else:
        energy = _three(chain, x, y, yaw, tip, corners_mm, disc_mm, spans, upper_spans, shifts)
    for j in range(n):
        joints[j] = chain[j, COMMAND] + (shifts[j] if energy < np.inf else 0.0)
    return energy


@njit(cache=True)
def _blocked(chain: Array, k: int, x: float, y: float, yaw: float, tip: float, corners_mm: Array, disc_mm: float, spans: Array) -> int:
    """Blocked values of joint k, whose link starts at (x, y) behind a chain that looks along `yaw`."""
    if chain[k, SLIDES]:
        return blocked_slides(x, y, math.cos(yaw), math.sin(yaw), chain[k, RADIUS], tip, corners_mm, disc_mm, spans)
    return blocked_turns(x, y, chain[k, LENGTH], chain[k, RADIUS], tip, corners_mm, disc_mm, spans)


@njit(cache=True)
def _last(
    chain: Array, k: int, x: float, y: float, yaw: float, tip: float, corners_mm: Array, disc_mm: float, spans: Array
) -> tuple[float, float]:
    """Least energy of the last joint, and its shift: the nearest free value, for H grows with |d|."""
    n = _blocked(chain, k, x, y, yaw, tip, corners_mm, disc_mm, spans)
    if n < 0:
        return np.inf, 0.0
    command = chain[k, COMMAND]
    low, high = chain[k, LOW] - command, chain[k, HIGH] - command
    if chain[k, SLIDES]:
        shift = nearest_free(command, 0.0, spans, n, low, high)
    else:
        shift = nearest_free(yaw + command, 2.0 * math.pi, spans, n, low, high)
    return (spring(shift, chain[k, STIFFNESS], chain[k, STALL]), shift) if abs(shift) < np.inf else (np.inf, 0.0)


@njit(cache=True)
def _after(chain: Array, k: int, x: float, y: float, yaw: float, shift: float) -> tuple[float, float, float]:
    """Where the chain has come to behind joint k, shifted off its target."""
    value = chain[k, COMMAND] + shift
    length = value
    if not chain[k, SLIDES]:
        yaw, length = yaw + value, chain[k, LENGTH]
    return x + length * math.cos(yaw), y + length * math.sin(yaw), yaw


@njit(cache=True)
def _free(chain: Array, k: int, yaw: float, shift: float, spans: Array, n: int) -> bool:
    """Whether joint k may be shifted so: its own link clears the part."""
    value = chain[k, COMMAND] + shift
    return not (is_blocked(value, 0.0, spans, n) if chain[k, SLIDES] else is_blocked(yaw + value, 2.0 * math.pi, spans, n))


@njit(cache=True)
def _pair_at(
    chain: Array,
    k: int,
    x: float,
    y: float,
    yaw: float,
    tip: float,
    corners_mm: Array,
    disc_mm: float,
    spans: Array,
    own: Array,
    n: int,
    shift: float,
) -> tuple[float, float]:
    """Energy of joints k and k + 1 with k shifted so and k + 1 at its best; and the shift of k + 1."""
    if not _free(chain, k, yaw, shift, own, n):
        return np.inf, 0.0
    bx, by, turned = _after(chain, k, x, y, yaw, shift)
    energy, last = _last(chain, k + 1, bx, by, turned, tip, corners_mm, disc_mm, spans)
    return energy + spring(shift, chain[k, STIFFNESS], chain[k, STALL]), last


@njit(cache=True)
def _pair(
    chain: Array,
    k: int,
    x: float,
    y: float,
    yaw: float,
    tip: float,
    corners_mm: Array,
    disc_mm: float,
    spans: Array,
    own: Array,
    budget: float,
    narrow: bool,
) -> tuple[float, float, float]:
    """Least energy of the last two joints, k and k + 1, if below the budget (else inf), and their shifts."""
    n = _blocked(chain, k, x, y, yaw, 0.0, corners_mm, disc_mm, own)
    if n < 0:
        return np.inf, 0.0, 0.0
    step = march_step(chain, k)
    marched = np.full(2 * N_STEPS + 1, np.inf)
    best, best_shift, best_last = budget, 0.0, 0.0
    low, high = chain[k, LOW] - chain[k, COMMAND], chain[k, HIGH] - chain[k, COMMAND]
    first, last = N_STEPS, N_STEPS
    for i in range(2 * N_STEPS - 2):
        steps = (i + 1) // 2 if i % 2 else -(i // 2)
        shift = min(max(steps * step, low), high)
        if spring(steps * step, chain[k, STIFFNESS], chain[k, STALL]) >= best:
            break
        if abs(steps * step - shift) >= step:
            continue
        energy, pushed = _pair_at(chain, k, x, y, yaw, tip, corners_mm, disc_mm, spans, own, n, shift)
        marched[N_STEPS + steps] = energy
        first, last = min(first, N_STEPS + steps), max(last, N_STEPS + steps)
        if energy < best:
            best, best_shift, best_last = energy, shift, pushed
    if narrow and best > 0.0:
        slack = SLACK * chain[k, STALL] * step
        for i in range(first, last + 1):
            floor = marched[i]
            if floor - slack < best and floor <= marched[i - 1] and floor <= marched[i + 1]:
                middle = (i - N_STEPS) * step
                energy, shift, pushed = _narrow(
                    chain,
                    k,
                    x,
                    y,
                    yaw,
                    tip,
                    corners_mm,
                    disc_mm,
                    spans,
                    own,
                    n,
                    max(middle - step, low),
                    min(middle + step, high),
                    N_GOLDEN,
                )
                if energy < best:
                    best, best_shift, best_last = energy, shift, pushed
    return (best, best_shift, best_last) if best < budget else (np.inf, 0.0, 0.0)


@njit(cache=True)
def _narrow(
    chain: Array,
    k: int,
    x: float,
    y: float,
    yaw: float,
    tip: float,
    corners_mm: Array,
    disc_mm: float,
    spans: Array,
    own: Array,
    n: int,
    low: float,
    high: float,
    n_golden: int,
) -> tuple[float, float, float]:
    """Golden section on the shift of joint k within low … high; the best energy seen, and the shifts of k and k + 1."""
    best, best_shift, best_last = np.inf, 0.0, 0.0
    left, right = high - GOLDEN * (high - low), low + GOLDEN * (high - low)
    left_energy, left_last = _pair_at(chain, k, x, y, yaw, tip, corners_mm, disc_mm, spans, own, n, left)
    right_energy, right_last = _pair_at(chain, k, x, y, yaw, tip, corners_mm, disc_mm, spans, own, n, right)
    for _ in range(n_golden):
        if left_energy < best:
            best, best_shift, best_last = left_energy, left, left_last
        if right_energy < best:
            best, best_shift, best_last = right_energy, right, right_last
        if left_energy <= right_energy and not (left_energy == np.inf and abs(low) > abs(high)):
            high, right, right_energy, right_last = right, left, left_energy, left_last
            left = high - GOLDEN * (high - low)
            left_energy, left_last = _pair_at(chain, k, x, y, yaw, tip, corners_mm, disc_mm, spans, own, n, left)
        else:
            low, left, left_energy, left_last = left, right, right_energy, right_last
            right = low + GOLDEN * (high - low)
            right_energy, right_last = _pair_at(chain, k, x, y, yaw, tip, corners_mm, disc_mm, spans, own, n, right)
    return best, best_shift, best_last


@njit(cache=True)
def _three(
    chain: Array,
    x: float,
    y: float,
    yaw: float,
    tip: float,
    corners_mm: Array,
    disc_mm: float,
    spans: Array,
    upper_spans: Array,
    shifts: Array,
) -> float:
    """Least energy of a finger of three joints; fills their shifts."""
    own, inner = upper_spans[0], upper_spans[1]
    n = _blocked(chain, 0, x, y, yaw, 0.0, corners_mm, disc_mm, own)
    if n < 0:
        return np.inf
    step = march_step(chain, 0)
    marched, middles = np.full(2 * N_STEPS + 1, np.inf), np.zeros(2 * N_STEPS + 1)
    best = np.inf
    low, high = chain[0, LOW] - chain[0, COMMAND], chain[0, HIGH] - chain[0, COMMAND]
    slack = SLACK * chain[0, STALL] * step
    first, last = N_STEPS, N_STEPS
    for i in range(2 * N_STEPS - 2):
        steps = (i + 1) // 2 if i % 2 else -(i // 2)
        shift = min(max(steps * step, low), high)
        own_energy = spring(shift, chain[0, STIFFNESS], chain[0, STALL])
        if spring(steps * step, chain[0, STIFFNESS], chain[0, STALL]) >= best:
            break
        if abs(steps * step - shift) >= step:
            continue
        if not _free(chain, 0, yaw, shift, own, n):
            continue
        bx, by, turned = _after(chain, 0, x, y, yaw, shift)
        energy, middle, pushed = _pair(chain, 1, bx, by, turned, tip, corners_mm, disc_mm, spans, inner, best + slack - own_energy, False)
        energy += own_energy
        marched[N_STEPS + steps], middles[N_STEPS + steps] = energy, middle
        first, last = min(first, N_STEPS + steps), max(last, N_STEPS + steps)
        if energy < best:
            best = energy
            shifts[0], shifts[1], shifts[2] = shift, middle, pushed
    if 0.0 < best < np.inf:
        for i in range(first, last + 1):
            floor = marched[i]
            if floor - slack < best and floor <= marched[i - 1] and floor <= marched[i + 1]:
                at = (i - N_STEPS) * step
                best = _narrow_outer(
                    chain,
                    x,
                    y,
                    yaw,
                    tip,
                    corners_mm,
                    disc_mm,
                    spans,
                    own,
                    inner,
                    n,
                    max(at - step, low),
                    min(at + step, high),
                    middles[i],
                    best,
                    shifts,
                )
    return best


@njit(cache=True)
def _three_at(
    chain: Array,
    x: float,
    y: float,
    yaw: float,
    tip: float,
    corners_mm: Array,
    disc_mm: float,
    spans: Array,
    own: Array,
    inner: Array,
    n: int,
    shift: float,
    middle: float,
) -> tuple[float, float, float]:
    """Energy of a finger of three joints with the first shifted so, the second near `middle`; and the shifts of both."""
    if not _free(chain, 0, yaw, shift, own, n):
        return np.inf, middle, 0.0
    bx, by, turned = _after(chain, 0, x, y, yaw, shift)
    m = _blocked(chain, 1, bx, by, turned, 0.0, corners_mm, disc_mm, inner)
    if m < 0:
        return np.inf, middle, 0.0
    step = 1.5 * march_step(chain, 1)
    low, high = max(middle - step, chain[1, LOW] - chain[1, COMMAND]), min(middle + step, chain[1, HIGH] - chain[1, COMMAND])
    energy, second, pushed = _narrow(chain, 1, bx, by, turned, tip, corners_mm, disc_mm, spans, inner, m, low, high, N_GOLDEN_OUTER)
    at_target, pushed_there = _pair_at(chain, 1, bx, by, turned, tip, corners_mm, disc_mm, spans, inner, m, min(max(0.0, low), high))
    if at_target < energy:
        energy, second, pushed = at_target, min(max(0.0, low), high), pushed_there
    return energy + spring(shift, chain[0, STIFFNESS], chain[0, STALL]), second, pushed


@njit(cache=True)
def _narrow_outer(
    chain: Array,
    x: float,
    y: float,
    yaw: float,
    tip: float,
    corners_mm: Array,
    disc_mm: float,
    spans: Array,
    own: Array,
    inner: Array,
    n: int,
    low: float,
    high: float,
    middle: float,
    best: float,
    shifts: Array,
) -> float:
    """Golden section on the shift of the first of three joints; improves `best` and `shifts`."""
    left, right = high - GOLDEN * (high - low), low + GOLDEN * (high - low)
    left_energy, left_middle, left_last = _three_at(chain, x, y, yaw, tip, corners_mm, disc_mm, spans, own, inner, n, left, middle)
    right_energy, right_middle, right_last = _three_at(chain, x, y, yaw, tip, corners_mm, disc_mm, spans, own, inner, n, right, middle)
    for _ in range(N_GOLDEN_OUTER):
        if left_energy < best:
            best, shifts[0], shifts[1], shifts[2] = left_energy, left, left_middle, left_last
        if right_energy < best:
            best, shifts[0], shifts[1], shifts[2] = right_energy, right, right_middle, right_last
        if left_energy <= right_energy:
            high, right, right_energy, right_middle, right_last = right, left, left_energy, left_middle, left_last
            left = high - GOLDEN * (high - low)
            left_energy, left_middle, left_last = _three_at(
                chain, x, y, yaw, tip, corners_mm, disc_mm, spans, own, inner, n, left, right_middle
            )
        else:
            low, left, left_energy, left_middle, left_last = left, right, right_energy, right_middle, right_last
            right = low + GOLDEN * (high - low)
            right_energy, right_middle, right_last = _three_at(
                chain, x, y, yaw, tip, corners_mm, disc_mm, spans, own, inner, n, right, left_middle
            )
    return best
