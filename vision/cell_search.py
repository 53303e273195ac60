"""Finding a tag again near where it was expected, by the pattern of its cells."""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from hw_profiles.geometry import Array, Pose2
from vision.camera_model import CameraModel, project_with_slope
from vision.edge_fit import EdgeTemplate
from vision.frames import Pixels


def search(
    model: CameraModel,
    grey: Pixels,
    corner_px: tuple[int, int],
    template: EdgeTemplate,
    z_mm: float,
    around: Pose2,
    reach_mm: float,
    reach_rad: float,
) -> Pose2:
    """The pose near `around` at which the cells correlate best with the image: a start for a fit when the prediction was poor.

    Normalised correlation of the cells' middles over a grid a third of a cell and 6° wide, then of four points in each cell, which
    tell quarters of a cell apart, over a grid a sixth of a cell and 3° wide.
    """
    place = (grey, corner_px[0], corner_px[1], model.lens, model.motion, z_mm)
    cell = template.cell_mm
    n_steps, n_turns = max(int(3.0 * reach_mm / cell), 1), int(reach_rad / math.radians(6.0))
    best = _best_correlation(
        *place, template.centres, template.white, around.as_array(), cell / 3.0, n_steps, math.radians(6.0), n_turns
    )  # fmt: skip
    best = _best_correlation(*place, template.quarters, np.repeat(template.white, 4), best, cell / 6.0, 2, math.radians(3.0), 1)
    return Pose2.from_array(best)


@njit(cache=True)
def _best_correlation(
    grey: Pixels,
    u_0: int,
    v_0: int,
    lens: Array,
    motion: Array,
    z_mm: float,
    centres: Array,
    white: NDArray[np.bool_],
    around: Array,
    step_mm: float,
    n_steps: int,
    step_rad: float,
    n_turns: int,
) -> Array:
    best, best_score = around.copy(), -2.0
    n = centres.shape[0]
    share = white.sum() / n
    # To first order about the middle of the tag the image is an affine picture of the plane: a search needs no more.
    cos, sin = math.cos(around[2]), math.sin(around[2])
    mid_x, mid_y = centres[:, 0].mean(), centres[:, 1].mean()
    about_x, about_y = around[0] + cos * mid_x - sin * mid_y, around[1] + sin * mid_x + cos * mid_y
    u_mid, v_mid, ux, uy, vx, vy = project_with_slope(lens, motion, about_x, about_y, z_mm)
    du, dv = np.empty(n), np.empty(n)
    for turn in range(-n_turns, n_turns + 1):
        yaw = around[2] + turn * step_rad
        cos, sin = math.cos(yaw), math.sin(yaw)
        for k in range(n):
            x = around[0] + cos * centres[k, 0] - sin * centres[k, 1] - about_x
            y = around[1] + sin * centres[k, 0] + cos * centres[k, 1] - about_y
            du[k], dv[k] = u_mid - u_0 + ux * x + uy * y, v_mid - v_0 + vx * x + vy * y
        for i in range(-n_steps, n_steps + 1):
            for j in range(-n_steps, n_steps + 1):
                u_off, v_off = step_mm * (ux * i + uy * j), step_mm * (vx * i + vy * j)
                total, squares, product = 0.0, 0.0, 0.0
                for k in range(n):
                    column, row = int(du[k] + u_off + 0.5), int(dv[k] + v_off + 0.5)
                    value = 0.0
                    if 0 <= row < grey.shape[0] and 0 <= column < grey.shape[1]:
                        value = float(grey[row, column])
                    total += value
                    squares += value * value
                    product += value * ((1.0 if white[k] else 0.0) - share)
                score = product / math.sqrt(max(squares - total * total / n, 1.0))
                if score > best_score:
                    best_score = score
                    best[0], best[1], best[2] = around[0] + i * step_mm, around[1] + j * step_mm, yaw
    return best
