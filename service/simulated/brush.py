"""The strokes a frame of the simulated camera is made of, as compiled kernels: textures, bars, walls and soft shadows.

All work on uint8 canvases (height, width, channels) and on maps (height, width, 2) that tell where on a plane each pixel looks. What
they draw carries noise from a bank of int8 values, read from a place that depends on the frame's `start` and on the row.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from hw_profiles.geometry import Array
from vision.frames import Pixels

BANK = 1 << 16  # values in the noise bank; a power of two


@njit(cache=True)
def draw_texture(
    canvas: Pixels,
    plane_mm: NDArray[np.float32],
    texture: Pixels,
    texel_from_part: Array,
    poses: Array,
    low: NDArray[np.int64],
    high: NDArray[np.int64],
    bank: NDArray[np.int8],
    start: int,
) -> None:
    """Blend a part-frame texture (its last channel is cover) over the canvas, averaged over the poses."""
    n_channels = canvas.shape[2]
    rows, columns = texture.shape[0], texture.shape[1]
    scale, column_0, row_0 = texel_from_part[0], texel_from_part[1], texel_from_part[2]
    turns = np.empty((poses.shape[0], 2))
    for k in range(poses.shape[0]):
        turns[k, 0], turns[k, 1] = math.cos(poses[k, 2]) * scale, math.sin(poses[k, 2]) * scale
    total = np.empty(4)
    for v in range(low[1], high[1]):
        place = _bank_place(start, v)
        for u in range(low[0], high[0]):
            x, y = float(plane_mm[v, u, 0]), float(plane_mm[v, u, 1])
            total[:] = 0.0
            for k in range(poses.shape[0]):
                dx, dy = x - poses[k, 0], y - poses[k, 1]
                column = turns[k, 0] * dx + turns[k, 1] * dy + column_0
                row = -turns[k, 1] * dx + turns[k, 0] * dy + row_0
                if column < 0.0 or row < 0.0 or column >= columns - 1 or row >= rows - 1:
                    continue
                i, j = int(row), int(column)
                fr, fc = row - i, column - j
                w00, w01, w10, w11 = (1.0 - fr) * (1.0 - fc), (1.0 - fr) * fc, fr * (1.0 - fc), fr * fc
                cover = (
                    w00 * texture[i, j, n_channels] + w01 * texture[i, j + 1, n_channels]
                    + w10 * texture[i + 1, j, n_channels] + w11 * texture[i + 1, j + 1, n_channels]
                )  # fmt: skip
                if cover <= 0.0:
                    continue
                total[3] += cover
                for c in range(n_channels):
                    total[c] += cover * (
                        w00 * texture[i, j, c] + w01 * texture[i, j + 1, c] + w10 * texture[i + 1, j, c] + w11 * texture[i + 1, j + 1, c]
                    )
            if total[3] <= 0.0:
                continue
            per = 1.0 / (255.0 * poses.shape[0])
            cover = total[3] * per
            for c in range(n_channels):
                value = canvas[v, u, c] * (1.0 - cover) + total[c] * per + cover * bank[(place + n_channels * u + c) & (BANK - 1)]
                canvas[v, u, c] = np.uint8(min(max(value + 0.5, 0.0), 255.0))


@njit(cache=True)
def _bank_place(start: int, v: int) -> int:
    """Where row v of a frame reads the noise bank."""
    return start + 9973 * v


@njit(cache=True)
def draw_shaded(
    canvas: Pixels, cover: Pixels, shade: Pixels, colour: Array, u_0: int, v_0: int, bank: NDArray[np.int8], start: int
) -> None:
    """Blend colour · shade over the canvas where cover (255: fully) says so; shade comes premultiplied by cover."""
    n_channels = canvas.shape[2]
    for i in range(cover.shape[0]):
        place = _bank_place(start, v_0 + i)
        for j in range(cover.shape[1]):
            if cover[i, j] == 0:
                continue
            u, v, weight = u_0 + j, v_0 + i, cover[i, j] / 255.0
            for c in range(n_channels):
                grain = weight * bank[(place + n_channels * u + c) & (BANK - 1)]
                value = canvas[v, u, c] * (1.0 - weight) + colour[c] * shade[i, j] + grain
                canvas[v, u, c] = np.uint8(min(max(value + 0.5, 0.0), 255.0))


@njit(cache=True)
def row_span(bar: Array, v: int, width: int) -> tuple[int, int]:
    """Columns (first, last plus one) of row v that the capsule bar = (ua, va, ub, vb, radius) covers.

    A capsule is convex, so the row's ends lie on its round ends or on the two straight lines between them.
    """
    ua, va, ub, vb, radius = bar[0], bar[1], bar[2], bar[3], bar[4]
    low, high = math.inf, -math.inf
    for k in range(2):
        u_end, dv = (ua, v - va) if k == 0 else (ub, v - vb)
        if abs(dv) <= radius:
            half = math.sqrt(radius * radius - dv * dv)
            low, high = min(low, u_end - half), max(high, u_end + half)
    length = math.hypot(ub - ua, vb - va)
    if abs(vb - va) > 1e-9:
        side_u, side_v = -(vb - va) / length * radius, (ub - ua) / length * radius
        for sign in (-1.0, 1.0):
            t = (v - va - sign * side_v) / (vb - va)
            if 0.0 <= t <= 1.0:
                u = ua + sign * side_u + t * (ub - ua)
                low, high = min(low, u), max(high, u)
    if low > high:
        return 0, 0
    return max(math.floor(low), 0), min(math.ceil(high) + 1, width)


@njit(cache=True)
def draw_capsules(
    canvas: Pixels,
    plane_mm: NDArray[np.float32],
    capsules: Array,
    bars: Array,
    light: Array,
    soft_mm: float,
    bank: NDArray[np.int8],
    start: int,
) -> None:
    """Round bars lit from one side, edges as soft as the lens makes them."""
    height, width, n_channels = canvas.shape
    colours = np.empty(3, np.int64)
    for k in range(capsules.shape[0]):
        ax, ay, radius = capsules[k, 0], capsules[k, 1], capsules[k, 4]
        ex, ey = capsules[k, 2] - ax, capsules[k, 3] - ay
        per_length_sq = 0.0 if ex == 0.0 and ey == 0.0 else 1.0 / (ex * ex + ey * ey)
        outer_sq, inner_sq = (radius + 0.5 * soft_mm) ** 2, max(radius - 0.5 * soft_mm, 0.0) ** 2
        per_radius_sq, per_soft = 1.0 / (radius * radius), 1.0 / soft_mm
        flank_x, flank_y = 0.43 * light[0] / radius, 0.43 * light[1] / radius
        for c in range(3):
            colours[c] = int(capsules[k, 5 + c])
        first = max(int(min(bars[k, 1], bars[k, 3]) - bars[k, 4]), 0)
        last = min(int(max(bars[k, 1], bars[k, 3]) + bars[k, 4]) + 2, height)
        for v in range(first, last):
            place = _bank_place(start, v)
            u_low, u_high = row_span(bars[k], v, width)
            for u in range(u_low, u_high):
                dx, dy = plane_mm[v, u, 0] - ax, plane_mm[v, u, 1] - ay
                t = min(max((dx * ex + dy * ey) * per_length_sq, 0.0), 1.0)
                dx, dy = dx - t * ex, dy - t * ey
                distance_sq = dx * dx + dy * dy
                if distance_sq > outer_sq:
                    continue
                rise = max(1.0 - distance_sq * per_radius_sq, 0.0)  # squared height of the round bar, of its radius
                shade = int(256.0 * (0.55 + dx * flank_x + dy * flank_y + 0.62 * light[2] * rise * (1.6 - 0.6 * rise)))
                weight = 256
                if distance_sq > inner_sq:
                    cover = 0.5 + (radius - math.sqrt(distance_sq)) * per_soft
                    weight = int(256.0 * cover * cover * (3.0 - 2.0 * cover))
                for c in range(n_channels):
                    colour = ((colours[c] * shade) >> 8) + bank[(place + n_channels * u + c) & (BANK - 1)]
                    value = (canvas[v, u, c] * (256 - weight) + colour * weight + 128) >> 8
                    canvas[v, u, c] = np.uint8(min(max(value, 0), 255))


@njit(cache=True)
def shade(canvas: Pixels, plane_mm: NDArray[np.float32], capsules: Array, bars: Array, soft_mm: float, depth: float) -> None:
    """Darken the canvas under capsules, with soft edges, in squares of 2 × 2 pixels; overlapping shadows multiply."""
    height, width, n_channels = canvas.shape
    for k in range(capsules.shape[0]):
        ax, ay, radius = capsules[k, 0], capsules[k, 1], capsules[k, 4]
        ex, ey = capsules[k, 2] - ax, capsules[k, 3] - ay
        per_length_sq = 0.0 if ex == 0.0 and ey == 0.0 else 1.0 / (ex * ex + ey * ey)
        outer_sq = (radius + soft_mm) ** 2
        per_outer_sq = 1.0 / outer_sq
        first = max(int(min(bars[k, 1], bars[k, 3]) - bars[k, 4]), 0)
        last = min(int(max(bars[k, 1], bars[k, 3]) + bars[k, 4]) + 2, height)
        for v in range(first, last - 1, 2):
            u_low, u_high = row_span(bars[k], v, width)
            for u in range(u_low, u_high - 1, 2):
                dx, dy = plane_mm[v, u, 0] - ax, plane_mm[v, u, 1] - ay
                t = min(max((dx * ex + dy * ey) * per_length_sq, 0.0), 1.0)
                dx, dy = dx - t * ex, dy - t * ey
                distance_sq = dx * dx + dy * dy
                if distance_sq >= outer_sq:
                    continue
                inside = 1.0 - distance_sq * per_outer_sq
                keep = int(256.0 * (1.0 - depth * inside * inside))
                for i in range(2):
                    for j in range(2):
                        for c in range(n_channels):
                            canvas[v + i, u + j, c] = (canvas[v + i, u + j, c] * keep + 128) >> 8
