"""Homography, distortion and Procrustes against independent libraries: scikit-image and scipy."""

import numpy as np
import pytest
from scipy.optimize import least_squares
from scipy.spatial import procrustes
from skimage.transform import EuclideanTransform, ProjectiveTransform

from hw_profiles.geometry import Pose2
from hw_profiles.load import load_camera, load_part
from vision import fiducial
from vision.camera_model import model_of

CAMERA, PART = load_camera("overhead-720p"), load_part("bracket-l")
MODEL = model_of(CAMERA)


def test_plane_homography_is_the_one_scikit_image_estimates() -> None:
    rng = np.random.default_rng(1)
    points = rng.uniform([-80, -60], [80, 60], (40, 2))
    ideal = MODEL.undistort(MODEL.project_plane(points, 16.0))
    theirs = ProjectiveTransform.from_estimate(points, ideal)
    np.testing.assert_allclose(theirs(points), ideal, atol=1e-9)
    ours = MODEL.pinhole_from_plane(16.0)
    np.testing.assert_allclose(ours / ours[2, 2], theirs.params / theirs.params[2, 2], atol=1e-8)


@pytest.mark.parametrize("pixel", [(3.0, 5.0), (640.0, 360.0), (1270.0, 30.0), (900.0, 715.0)])
def test_undistortion_is_the_root_scipy_finds(pixel: tuple[float, float]) -> None:
    k1, k2, p1, p2, k3 = CAMERA.distortion
    (fx, fy), (cx, cy) = CAMERA.focal_px, CAMERA.principal_px

    def misfit(ideal: np.ndarray) -> np.ndarray:
        x, y = ideal
        r2 = x * x + y * y
        radial = 1 + k1 * r2 + k2 * r2**2 + k3 * r2**3
        xd, yd = x * radial + 2 * p1 * x * y + p2 * (r2 + 2 * x * x), y * radial + p1 * (r2 + 2 * y * y) + 2 * p2 * x * y
        return np.array([fx * xd + cx - pixel[0], fy * yd + cy - pixel[1]])

    theirs = least_squares(misfit, [0.0, 0.0], xtol=1e-15, ftol=1e-15, gtol=1e-15).x
    np.testing.assert_allclose(MODEL.undistort(pixel), theirs, atol=1e-9)


@pytest.mark.parametrize("seed", range(6))
def test_rigid_fit_of_a_tag_is_the_least_squares_one(seed: int) -> None:
    rng = np.random.default_rng(seed)
    pose = Pose2(*rng.uniform(-20, 20, 2), rng.uniform(-3, 3))
    known = PART.fiducial.corners_mm()
    px = MODEL.project_plane(pose.apply(known), PART.height_mm) + rng.normal(0, 0.7, (4, 2))
    ours, misfit_mm = fiducial.rigid_pose(MODEL, PART, px)
    seen = MODEL.plane_points(px, PART.height_mm)
    theirs = EuclideanTransform.from_estimate(known, seen)
    np.testing.assert_allclose([ours.x_mm, ours.y_mm], theirs.translation, atol=1e-9)
    assert np.cos(ours.yaw_rad - theirs.rotation) == pytest.approx(1.0, abs=1e-12)
    assert misfit_mm == pytest.approx(np.sqrt(np.mean(theirs.residuals(known, seen) ** 2)))
    _, _, disparity = procrustes(seen, known)  # scaled as well, so it can only be smaller
    assert disparity * np.sum((seen - seen.mean(axis=0)) ** 2) <= 4 * misfit_mm**2 + 1e-9
