"""Where the camera hangs over the plate: its pose in the hand frame from marks of known place on the plate.

The marks are the corners of a board lying on the plate, or four or more points measured by hand. Start: the homography of the plane
(Zhang 2000, section 3.1); then all six unknowns by least squares of the reprojection error through the calibrated lens.
"""

from __future__ import annotations

import datetime

import numpy as np
from scipy.optimize import least_squares
from scipy.spatial.transform import Rotation

from hw_profiles.calibration import PlateCalibration
from hw_profiles.camera import Camera, Mount
from hw_profiles.errors import CalibrationError
from hw_profiles.geometry import Array, Pose2
from vision.calibrate import View
from vision.camera_model import CameraModel, model_of

MIN_MARKS = 4
TELLING_MARKS = 6  # with fewer, the fit spreads one mark's error over all
MAX_RMS_MM = 0.5
MIN_SPREAD = 0.15  # the marks' narrower spread on the plate, of the wider


def marks_of(view: View, hand_from_board: Pose2) -> tuple[Array, Array]:
    """Marks (n, 2) [mm] in the hand frame and (n, 2) [px] of a board on the plate.

    hand_from_board : where the board's top left corner lies and which way its rows run.
    """
    flat = view.on_board_mm[:, :2] * np.array([1.0, -1.0])  # a board counts its rows downward
    return hand_from_board.apply(flat), view.in_image_px


def solve_plate(
    marks_mm: Array, marks_px: Array, camera: Camera, made_from: str, made_on: datetime.date, height_mm: float = 0.0
) -> PlateCalibration:
    """The camera's mount from marks on the plate.

    Parameters
    ----------
    marks_mm, marks_px : (n, 2) in the hand frame and in the image; four or more, not on one line.
    height_mm : of the marks over the plate, such as the thickness of the board.

    Raises
    ------
    CalibrationError
        Too few marks, marks on a line, a fit that leaves more than MAX_RMS_MM on the plate, or a camera that does not look down.
    """
    _refuse_bad_marks(marks_mm, marks_px)
    mount, residuals = _fit(marks_mm, marks_px, camera, height_mm)
    rms = _rms(residuals)
    if rms > MAX_RMS_MM:
        advice = _advice(marks_mm, marks_px, camera, height_mm)
        raise CalibrationError(f"the marks miss their places by {rms:.2f} mm, allowed: {MAX_RMS_MM:g}; {advice}")
    return PlateCalibration(
        made_on=made_on.isoformat(),
        made_from=made_from,
        camera=camera.name,
        width_px=camera.width_px,
        height_px=camera.height_px,
        focal_px=camera.focal_px,
        mount=mount,
        rms_mm=rms,
        residuals_mm=tuple(float(value) for value in residuals),
    )


def _fit(marks_mm: Array, marks_px: Array, camera: Camera, height_mm: float) -> tuple[Mount, Array]:
    """Mount, and distances (n,) [mm] on the plate between marks and where the camera sees them."""
    model = model_of(camera)
    start = _from_homography(marks_mm, model.undistort(marks_px), height_mm)

    def misfit(unknowns: Array) -> Array:
        return (_moved(model, unknowns, marks_mm, height_mm) - marks_px).ravel()

    found = least_squares(misfit, start, x_scale=np.array([1.0, 1.0, 1.0, 400.0, 400.0, 400.0]), xtol=1e-12, ftol=1e-12)
    mount = mount_of(Rotation.from_rotvec(found.x[:3]).as_matrix(), found.x[3:])
    seen = model_of(camera.model_copy(update={"mount": mount})).plane_points(marks_px, height_mm)
    return mount, np.linalg.norm(seen - marks_mm, axis=1)


def _rms(residuals: Array) -> float:
    return float(np.sqrt(np.mean(residuals**2)))


def _advice(marks_mm: Array, marks_px: Array, camera: Camera, height_mm: float) -> str:
    """Which mark is wrong: the one without which the rest fit best."""
    if len(marks_mm) < TELLING_MARKS:
        return f"measure them again, or give {TELLING_MARKS} to see which is wrong"
    rest = [np.arange(len(marks_mm)) != index for index in range(len(marks_mm))]
    left = [_rms(_fit(marks_mm[keep], marks_px[keep], camera, height_mm)[1]) for keep in rest]
    worst = int(np.argmin(left))
    where = f"({marks_mm[worst, 0]:.1f}, {marks_mm[worst, 1]:.1f})"
    return f"without mark {worst + 1} at {where} it is {left[worst]:.2f} mm: measure that one again"


def mount_of(turn: Array, shift_mm: Array) -> Mount:
    """The mount of a camera with camera_from_hand = [turn (3, 3) | shift (3,)]; its target lies on the plate."""
    eye, forward = -turn.T @ shift_mm, turn[2]
    if forward[2] > -0.5:
        raise CalibrationError("the camera does not look down on the plate: are the marks listed in the right order?")
    target = eye - forward * (eye[2] / forward[2])
    level = Mount(eye_mm=_triple(eye), target_mm=_triple(target))
    up = np.array([0.0, 1.0, 0.0]) - forward * forward[1]
    up /= np.linalg.norm(up)
    right = np.cross(forward, up)
    roll = np.degrees(np.arctan2(-turn[0] @ up, turn[0] @ right))
    return level.model_copy(update={"roll_deg": float(roll)})


def _refuse_bad_marks(marks_mm: Array, marks_px: Array) -> None:
    if len(marks_mm) < MIN_MARKS or len(marks_mm) != len(marks_px):
        raise CalibrationError(
            f"{len(marks_mm)} marks on the plate and {len(marks_px)} in the picture, needed: {MIN_MARKS} or more of each"
        )
    for where, marks in (("on the plate", marks_mm), ("in the picture", marks_px)):
        wide, narrow = np.linalg.svd(marks - marks.mean(axis=0), compute_uv=False)
        if narrow < MIN_SPREAD * wide:
            raise CalibrationError(f"the marks lie almost on a line {where}: spread them over the plate")


def _from_homography(marks_mm: Array, ideal: Array, height_mm: float) -> Array:
    """Rotation vector and shift (6,) from the plane's homography (Zhang 2000, Eq. (3) and section 3.1)."""
    x, y = marks_mm.T
    ones, zeros = np.ones_like(x), np.zeros_like(x)
    u, v = ideal.T
    rows = np.concatenate(
        [
            np.stack([x, y, ones, zeros, zeros, zeros, -u * x, -u * y, -u], axis=1),
            np.stack([zeros, zeros, zeros, x, y, ones, -v * x, -v * y, -v], axis=1),
        ]
    )
    scale = np.linalg.norm(rows, axis=0)
    homography = (np.linalg.svd(rows / scale)[2][-1] / scale).reshape(3, 3)
    homography *= np.sign(homography[2, 2])
    homography /= 0.5 * (np.linalg.norm(homography[:, 0]) + np.linalg.norm(homography[:, 1]))
    first, second = homography[:, 0], homography[:, 1]
    u_left, _, v_right = np.linalg.svd(np.stack([first, second, np.cross(first, second)], axis=1))
    turn = u_left @ np.diag([1.0, 1.0, np.linalg.det(u_left @ v_right)]) @ v_right
    return np.concatenate([Rotation.from_matrix(turn).as_rotvec(), homography[:, 2] - turn[:, 2] * height_mm])


def _moved(model: CameraModel, unknowns: Array, marks_mm: Array, height_mm: float) -> Array:
    """Pixels (n, 2) of the marks seen by a camera with another pose than the model's."""
    points = np.concatenate([marks_mm, np.full((len(marks_mm), 1), height_mm)], axis=1)
    in_camera = Rotation.from_rotvec(unknowns[:3]).apply(points) + unknowns[3:]
    # The model's own motion takes hand points to the camera; hand it points that end where they should.
    return model.project((in_camera - model.motion[:, 3]) @ model.motion[:, :3])


def _triple(values: Array) -> tuple[float, float, float]:
    return float(values[0]), float(values[1]), float(values[2])
