"""Camera model: hand frame to pixels and back, against OpenCV and finite differences."""

import cv2
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hw_profiles.camera import Mount
from hw_profiles.load import load_camera
from vision.camera_model import CameraModel, project_with_slope

CAMERA = load_camera("overhead-720p")
LENSES = [(0.0,) * 5, (0.08, -0.12, 0.0005, -0.0004, 0.0), (-0.25, 0.08, 0.001, -0.002, 0.01)]


def model_with(distortion: tuple[float, ...], roll_deg: float = 0.0) -> CameraModel:
    mount = Mount(eye_mm=(12.0, -111.0, 415.0), target_mm=(3.0, -2.0, 0.0), roll_deg=roll_deg)
    return CameraModel(CAMERA.model_copy(update={"distortion": distortion, "mount": mount}))


@pytest.mark.parametrize("distortion", LENSES)
def test_projection_agrees_with_opencv(distortion: tuple[float, ...]) -> None:
    model = model_with(distortion, 20.0)
    points = np.random.default_rng(1).uniform([-100, -60, 0], [100, 60, 40], (200, 3))
    turn, _ = cv2.Rodrigues(model.motion[:, :3])
    theirs, _ = cv2.projectPoints(points, turn, model.motion[:, 3], model.camera.matrix, np.array(distortion))
    np.testing.assert_allclose(model.project(points), np.asarray(theirs).reshape(-1, 2), atol=1e-9)


@pytest.mark.parametrize("distortion", LENSES)
def test_pixels_of_a_plane_lead_back_to_its_points(distortion: tuple[float, ...]) -> None:
    model = model_with(distortion, -35.0)
    points = np.random.default_rng(2).uniform([-100, -60], [100, 60], (300, 2))
    for z_mm in (0.0, 25.6):
        np.testing.assert_allclose(model.plane_points(model.project_plane(points, z_mm), z_mm), points, atol=1e-7)


@given(st.floats(-90, 90), st.floats(-60, 60), st.floats(0, 40))
@settings(max_examples=60, deadline=None)
def test_slope_of_the_projection_is_its_derivative(x: float, y: float, z: float) -> None:
    model = model_with(LENSES[2])
    _, _, ux, uy, vx, vy = project_with_slope(model.lens, model.motion, x, y, z)
    h = 1e-4
    along_x = (model.project([[x + h, y, z]]) - model.project([[x - h, y, z]]))[0] / (2 * h)
    along_y = (model.project([[x, y + h, z]]) - model.project([[x, y - h, z]]))[0] / (2 * h)
    np.testing.assert_allclose([ux, vx, uy, vy], [*along_x, *along_y], atol=1e-6)


def test_image_up_is_hand_up_and_right_is_right() -> None:
    model = CameraModel(CAMERA)
    middle, right, up = model.project_plane([[0.0, 0.0], [10.0, 0.0], [0.0, 10.0]], 0.0)
    assert right[0] > middle[0] + 10
    assert up[1] < middle[1] - 10


def test_scale_is_the_root_of_the_area() -> None:
    model = CameraModel(CAMERA)
    square = model.project_plane([[-0.5, -0.5], [0.5, -0.5], [0.5, 0.5], [-0.5, 0.5]], 20.0)
    area = cv2.contourArea(square.astype(np.float32))
    assert model.px_per_mm((0.0, 0.0), 20.0) == pytest.approx(area**0.5, rel=1e-3)
