"""Lens calibration and tag detection on published photographs.

Source: Debian package opencv-doc 4.6.0: the 13 photographs `left01.jpg … left14.jpg` of a chessboard of 9 × 6 inner corners, 25 mm,
with the intrinsics published beside them in `left_intrinsics.yml` (fx = fy held equal there); and `singlemarkersoriginal.jpg`, whose
ids 23 40 62 98 124 203 and corners are those of OpenCV's ArUco tutorial test (test/test_aruco_tutorial.cpp).

The package is fetched once from the Debian mirror of this machine and its few files kept under .cache/.
"""

import datetime
import math
import shutil
import subprocess
from pathlib import Path

import cv2
import numpy as np
import pytest

from hw_profiles.load import load_camera
from vision import calibrate
from vision.calibrate import View

CACHE = Path(__file__).parents[2] / ".cache" / "opencv-doc"
WANTED = ("./usr/share/doc/opencv-doc/examples/data/left*", "./usr/share/doc/opencv-doc/opencv4/html/singlemarkersoriginal.jpg")


@pytest.fixture(scope="module")
def photos() -> Path:
    """Folder of the photographs."""
    if not (CACHE / "singlemarkersoriginal.jpg").is_file():
        fetch()
    return CACHE


def fetch() -> None:
    draft = CACHE.with_name("opencv-doc.part")
    shutil.rmtree(draft, ignore_errors=True)
    draft.mkdir(parents=True)
    for tool in ("apt-get", "dpkg-deb", "tar"):
        if shutil.which(tool) is None:
            pytest.skip(f"the photographs come as a Debian package and this machine has no {tool}")
    try:
        got = subprocess.run(["apt-get", "download", "opencv-doc"], cwd=draft, capture_output=True, text=True, timeout=240)
    except subprocess.TimeoutExpired:
        pytest.skip("no package mirror answered within 240 s")
    packages = list(draft.glob("opencv-doc*.deb"))
    if got.returncode != 0 or not packages:
        pytest.skip(f"no package mirror gave opencv-doc: {got.stderr.strip().splitlines()[-1] if got.stderr.strip() else 'no answer'}")
    with subprocess.Popen(["dpkg-deb", "--fsys-tarfile", str(packages[0])], stdout=subprocess.PIPE) as package:
        subprocess.run(["tar", "-x", "--wildcards", "-C", str(draft), *WANTED], stdin=package.stdout, check=True)
    flat = draft / "flat"
    flat.mkdir()
    for path in [path for path in draft.rglob("*") if path.suffix in (".jpg", ".yml") and path.is_file()]:
        path.rename(flat / path.name)
    shutil.rmtree(CACHE, ignore_errors=True)
    flat.rename(CACHE)
    shutil.rmtree(draft)


def chessboard_views(folder: Path) -> list[View]:
    """Corners of the 13 photographs, refined as the published calibration did (window of 11 px)."""
    known = np.array([[25.0 * column, 25.0 * row, 0.0] for row in range(6) for column in range(9)])
    views = []
    for path in sorted(folder.glob("left[0-9][0-9].jpg")):
        grey = cv2.imread(str(path), cv2.IMREAD_GRAYSCALE)
        assert grey is not None
        found, corners = cv2.findChessboardCorners(grey, (9, 6))
        assert found
        stop = (cv2.TERM_CRITERIA_EPS + cv2.TERM_CRITERIA_MAX_ITER, 30, 0.1)
        corners = cv2.cornerSubPix(grey, np.asarray(corners, np.float32).reshape(-1, 1, 2), (11, 11), (-1, -1), stop)
        views.append(View(path.stem, known, np.asarray(corners, dtype=float).reshape(-1, 2)))
    return views


def test_thirteen_chessboard_photos_give_the_published_intrinsics(photos: Path) -> None:
    views = chessboard_views(photos)
    assert len(views) == 13
    camera = load_camera("overhead-720p").model_copy(update={"width_px": 640, "height_px": 480})
    found = calibrate.solve_lens(views, camera, "13 photographs", datetime.date(2026, 1, 1), bad_view_times=math.inf)
    # Published with fx = fy and a free k3, here fx, fy free and k3 = 0: the same lens told a little differently.
    np.testing.assert_allclose(found.focal_px, 535.916, rtol=1e-3)
    np.testing.assert_allclose(found.principal_px, (342.283, 235.571), atol=0.1)
    assert found.rms_px == pytest.approx(0.393, abs=0.001)


def test_the_one_photo_that_fits_badly_is_put_aside_by_name(photos: Path) -> None:
    camera = load_camera("overhead-720p").model_copy(update={"width_px": 640, "height_px": 480})
    found = calibrate.solve_lens(chessboard_views(photos), camera, "13 photographs", datetime.date(2026, 1, 1))
    assert found.rejected_views == ("left02",)  # 1.18 px in the published list too, six times the others
    np.testing.assert_allclose(found.focal_px, 535.916, rtol=4e-3)
    assert found.rms_px < 0.25


# Corners of OpenCV's tutorial test, top left corner first [px].
MARKER_CORNERS = {
    40: [(359, 310), (404, 310), (410, 350), (362, 350)],
    98: [(427, 255), (469, 256), (477, 289), (434, 288)],
    62: [(233, 273), (190, 273), (196, 241), (237, 241)],
    23: [(298, 185), (334, 186), (335, 212), (297, 211)],
    124: [(425, 163), (430, 186), (394, 186), (390, 162)],
    203: [(195, 155), (230, 155), (227, 178), (190, 178)],
}


def test_the_published_marker_photo_gives_its_ids_and_corners(photos: Path) -> None:
    grey = cv2.imread(str(photos / "singlemarkersoriginal.jpg"), cv2.IMREAD_GRAYSCALE)
    assert grey is not None
    family = cv2.aruco.getPredefinedDictionary(cv2.aruco.DICT_6X6_250)
    corners, ids, _ = cv2.aruco.ArucoDetector(family).detectMarkers(grey)
    assert ids is not None
    found = {int(key): np.asarray(quad).reshape(4, 2) for key, quad in zip(np.ravel(ids), corners, strict=True)}
    assert sorted(found) == [23, 40, 62, 98, 124, 203]
    for key, wanted in MARKER_CORNERS.items():
        assert np.abs(found[key] - wanted).max() <= 1.5, (key, found[key])
