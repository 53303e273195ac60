"""What speaks for and against a fitted tag: its cells, its light, its sharpness, and whether it lies flat.

A fit of edges can settle on other edges. These numbers, taken at the fitted pose, tell a tag from anything else, and a sharp, flat
tag from one whose pose should not be believed.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from hw_profiles.geometry import Array
from vision.camera_model import CameraModel, project_with_slope
from vision.edge_fit import EDGE_SD_PX, MAX_TAPS, TAP_PX, EdgeFit, EdgeTemplate, bilinear, edge_in_image, median_where, read_edge
from vision.frames import Pixels

CELL_THRESHOLD = 0.2  # of the contrast, that a cell must stand off the middle grey
SATURATED = 250


@dataclass(frozen=True, slots=True)
class Quality:
    """How well a tag was seen.

    Attributes
    ----------
    agreeing_x, agreeing_y : share of the edges across the tag's x and y axis that agree with the pose.
    cells_right : share of the 64 cells with the brightness they should have.
    cells_aside : the same share at the best of the eight poses one cell aside: what chance gives.
    contrast : grey levels between white and black.
    blur_px, blur_cells : standard deviation of the edge spread, lens and motion together, in pixels and in cells.
    saturated : share of white cells at the sensor's upper end.
    tilt_rad, tilt_sd_rad : angle between the tag and the plate, and its standard deviation (how well this view can tell).
    height_off_mm, height_sd_mm : how much higher than its profile says the tag seems, by its size, and the standard deviation.
    """

    agreeing_x: float
    agreeing_y: float
    cells_right: float
    cells_aside: float
    contrast: float
    blur_px: float
    blur_cells: float
    saturated: float
    tilt_rad: float
    tilt_sd_rad: float
    height_off_mm: float
    height_sd_mm: float


def judge(model: CameraModel, grey: Pixels, corner_px: tuple[int, int], template: EdgeTemplate, z_mm: float, found: EdgeFit) -> Quality:
    """Look at the tag once more at the pose that was found; parameters as for `edge_fit.fit`."""
    pose = found.pose.as_array()
    place = (grey, corner_px[0], corner_px[1], model.lens, model.motion, z_mm)
    x, y, contrast, level = _edge_shares(grey, corner_px[0], corner_px[1], found.samples, template.is_column)
    spread = _rim_spread(*place, template.points, template.normals, template.is_rim, template.cell_mm, pose, found.samples)
    right, aside, saturated = _cell_shares(
        *place, template.centres, template.white, template.cell_mm, pose, level, CELL_THRESHOLD * contrast
    )
    stance = _stance(model.lens, model.motion, z_mm, template.points, template.normals, pose, found.samples, found.residual_px)
    blur_px = math.sqrt(max(spread, 0.0))
    blur_cells = blur_px / (template.cell_mm * model.px_per_mm(found.pose.xy_mm, z_mm))
    return Quality(x, y, right, aside, contrast, blur_px, blur_cells, saturated, *stance)


@njit(cache=True)
def _edge_shares(grey: Pixels, u_0: int, v_0: int, samples: Array, is_column: NDArray[np.bool_]) -> tuple[float, float, float, Array]:
    """Agreeing shares across x and y, median contrast, and the level plane (c, du, dv, u, v) of the edges' middles.

    The level follows a light that falls off across the tag: least squares of a plane, its slope held back a little.
    """
    counts, agreeing = np.zeros(2), np.zeros(2)
    matrix, vector, origin = np.zeros((3, 3)), np.zeros(3), np.zeros(2)
    n = samples.shape[0]
    for i in range(n):
        counts[int(is_column[i])] += 1.0
        if samples[i, 5] > 0.0:
            agreeing[int(is_column[i])] += 1.0
            origin += samples[i, :2]
    origin /= agreeing.sum()
    row = np.ones(3)
    for i in range(n):
        if samples[i, 5] > 0.0:
            row[1], row[2] = samples[i, 0] - origin[0], samples[i, 1] - origin[1]
            value = bilinear(grey, samples[i, 0] - u_0, samples[i, 1] - v_0)
            for a in range(3):
                vector[a] += row[a] * value
                for b in range(3):
                    matrix[a, b] += row[a] * row[b]
    matrix[1, 1] += 50.0
    matrix[2, 2] += 50.0
    plane = np.linalg.solve(matrix, vector)
    level = np.array([plane[0], plane[1], plane[2], origin[0], origin[1]])
    contrast = median_where(samples[:, 3], samples[:, 5])
    return agreeing[1] / counts[1], agreeing[0] / counts[0], contrast, level


@njit(cache=True)
def _rim_spread(
    grey: Pixels,
    u_0: int,
    v_0: int,
    lens: Array,
    motion: Array,
    z_mm: float,
    points: Array,
    normals: Array,
    is_rim: NDArray[np.bool_],
    cell_mm: float,
    pose: Array,
    samples: Array,
) -> float:
    """Median variance [px²] of the edge spread along the rim, read a whole cell to either side."""
    cos, sin = math.cos(pose[2]), math.sin(pose[2])
    taps, spreads, seen = np.empty(MAX_TAPS), np.zeros(points.shape[0]), np.zeros(points.shape[0])
    for i in range(points.shape[0]):
        if not is_rim[i] or samples[i, 5] == 0.0:
            continue
        x, y = pose[0] + cos * points[i, 0] - sin * points[i, 1], pose[1] + sin * points[i, 0] + cos * points[i, 1]
        nx, ny = cos * normals[i, 0] - sin * normals[i, 1], sin * normals[i, 0] + cos * normals[i, 1]
        u, v, nu, nv, a, b = edge_in_image(lens, motion, x, y, z_mm, nx, ny)
        n_side = min(int(cell_mm * math.hypot(a, b) / TAP_PX), (MAX_TAPS - 1) // 2)
        _, contrast, spreads[i], _ = read_edge(grey, u - u_0, v - v_0, nu, nv, n_side, taps)
        seen[i] = contrast
    return median_where(spreads, seen)


@njit(cache=True)
def _cell_shares(
    grey: Pixels,
    u_0: int,
    v_0: int,
    lens: Array,
    motion: Array,
    z_mm: float,
    centres: Array,
    white: NDArray[np.bool_],
    cell_mm: float,
    pose: Array,
    level: Array,
    threshold: float,
) -> tuple[float, float, float]:
    """Shares of cells of the right brightness here and at the best place one cell aside, and of white cells that are saturated."""
    cos, sin = math.cos(pose[2]), math.sin(pose[2])
    n, n_white = centres.shape[0], 0
    right, aside, saturated = 0.0, 0.0, 0
    for i in range(-1, 2):
        for j in range(-1, 2):
            share = 0.0
            for k in range(n):
                x, y = centres[k, 0] + i * cell_mm, centres[k, 1] + j * cell_mm
                u, v, _, _, _, _ = project_with_slope(lens, motion, pose[0] + cos * x - sin * y, pose[1] + sin * x + cos * y, z_mm)
                value = bilinear(grey, u - u_0, v - v_0)
                beyond = value - level[0] - level[1] * (u - level[3]) - level[2] * (v - level[4])
                if value >= 0.0 and ((white[k] and beyond > threshold) or (not white[k] and beyond < -threshold)):
                    share += 1.0 / n
                if i == 0 and j == 0 and white[k]:
                    n_white += 1
                    if value >= SATURATED:
                        saturated += 1
            if i == 0 and j == 0:
                right = share
            else:
                aside = max(aside, share)
    return right, aside, saturated / max(n_white, 1)


@njit(cache=True)
def _stance(
    lens: Array, motion: Array, z_mm: float, points: Array, normals: Array, pose: Array, samples: Array, residual_px: float
) -> tuple[float, float, float, float]:
    """Tilt of the tag's plane against the plate [rad], height above where it should be [mm], each before its standard deviation.

    One Gauss–Newton step from the flat pose: x, y, yaw, height, the slopes of the height along x and y, and the bleed of edges. The
    slopes show through the camera's own obliqueness (to first order) and through perspective.
    """
    cos, sin = math.cos(pose[2]), math.sin(pose[2])
    matrix, vector, row = np.zeros((7, 7)), np.zeros(7), np.ones(7)
    for i in range(points.shape[0]):
        if samples[i, 5] == 0.0:
            continue
        dx, dy = cos * points[i, 0] - sin * points[i, 1], sin * points[i, 0] + cos * points[i, 1]
        nx, ny = cos * normals[i, 0] - sin * normals[i, 1], sin * normals[i, 0] + cos * normals[i, 1]
        u, v, nu, nv, row[0], row[1] = edge_in_image(lens, motion, pose[0] + dx, pose[1] + dy, z_mm, nx, ny)
        u_up, v_up, _, _, _, _ = project_with_slope(lens, motion, pose[0] + dx, pose[1] + dy, z_mm + 0.01)
        row[2] = -row[0] * dy + row[1] * dx
        row[3] = (nu * (u_up - u) + nv * (v_up - v)) / 0.01
        row[4], row[5] = row[3] * dx, row[3] * dy
        for a in range(7):
            vector[a] += row[a] * samples[i, 2]
            for b in range(7):
                matrix[a, b] += row[a] * row[b]
    for a in range(7):
        matrix[a, a] *= 1.0 + 1e-9
    inverse = np.linalg.inv(matrix)
    solved = inverse @ vector
    slope = math.hypot(solved[4], solved[5])
    edge_sd = max(residual_px, EDGE_SD_PX)
    tilt_sd = math.sqrt(max(inverse[4, 4], inverse[5, 5])) * edge_sd
    return math.atan(slope), tilt_sd, solved[3], math.sqrt(inverse[3, 3]) * edge_sd
