"""Finding two coloured spots: a chroma look-up normalised by the plate, then each spot's middle by unmixing its rim.

Chroma. A pixel divided channel by channel by the plate's median colour no longer depends on the light's strength and colour (von
Kries' diagonal model, 1902). Pixels near a taught chroma are candidates.

Middle. Around a candidate every pixel is a mixture a · spot + (1 − a) · card; with both colours read from the spot's inside and from
the white around it, the share a follows by projection. The middle is the centroid of the shares on the plane of the part's top,
each pixel weighed by the area it covers there, so that perspective does not shift it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import cv2
import numpy as np
from numba import njit
from numpy.typing import NDArray

from hw_profiles.calibration import ColourCalibration
from hw_profiles.geometry import Array
from hw_profiles.part import Spots
from vision.camera_model import CameraModel, project_with_slope, undistort_all
from vision.frames import Pixels

REFERENCE_STRIDE = 24  # every so many rows and columns are read for the plate's colour
CHROMA_REACH = 0.12  # how far from its chroma a pixel may lie; the white card lies 0.3 or more from any vivid colour
LEAST_LEVEL = 12  # brightest channel below which a pixel has no colour


@dataclass(frozen=True, slots=True, eq=False)
class Palette:
    """Chromas (2, 2) of the first and the second spot."""

    chromas: Array

    @classmethod
    def of(cls, spots: Spots, taught: ColourCalibration | None) -> Palette:
        """Taught chromas, else those of the printed colours over a neutral plate."""
        if taught is not None:
            return cls(np.array([taught.first_chroma, taught.second_chroma]))
        printed = np.array([spots.first_rgb, spots.second_rgb], dtype=float)
        return cls(printed[:, :2] / printed.sum(axis=1, keepdims=True))


@dataclass(frozen=True, slots=True, eq=False)
class SpotFit:
    """One spot.

    Attributes
    ----------
    centre_mm, variance : (2,) middle [mm] in the hand frame, and its variance [mm²].
    area_mm2 : what the spot covers.
    strays : share of pixels that are no mixture of spot and card, or not the one they should be.
    ovalness : 0 for a round spot; difference of its principal second moments over their sum.
    """

    centre_mm: Array
    variance: float
    area_mm2: float
    strays: float
    ovalness: float


def plate_colour(pixels: Pixels) -> Array:
    """Median colour (3,) BGR of a frame (height, width, 3): the plate's, as long as it fills most of the picture."""
    return np.asarray(np.maximum(np.median(pixels[::REFERENCE_STRIDE, ::REFERENCE_STRIDE].reshape(-1, 3), axis=0), 1.0), dtype=float)


def candidates(pixels: Pixels, plate_bgr: Array, palette: Palette, stride: int, area_px: float) -> list[list[Array]]:
    """For either spot, the middles (2,) [px, of this cut-out] of regions of its chroma whose area is near area_px."""
    labels = _classify(pixels, plate_bgr, palette.chromas, stride)
    found: list[list[Array]] = []
    for index in (1, 2):
        _, _, stats, middles = cv2.connectedComponentsWithStats((labels == index).view(np.uint8), connectivity=8)
        areas = np.asarray(stats)[1:, cv2.CC_STAT_AREA] * stride * stride
        fits = (areas > 0.3 * area_px) & (areas < 1.8 * area_px)
        found.append([middle * stride for middle in np.asarray(middles)[1:][fits]])
    return found


def refine(model: CameraModel, pixels: Pixels, corner_px: tuple[int, int], spots: Spots, z_mm: float, start_mm: Array) -> SpotFit | None:
    """A spot's middle near start_mm (2,), within a third of its diameter; None where it cannot be told from what is around it.

    pixels : (rows, columns, 3) cut-out whose first pixel stands at corner_px.
    """
    rows, columns = pixels.shape[:2]
    lens, motion = model.lens, model.motion
    plane_from_pinhole = np.asarray(np.linalg.inv(model.pinhole_from_plane(z_mm)), dtype=float)
    centre = start_mm
    result = np.zeros(7)
    for _ in range(3):
        u, v = model.project_plane(centre, z_mm)
        reach = 0.75 * spots.spot_mm * model.px_per_mm(centre, z_mm) * 1.15 + 2.0
        u_0, v_0 = max(int(u - corner_px[0] - reach), 0), max(int(v - corner_px[1] - reach), 0)
        cut = pixels[v_0 : min(int(v - corner_px[1] + reach) + 1, rows), u_0 : min(int(u - corner_px[0] + reach) + 1, columns)]
        if min(cut.shape[:2]) < 4:
            return None
        grid = np.indices(cut.shape[:2])[::-1].reshape(2, -1).T + np.array([u_0 + corner_px[0], v_0 + corner_px[1]], dtype=float)
        _unmix(np.ascontiguousarray(cut), grid, lens, motion, plane_from_pinhole, z_mm, centre, spots.spot_mm / 2.0, result)
        if result[6] == 0.0:
            return None
        centre = result[:2].copy()
    return SpotFit(centre, float(result[2]), float(result[3]), float(result[4]), float(result[5]))


@njit(cache=True)
def _classify(pixels: Pixels, plate_bgr: Array, chromas: Array, stride: int) -> Pixels:
    """1 or 2 where a pixel has the chroma of the first or second spot, else 0; every stride-th row and column."""
    rows, columns = (pixels.shape[0] + stride - 1) // stride, (pixels.shape[1] + stride - 1) // stride
    labels = np.zeros((rows, columns), np.uint8)
    per_b, per_g, per_r = 1.0 / plate_bgr[0], 1.0 / plate_bgr[1], 1.0 / plate_bgr[2]
    for i in range(rows):
        for j in range(columns):
            b, g, r = pixels[i * stride, j * stride, 0], pixels[i * stride, j * stride, 1], pixels[i * stride, j * stride, 2]
            if max(b, g, r) < LEAST_LEVEL:
                continue
            b_share, g_share, r_share = b * per_b, g * per_g, r * per_r
            per_sum = 1.0 / (b_share + g_share + r_share)
            best = CHROMA_REACH * CHROMA_REACH
            for k in range(2):
                dr, dg = r_share * per_sum - chromas[k, 0], g_share * per_sum - chromas[k, 1]
                if dr * dr + dg * dg < best:
                    best = dr * dr + dg * dg
                    labels[i, j] = k + 1
    return labels


@njit(cache=True)
def _unmix(
    cut: Pixels,
    grid: Array,
    lens: Array,
    motion: Array,
    plane_from_pinhole: Array,
    z_mm: float,
    centre: Array,
    radius_mm: float,
    result: Array,
) -> None:
    """Fills result: x, y [mm], variance [mm²], area [mm²], straying share, ovalness, and 1 if all went well."""
    n = grid.shape[0]
    ideal = undistort_all(lens, grid)
    places, areas, away = np.empty((n, 2)), np.empty(n), np.empty(n)
    colours = cut.reshape(n, 3).astype(np.float64)
    result[:] = 0.0
    sums, counts = np.zeros((2, 3)), np.zeros(2)
    for i in range(n):
        w = plane_from_pinhole[2, 0] * ideal[i, 0] + plane_from_pinhole[2, 1] * ideal[i, 1] + plane_from_pinhole[2, 2]
        for a in range(2):
            row = plane_from_pinhole[a]
            places[i, a] = (row[0] * ideal[i, 0] + row[1] * ideal[i, 1] + row[2]) / w
        _, _, ux, uy, vx, vy = project_with_slope(lens, motion, places[i, 0], places[i, 1], z_mm)
        areas[i] = 1.0 / abs(ux * vy - uy * vx)
        away[i] = math.hypot(places[i, 0] - centre[0], places[i, 1] - centre[1]) / radius_mm
        kind = 0 if away[i] < 0.6 else (1 if 1.2 < away[i] < 1.45 else -1)
        if kind >= 0:
            sums[kind] += colours[i]
            counts[kind] += 1.0
    if counts[0] < 4.0 or counts[1] < 4.0:
        return
    spot, card = sums[0] / counts[0], sums[1] / counts[1]
    line = spot - card
    contrast_sq = line[0] ** 2 + line[1] ** 2 + line[2] ** 2
    if contrast_sq < 900.0:
        return
    strays, inside, noise = 0.0, 0.0, 0.0
    total, first_x, first_y, lever = 0.0, 0.0, 0.0, 0.0
    xx, yy, xy = 0.0, 0.0, 0.0
    for i in range(n):
        if away[i] > 1.45:
            continue
        off = colours[i] - card
        share = (off[0] * line[0] + off[1] * line[1] + off[2] * line[2]) / contrast_sq
        rest = 0.0
        for c in range(3):
            rest += (off[c] - share * line[c]) ** 2
        inside += 1.0
        flat = 0.0 if away[i] > 1.2 else (1.0 if away[i] < 0.6 else share)
        noise += (share - flat) ** 2
        if rest > 0.04 * contrast_sq or abs(share - flat) > 0.2:
            strays += 1.0
        weight = share * areas[i]
        total += weight
        first_x += weight * places[i, 0]
        first_y += weight * places[i, 1]
        dx, dy = places[i, 0] - centre[0], places[i, 1] - centre[1]
        xx, yy, xy = xx + weight * dx * dx, yy + weight * dy * dy, xy + weight * dx * dy
        lever += areas[i] ** 2 * (away[i] * radius_mm) ** 2 * 0.5
    result[0], result[1] = first_x / total, first_y / total
    result[2] = noise / inside * lever / (total * total)
    off_x, off_y = result[0] - centre[0], result[1] - centre[1]
    xx, yy, xy = xx / total - off_x * off_x, yy / total - off_y * off_y, xy / total - off_x * off_y
    result[3], result[4], result[6] = total, strays / inside, 1.0
    result[5] = math.hypot(xx - yy, 2.0 * xy) / max(abs(xx + yy), 1e-9)


def pair(first: list[Array], second: list[Array], spacing_mm: float) -> tuple[Array, Array] | None:
    """The two middles (2,) [mm] whose distance is nearest to the spacing; None where none comes within a fifth of it."""
    best, best_off = None, 0.2 * spacing_mm
    for a in first:
        for b in second:
            off = abs(float(np.linalg.norm(b - a)) - spacing_mm)
            if off < best_off:
                best, best_off = (a, b), off
    return best


def chroma_of(pixels: NDArray[np.floating], plate_bgr: Array) -> Array:
    """Chromas (n, 2) of pixels (n, 3) BGR."""
    shares = np.asarray(pixels, dtype=float) / plate_bgr
    return np.asarray(shares[:, [2, 1]] / np.maximum(shares.sum(axis=1, keepdims=True), 1e-9))
