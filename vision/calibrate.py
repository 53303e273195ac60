"""Calibration of the camera's lens from views of a ChArUco board: detecting it, guiding the person, solving, refusing.

A view is one picture of the board. Solving follows Zhang, "A Flexible New Technique for Camera Calibration", PAMI 2000 (OpenCV's
implementation, k3 held at 0); views that fit much worse than the rest are put aside and named. Fewer than MIN_VIEWS views, poor
coverage of the image, or views too alike to tell focal length from distance are refused.
"""

from __future__ import annotations

import datetime
from dataclasses import dataclass

import cv2
import numpy as np

from hw_profiles.calibration import LensCalibration
from hw_profiles.camera import Camera
from hw_profiles.errors import CalibrationError
from hw_profiles.geometry import Array
from vision.frames import Pixels

MIN_VIEWS, MIN_CORNERS = 8, 12
MAX_RMS_PX = 1.0
BAD_VIEW_TIMES, BAD_VIEW_PX = 3.0, 0.3  # a view is bad when it is so many times the median and above so much
MAX_FOCAL_SD = 0.004  # of the focal length
GRID = 3
MIN_TILES = 7  # of the GRID × GRID tiles of the image in which corners must have been seen
MIN_TILTED = 3
TILT_DEG = 15.0


@dataclass(frozen=True, slots=True)
class Board:
    """A ChArUco board: chess squares, the white ones holding tags of the 5×5 dictionary (ids 0 …), as printed."""

    columns: int = 11
    rows: int = 8
    square_mm: float = 22.0
    marker_mm: float = 16.0

    @property
    def size_mm(self) -> tuple[float, float]:
        return self.columns * self.square_mm, self.rows * self.square_mm

    def layout(self) -> cv2.aruco.CharucoBoard:
        family = cv2.aruco.getPredefinedDictionary(cv2.aruco.DICT_5X5_100)
        return cv2.aruco.CharucoBoard((self.columns, self.rows), self.square_mm, self.marker_mm, family)


@dataclass(frozen=True, slots=True, eq=False)
class View:
    """Board corners seen in one picture: on the board (n, 3) [mm], z = 0, and in the image (n, 2) [px]."""

    name: str
    on_board_mm: Array
    in_image_px: Array


def detect(board: Board, pixels: Pixels, name: str) -> View | None:
    """The board's corners in a picture; None where fewer than MIN_CORNERS are seen."""
    grey = pixels if pixels.ndim == 2 else cv2.cvtColor(pixels, cv2.COLOR_BGR2GRAY)
    layout = board.layout()
    corners, ids, _, _ = cv2.aruco.CharucoDetector(layout).detectBoard(grey)
    if ids is None or len(ids) < MIN_CORNERS:
        return None
    known = np.asarray(layout.getChessboardCorners(), dtype=float)[np.asarray(ids).reshape(-1)]
    return View(name, known, np.asarray(corners, dtype=float).reshape(-1, 2))


def is_new(view: View, before: list[View]) -> bool:
    """Whether a view shows the board elsewhere or otherwise than every view before, by a twentieth of its own size."""
    span = float(np.ptp(view.in_image_px, axis=0).max())
    for other in before:
        shared = {tuple(point): index for index, point in enumerate(other.on_board_mm.tolist())}
        pairs = [(i, shared[tuple(p)]) for i, p in enumerate(view.on_board_mm.tolist()) if tuple(p) in shared]
        if len(pairs) >= 4:
            mine, theirs = np.array(pairs).T
            if np.linalg.norm(view.in_image_px[mine] - other.in_image_px[theirs], axis=1).mean() < 0.05 * span:
                return False
    return True


def guidance(views: list[View], size_px: tuple[int, int]) -> str:
    """What the next picture should show; empty when there is enough."""
    seen = _tiles(views, size_px)
    missing = [place for place in np.ndindex(GRID, GRID) if not seen[place]]
    if missing:
        row, column = missing[0]
        where = f"{('top', 'middle', 'bottom')[row]} {('left', 'centre', 'right')[column]}"
        return f"move the board to the {where} of the picture"
    tilted = sum(_tilt_deg(view) > TILT_DEG for view in views)
    if tilted < MIN_TILTED:
        return f"tilt the board by 20 to 40 deg, {MIN_TILTED - tilted} more pictures, each about another edge"
    if len(views) < MIN_VIEWS:
        return f"{MIN_VIEWS - len(views)} more pictures from other sides"
    return ""


def solve_lens(
    views: list[View], camera: Camera, made_from: str, made_on: datetime.date, bad_view_times: float = BAD_VIEW_TIMES
) -> LensCalibration:
    """Intrinsics of a camera from views of a board.

    bad_view_times : views with so many times the median residual are put aside; inf keeps all.

    Raises
    ------
    CalibrationError
        Too few good views, poor coverage, views too alike, or an RMS above MAX_RMS_PX.
    """
    size_px = (camera.width_px, camera.height_px)
    kept = list(views)
    rejected: list[str] = []
    while True:
        _refuse_poor(kept, rejected, size_px)
        rms, matrix, distortion, sds, per_view = _solve(kept, size_px)
        worst = int(np.argmax(per_view))
        if per_view[worst] <= max(bad_view_times * float(np.median(per_view)), BAD_VIEW_PX):
            break
        rejected.append(kept.pop(worst).name)
    if rms > MAX_RMS_PX:
        raise CalibrationError(f"reprojection error {rms:.2f} px, allowed: {MAX_RMS_PX:g}: is the board flat, still and sharp?")
    spread = max(sds[0] / matrix[0, 0], sds[1] / matrix[1, 1])
    if spread > MAX_FOCAL_SD:
        known = f"focal length is only known to {spread:.2%}, allowed: {MAX_FOCAL_SD:.2%}"
        raise CalibrationError(f"the views are too alike: {known}; tilt the board by 20 to 40 deg")
    return LensCalibration(
        made_on=made_on.isoformat(),
        made_from=made_from,
        camera=camera.name,
        width_px=camera.width_px,
        height_px=camera.height_px,
        focal_px=(float(matrix[0, 0]), float(matrix[1, 1])),
        principal_px=(float(matrix[0, 2]), float(matrix[1, 2])),
        distortion=(float(distortion[0]), float(distortion[1]), float(distortion[2]), float(distortion[3]), float(distortion[4])),
        rms_px=float(rms),
        view_rms_px=tuple(float(value) for value in per_view),
        rejected_views=tuple(rejected),
    )


def _solve(views: list[View], size_px: tuple[int, int]) -> tuple[float, Array, Array, Array, Array]:
    """RMS [px], matrix (3, 3), distortion (5,), standard deviations of the intrinsics, RMS per view."""
    known = [view.on_board_mm.astype(np.float32) for view in views]
    seen = [view.in_image_px.astype(np.float32)[:, None, :] for view in views]
    answer = cv2.calibrateCameraExtended(known, seen, size_px, np.eye(3), np.zeros(5), flags=cv2.CALIB_FIX_K3)
    rms, matrix, distortion, _, _, sds, _, per_view = answer
    flat = [np.asarray(values, dtype=float).reshape(-1) for values in (distortion, sds, per_view)]
    return float(rms), np.asarray(matrix, dtype=float), flat[0][:5], flat[1], flat[2]


def _refuse_poor(kept: list[View], rejected: list[str], size_px: tuple[int, int]) -> None:
    if len(kept) < MIN_VIEWS:
        aside = f" ({len(rejected)} put aside: {', '.join(rejected)})" if rejected else ""
        raise CalibrationError(f"{len(kept)} good views of the board{aside}, needed: {MIN_VIEWS}")
    n_tiles = int(_tiles(kept, size_px).sum())
    if n_tiles < MIN_TILES:
        raise CalibrationError(
            f"the board was seen in {n_tiles} of {GRID * GRID} parts of the picture, needed: {MIN_TILES}; {guidance(kept, size_px)}"
        )
    tilted = sum(_tilt_deg(view) > TILT_DEG for view in kept)
    if tilted < MIN_TILTED:
        raise CalibrationError(
            f"the board leans in {tilted} of {len(kept)} views, needed: {MIN_TILTED}; flat views cannot tell focal length from distance"
        )


def _tiles(views: list[View], size_px: tuple[int, int]) -> Array:
    """Whether corners were seen in each tile (GRID, GRID) of the image, rows from the top."""
    seen = np.zeros((GRID, GRID), dtype=bool)
    for view in views:
        column, row = np.clip((view.in_image_px / np.array(size_px) * GRID).astype(int), 0, GRID - 1).T
        seen[row, column] = True
    return seen


def _tilt_deg(view: View) -> float:
    """About how far the board leans: from how unequally the homography scales its two directions and corners.

    Ratio of the singular values of the homography's slope at the board's middle: cos(tilt) under a distant camera.
    """
    homography, _ = cv2.findHomography(view.on_board_mm[:, :2], view.in_image_px)
    x, y = view.on_board_mm[:, :2].mean(axis=0)
    w = homography[2] @ np.array([x, y, 1.0])
    u, v = homography[0] @ np.array([x, y, 1.0]) / w, homography[1] @ np.array([x, y, 1.0]) / w
    slope = (homography[:2, :2] - np.outer([u, v], homography[2, :2])) / w
    values = np.linalg.svd(slope, compute_uv=False)
    return float(np.degrees(np.arccos(np.clip(values[1] / values[0], 0.0, 1.0))))
