"""Planar pose of a tag from all of its cell edges: Gauss–Newton on three parameters, through the lens, at the tag's height.

Every boundary between a black and a white cell (the white margin included) is sampled. At each sample the image is read along the
edge's normal and the edge placed at the centroid of the brightness slope there; at the solution the reading window is centred on
the edge, so its truncation leaves no bias. The pose minimises the robustly weighted squares of the edges' offsets (Tukey's
biweight; Gauss–Newton after Lowe, "Fitting Parameterized Three-Dimensional Models to Images", PAMI 1991). A fourth unknown moves
all edges alike from white to black: over-exposure and spreading ink do that.
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
N_ROUNDS = 24
SETTLED_MM, SETTLED_RAD = 3e-4, 3e-5  # a smaller step ends the fit
NEAR_MM = 0.02
LOOSE_MM = 3e-3  # a larger step after the last round means there is no pose to be had
LEAST_GAIN = 0.2
UNSETTLED = -1
INLIER_PX = 0.45  # an edge this close to where the pose puts it agrees with the pose
MIN_AGREEING = 14
MIN_CONTRAST = 12.0  # grey levels across an edge, below which it is noise
EDGE_SD_PX = 0.02  # floor of the edge noise: interpolation, printing


@dataclass(frozen=True, eq=False)
class EdgeTemplate:
    """The cell edges of one part's tag in the part frame.

    Attributes
    ----------
    points, normals : (n, 2) [mm] and unit vectors from black to white; read-only.
    is_column : (n,) whether the edge runs along the tag's y axis, so that it places the tag along x; read-only.
    is_rim : (n,) whether it is the outer edge of the tag's border, which has a free cell on either side; read-only.
    centres, white : (64, 2) [mm] and (64,) the cells; read-only.
    quarters : (256, 2) [mm] four points in each cell, cell by cell, 0.3 cells off its middle either way; read-only.
    cell_mm : side of a cell.
    """

    points: Array
    normals: Array
    is_column: NDArray[np.bool_]
    is_rim: NDArray[np.bool_]
    centres: Array
    white: NDArray[np.bool_]
    quarters: Array
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
        centres = pattern.cell_centres_mm(tag).reshape(-1, 2)
        corners = placed.rotate(0.3 * pitch * np.array([[-1, -1], [-1, 1], [1, -1], [1, 1]]))
        arrays = (
            placed.apply(np.array(points) * pitch),
            placed.rotate(np.array(normals)),
            np.array(columns),
            np.abs(np.array(points)).max(axis=1) >= half - 1e-9,
            np.ascontiguousarray(centres),
            np.ascontiguousarray(pattern.cells(tag.id).reshape(-1)),
            np.ascontiguousarray((centres[:, None] + corners).reshape(-1, 2)),
        )
        for array in arrays:
            array.setflags(write=False)
        return cls(*arrays, pitch)


@dataclass(frozen=True, slots=True, eq=False)
class EdgeFit:
    """Where the edges put the part.

    Attributes
    ----------
    pose : hand_from_part.
    covariance : (3, 3) mm², mm·rad, rad²; from the residuals of the edges that agree.
    residual_px : root mean square offset of the edges that agree.
    samples : (n, 6) u, v, offset along the normal [px], contrast [grey levels], variance of the spread [px²], agrees (1 or 0).
    """

    pose: Pose2
    covariance: Array
    residual_px: float
    samples: Array


@dataclass(frozen=True, slots=True)
class NoFit:
    """Why the edges place the tag nowhere; continues a sentence that begins with the tag."""

    reason: str


def fit(model: CameraModel, grey: Pixels, corner_px: tuple[int, int], template: EdgeTemplate, z_mm: float, start: Pose2) -> EdgeFit | NoFit:
    """The pose near `start` that the edges agree on, or why there is none.

    Parameters
    ----------
    grey : (rows, columns) cut out of the image; corner_px is the (u, v) of its first pixel.
    z_mm : height of the tag in the hand frame.
    start : within about 0.4 cells and 10° of the truth.
    """
    samples = np.empty((len(template.points), 6))
    pose, covariance, residual, n_agreeing = _gauss_newton(
        grey, corner_px[0], corner_px[1], model.lens, model.motion, z_mm, template.points, template.normals, template.cell_mm,
        start.as_array(), samples,
    )  # fmt: skip
    if n_agreeing == UNSETTLED:
        return NoFit("has edges that agree on no one pose: is the part tipping, or the tag bent, blurred or covered?")
    if n_agreeing < MIN_AGREEING:
        return NoFit("shows no edges where it was expected: is it covered, out of the image or too dark?")
    return EdgeFit(Pose2.from_array(pose), covariance, float(residual), samples)


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
def read_edge(grey: Pixels, u: float, v: float, nu: float, nv: float, n_side: int, taps: Array) -> tuple[float, float, float, float]:
    """Offset along the normal [px], contrast and variance of the edge through (u, v), and how much of a shift the offset shows.

    Contrast 0: there is no edge. The centroid of a slope g cut off at ± w moves by 1 − w (g(−w) + g(w)) / ∫g of a shift.
    """
    n = 2 * n_side + 1
    for k in range(n):
        s = (k - n_side) * TAP_PX
        taps[k] = bilinear(grey, u + s * nu, v + s * nv)
        if taps[k] < 0.0:
            return 0.0, 0.0, 0.0, 0.0
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
        return 0.0, 0.0, 0.0, 0.0
    offset = first / rise
    at_ends = max(taps[1] - taps[0], 0.0) + max(taps[n - 1] - taps[n - 2], 0.0)
    return offset, contrast, second / rise - offset * offset, 1.0 - (n_side - 0.5) * at_ends / rise


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
    cell_mm: float,
    start: Array,
    samples: Array,
) -> tuple[Array, Array, float, int]:
    """Pose (3,), covariance (3, 3), RMS of agreeing edges [px] and their number (0 or UNSETTLED: no pose); fills samples (n, 6)."""
    pose = start.copy()
    _, _, ux, uy, vx, vy = project_with_slope(lens, motion, pose[0], pose[1], z_mm)
    cell_px = cell_mm * math.sqrt(abs(ux * vy - uy * vx))
    taps, matrix, vector = np.empty(MAX_TAPS), np.empty((4, 4)), np.empty(4)
    rows = np.ones((points.shape[0], 4))
    gains = np.empty(points.shape[0])
    bleed_px, moved = 0.0, math.inf
    widest, narrowest = min(max(0.48 * cell_px, 1.0), 7.0), min(max(0.36 * cell_px, 1.0), 3.0)
    rms, n_agreeing = 0.0, 0
    for turn in range(N_ROUNDS):
        near = moved < NEAR_MM  # no need to look far any more
        reach = narrowest if near else max(widest * 0.75**turn, narrowest)
        n_side = min(int(reach / TAP_PX + 0.5), (MAX_TAPS - 1) // 2)
        keep_px = INLIER_PX if near else max(reach * 0.75**turn, INLIER_PX)
        cos, sin = math.cos(pose[2]), math.sin(pose[2])
        for i in range(points.shape[0]):
            dx, dy = cos * points[i, 0] - sin * points[i, 1], sin * points[i, 0] + cos * points[i, 1]
            nx, ny = cos * normals[i, 0] - sin * normals[i, 1], sin * normals[i, 0] + cos * normals[i, 1]
            u, v, nu, nv, rows[i, 0], rows[i, 1] = edge_in_image(lens, motion, pose[0] + dx, pose[1] + dy, z_mm, nx, ny)
            rows[i, 2] = -rows[i, 0] * dy + rows[i, 1] * dx
            u, v = u + bleed_px * nu, v + bleed_px * nv
            samples[i, 0], samples[i, 1] = u, v
            samples[i, 2], samples[i, 3], samples[i, 4], gains[i] = read_edge(grey, u - u_0, v - v_0, nu, nv, n_side, taps)
        rms, n_agreeing = _normal_equations(samples, rows, keep_px, matrix, vector)
        if (n_agreeing < MIN_AGREEING and turn > 3) or abs(np.linalg.det(matrix)) < 1e-6:
            return pose, matrix, 0.0, 0
        if moved < SETTLED_MM and keep_px == INLIER_PX and reach == narrowest:
            break
        # A blurred edge is cut off by the window and shows only part of its offset; Newton's step makes up for it.
        step = np.linalg.solve(matrix, vector) / min(max(median_where(gains, samples[:, 5]), LEAST_GAIN), 1.0)
        pose += step[:3]
        bleed_px += step[3]
        moved = abs(step[0]) + abs(step[1]) + abs(step[2]) * SETTLED_MM / SETTLED_RAD
    if moved > LOOSE_MM:
        return pose, matrix, 0.0, UNSETTLED
    covariance = np.linalg.inv(matrix)[:3, :3] * max(rms, EDGE_SD_PX) ** 2
    return pose, covariance, rms, n_agreeing  # type: ignore[return-value]  # numpy: LinAlg answers any float


@njit(cache=True)
def edge_in_image(
    lens: Array, motion: Array, x: float, y: float, z: float, nx: float, ny: float
) -> tuple[float, float, float, float, float, float]:
    """An edge point with normal (nx, ny) of the hand plane: its pixel, unit normal in the image, and d offset / d(x, y) [px/mm]."""
    u, v, ux, uy, vx, vy = project_with_slope(lens, motion, x, y, z)
    tu, tv = -ux * ny + uy * nx, -vx * ny + vy * nx  # the edge's direction in the image
    size = math.sqrt(tu * tu + tv * tv)
    nu, nv = tv / size, -tu / size
    if nu * (ux * nx + uy * ny) + nv * (vx * nx + vy * ny) < 0.0:
        nu, nv = -nu, -nv
    return u, v, nu, nv, nu * ux + nv * vx, nu * uy + nv * vy


@njit(cache=True)
def _normal_equations(samples: Array, rows: Array, keep_px: float, matrix: Array, vector: Array) -> tuple[float, int]:
    """Fills JᵀWJ and JᵀWr with Tukey's weights, and marks the edges that agree; returns their RMS and number."""
    n = samples.shape[0]
    matrix[:] = 0.0
    vector[:] = 0.0
    matrix[3, 3] = 1.0  # a bleed of nothing counts as one edge
    usual = median_where(samples[:, 3], samples[:, 3])
    squares, n_agreeing = 0.0, 0
    for i in range(n):
        offset = samples[i, 2]
        samples[i, 5] = 0.0
        if samples[i, 3] <= 0.0 or samples[i, 3] < 0.4 * usual or abs(offset) >= keep_px:
            continue
        weight = (1.0 - (offset / keep_px) ** 2) ** 2
        for a in range(4):
            vector[a] += weight * rows[i, a] * offset
            for b in range(4):
                matrix[a, b] += weight * rows[i, a] * rows[i, b]
        if abs(offset) < INLIER_PX:
            squares += offset * offset
            n_agreeing += 1
            samples[i, 5] = 1.0
    return math.sqrt(squares / max(n_agreeing, 1)), n_agreeing


@njit(cache=True)
def median_where(values: Array, keep: Array) -> float:
    """Median of the values whose `keep` is positive; 0 of none."""
    kept = values[keep > 0.0]
    return float(np.median(kept)) if kept.shape[0] > 0 else 0.0
