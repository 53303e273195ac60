"""Calibration: it recovers what made the pictures, and refuses what cannot tell."""

import datetime

import cv2
import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from hw_profiles import calibration
from hw_profiles.camera import Camera, Mount
from hw_profiles.errors import CalibrationError, ProfileError
from hw_profiles.geometry import Pose2
from hw_profiles.load import load_camera, load_part
from tests.benchmarks.made_frames import camera_of
from vision import calibrate, calibrate_plate, pattern, print_board, print_mark
from vision.calibrate import Board, View
from vision.camera_model import model_of

CAMERA, BOARD, TODAY = load_camera("overhead-720p"), Board(), datetime.date(2026, 3, 4)
CORNERS = np.asarray(BOARD.layout().getChessboardCorners(), dtype=float)
SIZE = (CAMERA.width_px, CAMERA.height_px)


def view(name: str, euler_deg: tuple[float, float, float], shift_mm: tuple[float, float, float], rng: np.random.Generator) -> View | None:
    """The board held somewhere, its corners found with 0.1 px of noise."""
    model = model_of(CAMERA)
    in_camera = Rotation.from_euler("xyz", euler_deg, degrees=True).apply(CORNERS) + shift_mm
    px = model.project((in_camera - model.motion[:, 3]) @ model.motion[:, :3])
    inside = np.all((px > 4) & (px < np.array(SIZE) - 4), axis=1)
    if inside.sum() < calibrate.MIN_CORNERS:
        return None
    return View(name, CORNERS[inside], px[inside] + rng.normal(0, 0.1, (int(inside.sum()), 2)))


def held(n: int, seed: int, lean_deg: float = 35.0) -> list[View]:
    rng, found = np.random.default_rng(seed), []
    while len(found) < n:
        euler = (*rng.uniform(-lean_deg, lean_deg, 2), rng.uniform(-20, 20))
        one = view(f"view {len(found)}", euler, (rng.uniform(-220, 20), rng.uniform(-150, 10), rng.uniform(300, 500)), rng)
        found += [] if one is None else [one]
    return found


def test_synthetic_intrinsics_are_recovered_within_a_thousandth() -> None:
    found = calibrate.solve_lens(held(25, 1), CAMERA, "25 views", TODAY)
    assert np.abs(np.array(found.focal_px) / np.array(CAMERA.focal_px) - 1).max() < 1e-3
    assert np.abs(np.subtract(found.principal_px, CAMERA.principal_px)).max() < 1.0
    assert found.distortion[0] == pytest.approx(CAMERA.distortion[0], abs=0.005)
    assert 0.1 < found.rms_px < 0.18
    assert len(found.view_rms_px) == 25
    assert found.rejected_views == ()


def test_a_bad_view_is_put_aside_and_named() -> None:
    views, rng = held(16, 2), np.random.default_rng(3)
    bad = View("shaken", views[0].on_board_mm, views[0].in_image_px + rng.normal(0, 4, views[0].in_image_px.shape))
    found = calibrate.solve_lens([*views, bad], CAMERA, "views", TODAY)
    assert found.rejected_views == ("shaken",)
    assert np.abs(np.array(found.focal_px) / 1050.0 - 1).max() < 2e-3


@pytest.mark.parametrize(
    ("views", "wanted"),
    [(held(5, 4), "5 good views of the board, needed: 8"), (held(14, 5, 0.0), "leans in 0 of 14 views, needed: 3")],
)
def test_too_few_or_degenerate_views_are_refused(views: list[View], wanted: str) -> None:
    with pytest.raises(CalibrationError, match=wanted):
        calibrate.solve_lens(views, CAMERA, "views", TODAY)


def test_views_of_one_corner_of_the_picture_are_refused_with_advice() -> None:
    rng = np.random.default_rng(6)
    views = [view(str(i), (*rng.uniform(-30, 30, 2), 0.0), (-230.0, -160.0, 560.0), rng) for i in range(30)]
    with pytest.raises(CalibrationError, match=r"of 9 parts of the picture, needed: 7; move the board to the"):
        calibrate.solve_lens([one for one in views if one is not None], CAMERA, "views", TODAY)


def test_guidance_ends_when_there_is_enough() -> None:
    views = held(30, 7)
    assert calibrate.guidance([], SIZE) == "move the board to the top left of the picture"
    assert calibrate.guidance(views, SIZE) == ""
    flat = held(30, 8, 0.0)
    assert "tilt the board" in calibrate.guidance(flat, SIZE) or "move the board" in calibrate.guidance(flat, SIZE)


def test_a_view_like_an_earlier_one_is_not_new() -> None:
    views = held(3, 9)
    again = View("again", views[1].on_board_mm, views[1].in_image_px + 0.5)
    assert not calibrate.is_new(again, views)
    assert calibrate.is_new(views[2], views[:2])


def test_the_printed_board_is_the_one_that_is_detected_at_true_scale() -> None:
    sheet = cv2.imdecode(np.frombuffer(print_board.board_sheet(BOARD, "png"), np.uint8), cv2.IMREAD_GRAYSCALE)
    per_mm = 600 / 25.4
    small = cv2.resize(sheet, None, fx=0.15, fy=0.15, interpolation=cv2.INTER_AREA)
    seen = calibrate.detect(BOARD, np.asarray(small, np.uint8), "sheet")
    assert seen is not None
    assert len(seen.on_board_mm) == (BOARD.columns - 1) * (BOARD.rows - 1)
    on_paper_mm = (seen.in_image_px + 0.5) / (0.15 * per_mm) - print_board.MARGIN_MM
    np.testing.assert_allclose(on_paper_mm, seen.on_board_mm[:, :2], atol=0.15)


def test_the_sheet_is_a_pdf_of_the_right_size() -> None:
    sheet = print_board.board_sheet(BOARD, "pdf")
    assert sheet.startswith(b"%PDF")
    width_pt = (BOARD.size_mm[0] + 2 * print_board.MARGIN_MM) * 72 / 25.4
    box = sheet[sheet.index(b"/MediaBox") :].split(b"]")[0].split(b"[")[1].split()
    assert float(box[2]) == pytest.approx(width_pt, abs=0.01)


@pytest.mark.parametrize("name", ["roller-40", "bracket-l"])
def test_a_printed_tag_is_found_upright_and_of_the_right_size(name: str) -> None:
    part = load_part(name)
    sheet = cv2.imdecode(np.frombuffer(print_mark.mark_sheet(part, "png"), np.uint8), cv2.IMREAD_GRAYSCALE)
    corners, ids, _ = cv2.aruco.ArucoDetector(pattern.family()).detectMarkers(np.asarray(sheet))
    assert np.ravel(ids).tolist() == [part.fiducial.id]
    quad = np.asarray(corners[0]).reshape(4, 2)
    side_px = part.fiducial.size_mm * 600 / 25.4
    np.testing.assert_allclose(quad[1] - quad[0], [side_px, 0.0], atol=3.0)
    np.testing.assert_allclose(quad[3] - quad[0], [0.0, side_px], atol=3.0)


def moved_camera() -> Camera:
    return camera_of(roll_deg=33.0).model_copy(
        update={"mount": Mount(eye_mm=(20.0, -80.0, 400.0), target_mm=(5.0, 5.0, 0.0), roll_deg=33.0)}
    )


MARKS = np.array([[-90.0, -60.0], [90.0, -60.0], [90.0, 60.0], [-90.0, 60.0]])


@pytest.mark.parametrize("height_mm", [0.0, 3.0])
def test_the_plate_is_found_from_four_marks_from_any_start(height_mm: float) -> None:
    truth = moved_camera()
    px = model_of(truth).project_plane(MARKS, height_mm)
    found = calibrate_plate.solve_plate(MARKS, px, CAMERA, "four marks", TODAY, height_mm)
    calibrated = calibration.with_plate(CAMERA, found, TODAY)
    np.testing.assert_allclose(model_of(calibrated).motion, model_of(truth).motion, atol=1e-6)
    assert found.rms_mm < 1e-6


def test_the_plate_is_found_from_a_board_lying_on_it() -> None:
    truth, place = moved_camera(), Pose2(-100.0, 70.0, 0.2)
    flat = place.apply(CORNERS[:, :2] * [1, -1])
    px = model_of(truth).project_plane(flat, 0.0) + np.random.default_rng(1).normal(0, 0.1, (len(flat), 2))
    marks_mm, marks_px = calibrate_plate.marks_of(View("board", CORNERS, px), place)
    found = calibrate_plate.solve_plate(marks_mm, marks_px, CAMERA, "board", TODAY)
    points = np.array([[0.0, 0.0], [30.0, 20.0], [-40.0, 10.0]])
    seen = model_of(calibration.with_plate(CAMERA, found, TODAY)).plane_points(model_of(truth).project_plane(points, 20.0), 20.0)
    assert np.abs(seen - points).max() < 0.05


@pytest.mark.parametrize(
    ("marks", "change", "wanted"),
    [
        (MARKS[:3], 0.0, "needed: 4"),
        (np.array([[-90.0, 0.0], [-30.0, 1.0], [30.0, 0.0], [90.0, 1.0]]), 0.0, "almost on a line"),
        (MARKS, 6.0, "give 6 to see which is wrong"),
        (np.array([*MARKS, *(0.5 * MARKS[::-1])]), 6.0, r"without mark 3 at \(96\.0, 66\.0\) it is 0\.00 mm"),
        (MARKS[[0, 3, 2, 1]], None, "right order"),
    ],
)
def test_bad_marks_are_refused(marks: np.ndarray, change: float | None, wanted: str) -> None:
    px = model_of(moved_camera()).project_plane(MARKS if change is None else marks, 0.0)
    wrong = marks.copy()
    if change:
        wrong[2] += change
    with pytest.raises(CalibrationError, match=wanted):
        calibrate_plate.solve_plate(wrong, px[: len(marks)], CAMERA, "marks", TODAY)


LENS = calibration.LensCalibration(
    made_on="2026-01-02", made_from="views", camera=CAMERA.name, width_px=1280, height_px=720, focal_px=(1048.0, 1049.0),
    principal_px=(640.0, 356.0), distortion=(0.07, -0.1, 0.0, 0.0, 0.0), rms_px=0.2, view_rms_px=(0.2, 0.2),
)  # fmt: skip


def test_a_calibration_survives_its_file_and_changes_the_camera() -> None:
    again = calibration.read(calibration.LensCalibration, calibration.text_of(LENS), "own.json")
    assert again == LENS
    camera = calibration.with_lens(CAMERA, again, TODAY)
    assert camera.focal_px == LENS.focal_px
    assert camera.mount == CAMERA.mount


@pytest.mark.parametrize(
    ("change", "wanted"),
    [
        ({"width_px": 640}, "made at 640 × 720 px, camera 'overhead-720p' runs at 1280 × 720"),
        ({"camera": "other"}, "made for camera 'other'"),
        ({"made_on": "2024-01-02"}, "792 days old, allowed: 365"),
        ({"made_on": "2027-01-02"}, "in the future"),
    ],
)
def test_a_calibration_that_does_not_belong_is_refused_by_name(change: dict[str, object], wanted: str) -> None:
    with pytest.raises(CalibrationError, match=wanted):
        calibration.with_lens(CAMERA, LENS.model_copy(update=change), TODAY)


def test_a_plate_calibration_of_another_lens_is_refused() -> None:
    px = model_of(CAMERA).project_plane(MARKS, 0.0)
    plate = calibrate_plate.solve_plate(MARKS, px, CAMERA, "marks", TODAY)
    with pytest.raises(CalibrationError, match=r"focal length 1050\.0 px, camera 'overhead-720p' has 1048\.0"):
        calibration.with_plate(calibration.with_lens(CAMERA, LENS, TODAY), plate, TODAY)


def test_a_broken_calibration_file_is_refused_by_key() -> None:
    with pytest.raises(ProfileError, match=r"own\.json: focal_px"):
        calibration.read(calibration.LensCalibration, calibration.text_of(LENS).replace("1048.0", '"x"'), "own.json")
