"""Planar pose of a tag from all of its cell edges: Gauss–Newton on three parameters, through the lens, at the tag's height.

Every boundary between a black and a white cell (the white margin included) is sampled. At each sample the image is read along the
edge's normal and the edge placed at the centroid of the brightness slope there; at the solution the reading window is centred on
the edge, so its truncation leaves no bias. The pose minimises the robustly weighted squares of the edges' offsets (Tukey's
biweight; Gauss–Newton after Lowe, "Fitting Parameterized Three-Dimensional Models to Images", PAMI 1991).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from hw_profiles.geometry import Array, Pose2
from hw_profiles.part import Fiducial
from vision import pattern
from vision.camera_model import CameraModel, project_with_slope
from vision.frames import Pixels

SAMPLES_PER_CELL_EDGE = 2
TAP_PX = 0.5
MAX_TAPS = 33
INLIER_PX = 0.45  # an edge this close to where the pose puts it agrees with the pose
MIN_CONTRAST = 12.0  # grey levels across an edge, below which it is noise
EDGE_SD_PX = 0.02  # floor of the edge noise: interpolation, printing


@dataclass(frozen=True, eq=False)
class EdgeTemplate:
    """The cell edges of one part's tag in the part frame.

    Attributes
    ----------
    points, normals : (n, 2) [mm] and unit vectors from black to white; read-only.
    is_column : (n,) whether the edge runs along the tag's y axis, so that it places the tag along x; read-only.
    centres, white : (64, 2) [mm] and (64,) the cells; read-only.
    cell_mm : side of a cell.
    """

    points: Array
    normals: Array
    is_column: NDArray[np.bool_]
    centres: Array
    white: NDArray[np.bool_]
    cell_mm: float

    @classmethod
    def of(cls, tag: Fiducial) -> EdgeTemplate:
        """Template of a fiducial: every boundary between unequal cells, SAMPLES_PER_CELL_EDGE points on each."""
        bright = np.pad(pattern.cells(tag.id), 1, constant_values=True)
        half, pitch = pattern.N_CELLS / 2, tag.size_mm / pattern.N_CELLS
        points, normals, columns = [], [], []
        along = (np.arange(SAMPLES_PER_CELL_EDGE) + 0.5) / SAMPLES_PER_CELL_EDGE
        for row, column in np.ndindex(bright.shape):  # cell (row, column) spans x column - 1 … column, y half-plane down from the top
            x, y = column - 1 - half, half + 1 - row
            if column + 1 < bright.shape[1] and bright[row, column] != bright[row, column + 1]:
                points += [(x + 1, y - t) for t in along]
                normals += [(1.0 if bright[row, column + 1] else -1.0, 0.0)] * len(along)
                columns += [True] * len(along)
            if row + 1 < bright.shape[0] and bright[row, column] != bright[row + 1, column]:
                points += [(x + t, y - 1) for t in along]
                normals += [(0.0, -1.0 if bright[row + 1, column] else 1.0)] * len(along)
                columns += [False] * len(along)
        placed = tag.part_from_tag
        arrays = (
            placed.apply(np.array(points) * pitch),
            placed.rotate(np.array(normals)),
            np.array(columns),
            np.ascontiguousarray(pattern.cell_centres_mm(tag).reshape(-1, 2)),
            np.ascontiguousarray(pattern.cells(tag.id).reshape(-1)),
        )
        for array in arrays:
            array.setflags(write=False)
        return cls(*arrays, pitch)


@dataclass(frozen=True, slots=True, eq=False)
class EdgeFit:
    """What the edges say.

    Attributes
    ----------
    pose : hand_from_part.
    covariance : (3, 3) mm², mm·rad, rad²; from the residuals of the edges that agree.
    agreeing_x, agreeing_y : share of the edges across the tag's x and y axis that agree with the pose.
    cells_right : share of the 64 cells seen with the brightness they should have.
    cells_shifted : the same share at the best of the eight poses one cell aside.
    contrast : grey levels between white and black at the tag's edges.
    blur_px : standard deviation of the edge spread.
    residual_px : root mean square offset of the edges that agree.
    """

    pose: Pose2
    covariance: Array
    agreeing_x: float
    agreeing_y: float
    cells_right: float
    cells_shifted: float
    contrast: float
    blur_px: float
    residual_px: float
    samples: Array  # (n, 6) u, v, offset [px], contrast, spread [px], agrees: for the tilt check and for drawing


def fit(model: CameraModel, grey: Pixels, corner_px: tuple[int, int], template: EdgeTemplate, z_mm: float, start: Pose2) -> EdgeFit | None:
    """The pose near `start` that the edges agree on; None when too few are seen to place the tag at all.

    Parameters
    ----------
    grey : (rows, columns) cut out of the image; corner_px is the (u, v) of its first pixel.
    z_mm : height of the tag in the hand frame.
    start : within about 0.4 cells and 10° of the truth.
    """
    scale = model.px_per_mm(start.apply(template.centres.mean(axis=0)), z_mm)
    cell_px = template.cell_mm * scale
    samples = np.empty((len(template.points), 6))
    pose, normal_matrix, residual, n_agreeing = _gauss_newton(
        grey,
        corner_px[0],
        corner_px[1],
        model.lens,
        model.motion,
        z_mm,
        template.points,
        template.normals,
        cell_px,
        start.as_array(),
        samples,
    )
    if n_agreeing < 12 or not np.isfinite(pose).all() or np.linalg.cond(normal_matrix) > 1e9:
        return None
    agrees = samples[:, 5] > 0.0
    good = samples[agrees]
    fitted = Pose2.from_array(pose)
    right, shifted, contrast = _judge_cells(model, grey, corner_px, template, z_mm, fitted, good)
    sd = max(residual, EDGE_SD_PX)
    spread = float(np.sqrt(max(np.median(good[:, 4]), 0.0)))
    return EdgeFit(
        fitted,
        np.linalg.inv(normal_matrix) * sd * sd,
        float(agrees[template.is_column].mean()),
        float(agrees[~template.is_column].mean()),
        right,
        shifted,
        contrast,
        spread,
        residual,
        samples,
    )


def _judge_cells(
    model: CameraModel, grey: Pixels, corner_px: tuple[int, int], template: EdgeTemplate, z_mm: float, pose: Pose2, good: Array
) -> tuple[float, float, float]:
    """Shares of cells with the right brightness here and one cell aside, against a level plane through the good edges' middles."""
    contrast = float(np.median(good[:, 3]))
    middle = _bilinear_all(grey, good[:, 0] - corner_px[0], good[:, 1] - corner_px[1])
    origin = good[:, :2].mean(axis=0)
    design = np.concatenate([np.ones((len(good), 1)), good[:, :2] - origin], axis=1)
    level = np.linalg.solve(design.T @ design + np.diag([1e-6, 50.0, 50.0]), design.T @ middle)
    threshold = 0.2 * contrast
    steps = [(0.0, 0.0)] + [(i, j) for i in (-1.0, 0.0, 1.0) for j in (-1.0, 0.0, 1.0) if (i, j) != (0.0, 0.0)]
    turn = template.cell_mm * np.array(steps)
    shares = _cell_shares(
        grey,
        corner_px[0],
        corner_px[1],
        model.lens,
        model.motion,
        z_mm,
        template.centres,
        template.white,
        turn,
        pose.as_array(),
        level,
        origin,
        threshold,
    )
    return float(shares[0]), float(shares[1:].max()), contrast


@njit(cache=True)
def bilinear(grey: Pixels, u: float, v: float) -> float:
    """Brightness between pixels; -1 outside."""
    j, i = math.floor(u), math.floor(v)
    if j < 0 or i < 0 or j >= grey.shape[1] - 1 or i >= grey.shape[0] - 1:
        return -1.0
    a, b = u - j, v - i
    top = grey[i, j] * (1.0 - a) + grey[i, j + 1] * a
    return float(top * (1.0 - b) + (grey[i + 1, j] * (1.0 - a) + grey[i + 1, j + 1] * a) * b)


@njit(cache=True)
def _bilinear_all(grey: Pixels, u: Array, v: Array) -> Array:
    values = np.empty(u.shape[0])
    for i in range(u.shape[0]):
        values[i] = bilinear(grey, u[i], v[i])
    return values


@njit(cache=True)
def _read_edge(grey: Pixels, u: float, v: float, nu: float, nv: float, n_side: int, taps: Array) -> tuple[float, float, float]:
    """Offset along the normal [px], contrast and variance of the edge through (u, v); contrast 0 where there is none."""
    n = 2 * n_side + 1
    for k in range(n):
        s = (k - n_side) * TAP_PX
        taps[k] = bilinear(grey, u + s * nu, v + s * nv)
        if taps[k] < 0.0:
            return 0.0, 0.0, 0.0
    rise, first, second = 0.0, 0.0, 0.0
    for k in range(n - 1):
        slope = taps[k + 1] - taps[k]
        if slope > 0.0:
            s = (k + 0.5 - n_side) * TAP_PX
            rise += slope
            first += slope * s
            second += slope * s * s
    contrast = taps[n - 1] - taps[0]
    if contrast < MIN_CONTRAST or contrast < 0.5 * rise:
        return 0.0, 0.0, 0.0
    offset = first / rise
    return offset, contrast, second / rise - offset * offset


@njit(cache=True)
def _gauss_newton(
    grey: Pixels,
    u_0: int,
    v_0: int,
    lens: Array,
    motion: Array,
    z_mm: float,
    points: Array,
    normals: Array,
    cell_px: float,
    start: Array,
    samples: Array,
) -> tuple[Array, Array, float, int]:
    """Pose (3,), normal matrix (3, 3), RMS of agreeing edges [px] and their number; fills samples (n, 6)."""
    n = points.shape[0]
    pose = start.copy()
    taps, matrix, vector = np.empty(MAX_TAPS), np.empty((3, 3)), np.empty(3)
    rows = np.empty((n, 3))
    widest, narrowest = min(max(0.48 * cell_px, 1.0), 7.0), min(max(0.36 * cell_px, 1.0), 3.0)
    residual, n_agreeing = 0.0, 0
    n_rounds = 9
    for turn in range(n_rounds):
        reach = max(widest * 0.75**turn, narrowest)
        n_side = min(int(reach / TAP_PX + 0.5), (MAX_TAPS - 1) // 2)
        keep_px = max(reach * 0.75**turn, INLIER_PX)
        cos, sin = math.cos(pose[2]), math.sin(pose[2])
        matrix[:] = 0.0
        vector[:] = 0.0
        for i in range(n):
            dx, dy = cos * points[i, 0] - sin * points[i, 1], sin * points[i, 0] + cos * points[i, 1]
            nx, ny = cos * normals[i, 0] - sin * normals[i, 1], sin * normals[i, 0] + cos * normals[i, 1]
            u, v, ux, uy, vx, vy = project_with_slope(lens, motion, pose[0] + dx, pose[1] + dy, z_mm)
            tu, tv = -ux * ny + uy * nx, -vx * ny + vy * nx  # the edge's direction in the image
            size = math.sqrt(tu * tu + tv * tv)
            nu, nv = tv / size, -tu / size
            if nu * (ux * nx + uy * ny) + nv * (vx * nx + vy * ny) < 0.0:
                nu, nv = -nu, -nv
            offset, contrast, spread = _read_edge(grey, u - u_0, v - v_0, nu, nv, n_side, taps)
            samples[i, 0], samples[i, 1], samples[i, 2], samples[i, 3], samples[i, 4] = u, v, offset, contrast, spread
            rows[i, 0], rows[i, 1] = nu * ux + nv * vx, nu * uy + nv * vy
            rows[i, 2] = -rows[i, 0] * dy + rows[i, 1] * dx
            samples[i, 5] = 1.0 if contrast > 0.0 else 0.0
        usual = _median_where(samples[:, 3], samples[:, 5])
        residual, n_agreeing = 0.0, 0
        for i in range(n):
            offset = samples[i, 2]
            if samples[i, 3] < 0.4 * usual or abs(offset) >= keep_px:
                samples[i, 5] = 0.0
            if samples[i, 5] == 0.0:
                continue
            weight = (1.0 - (offset / keep_px) ** 2) ** 2  # Tukey's biweight
            for a in range(3):
                vector[a] += weight * rows[i, a] * offset
                for b in range(3):
                    matrix[a, b] += weight * rows[i, a] * rows[i, b]
            if abs(offset) < INLIER_PX:
                residual += offset * offset
                n_agreeing += 1
            else:
                samples[i, 5] = 0.0
        if (n_agreeing < 8 and turn > 3) or abs(np.linalg.det(matrix)) < 1e-9:
            return pose, matrix, 0.0, 0
        if turn == n_rounds - 1:
            break
        step = np.linalg.solve(matrix, vector)
        pose += step
        if turn >= 4 and abs(step[0]) + abs(step[1]) < 2e-5 and abs(step[2]) < 4e-6 and keep_px == INLIER_PX and reach == narrowest:
            break
    return pose, matrix, math.sqrt(residual / max(n_agreeing, 1)), n_agreeing


@njit(cache=True)
def _median_where(values: Array, keep: Array) -> float:
    kept = values[keep > 0.0]
    return float(np.median(kept)) if kept.shape[0] > 0 else 0.0


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
    shifts: Array,
    pose: Array,
    level: Array,
    origin: Array,
    threshold: float,
) -> Array:
    """Share of cells of the right brightness with the tag moved by each shift (n, 2) [mm, hand axes turned with the part]."""
    shares = np.empty(shifts.shape[0])
    cos, sin = math.cos(pose[2]), math.sin(pose[2])
    for k in range(shifts.shape[0]):
        right = 0
        for i in range(centres.shape[0]):
            x, y = centres[i, 0] + shifts[k, 0], centres[i, 1] + shifts[k, 1]
            u, v, _, _, _, _ = project_with_slope(lens, motion, pose[0] + cos * x - sin * y, pose[1] + sin * x + cos * y, z_mm)
            value = bilinear(grey, u - u_0, v - v_0)
            beyond = value - level[0] - level[1] * (u - origin[0]) - level[2] * (v - origin[1])
            if value >= 0.0 and (beyond > threshold if white[i] else beyond < -threshold):
                right += 1
        shares[k] = right / centres.shape[0]
    return shares
