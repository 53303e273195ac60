"""Edge fit and checks: accuracy on supersampled tags, and every kernel against a plain twin."""

import math

import numpy as np
import pytest
from scipy import ndimage

from hw_profiles.geometry import Pose2
from tests.benchmarks.made_frames import camera_of, leaning_tag, part_of
from vision import cell_search, edge_checks, edge_fit
from vision.camera_model import CameraModel, model_of
from vision.edge_fit import EdgeTemplate

PART = part_of()
TEMPLATE = EdgeTemplate.of(PART.fiducial)
MODEL = model_of(camera_of())


def fitted(pixels: np.ndarray, start: Pose2, model: CameraModel = MODEL) -> edge_fit.EdgeFit:
    found = edge_fit.fit(model, pixels, (0, 0), TEMPLATE, PART.height_mm, start)
    assert isinstance(found, edge_fit.EdgeFit)
    return found


@pytest.mark.parametrize("yaw_deg", [0.0, 17.0, 45.0, 100.0, -160.0])
def test_a_sharp_tag_is_placed_to_microns(yaw_deg: float) -> None:
    pose = Pose2(8.37, -5.91, math.radians(yaw_deg))
    found = fitted(leaning_tag(MODEL.camera, PART, pose, 0.0, 0.0), Pose2(8.9, -6.3, pose.yaw_rad + 0.05))
    off = pose.inverse() @ found.pose
    assert math.hypot(off.x_mm, off.y_mm) < 0.005
    assert abs(off.yaw_rad) < math.radians(0.03)


def test_covariance_tells_the_scatter_under_noise() -> None:
    pose, rng = Pose2(2.2, 3.1, 0.7), np.random.default_rng(5)
    clean = leaning_tag(MODEL.camera, PART, pose, 0.0, 0.0).astype(float)
    fits = [fitted(np.clip(clean + rng.normal(0, 8, clean.shape), 0, 255).astype(np.uint8), pose) for _ in range(40)]
    scatter = np.std([(f.pose.x_mm, f.pose.y_mm, f.pose.yaw_rad) for f in fits], axis=0)
    believed = np.sqrt(np.mean([np.diag(f.covariance) for f in fits], axis=0))
    assert np.all(scatter < 1.6 * believed)
    assert np.all(scatter > 0.4 * believed)


def test_over_exposure_moves_edges_but_not_the_pose() -> None:
    pose = Pose2(-4.0, 6.0, 0.3)
    clean = leaning_tag(MODEL.camera, PART, pose, 0.0, 0.0).astype(float)
    found = fitted(np.clip(2.2 * clean, 0, 255).astype(np.uint8), pose)
    assert math.hypot(found.pose.x_mm - pose.x_mm, found.pose.y_mm - pose.y_mm) < 0.005


def test_nothing_there_gives_no_fit() -> None:
    blank = np.full((720, 1280), 120, np.uint8)
    found = edge_fit.fit(MODEL, blank, (0, 0), TEMPLATE, PART.height_mm, Pose2(0.0, 0.0, 0.0))
    assert isinstance(found, edge_fit.NoFit)
    assert "no edges" in found.reason


def test_template_edges_separate_black_from_white() -> None:
    inward = TEMPLATE.points - 0.4 * TEMPLATE.cell_mm * TEMPLATE.normals
    outward = TEMPLATE.points + 0.4 * TEMPLATE.cell_mm * TEMPLATE.normals

    def is_white(point: np.ndarray) -> bool:
        if np.abs(point).max() > PART.fiducial.size_mm / 2:
            return True
        return bool(TEMPLATE.white[np.argmin(np.linalg.norm(TEMPLATE.centres - point, axis=1))])

    assert not any(is_white(point) for point in inward)
    assert all(is_white(point) for point in outward)


def test_bilinear_is_linear_interpolation() -> None:
    rng = np.random.default_rng(3)
    grey = rng.integers(0, 256, (30, 40)).astype(np.uint8)
    points = rng.uniform([0, 0], [28.9, 38.9], (200, 2))
    twin = ndimage.map_coordinates(grey.astype(float), points.T, order=1)
    np.testing.assert_allclose([edge_fit.bilinear(grey, u, v) for v, u in points], twin, atol=1e-9)
    assert edge_fit.bilinear(grey, -0.1, 5.0) == -1.0
    assert edge_fit.bilinear(grey, 39.5, 5.0) == -1.0


def twin_read_edge(grey: np.ndarray, u: float, v: float, normal: np.ndarray, n_side: int) -> tuple[float, float, float, float]:
    s = np.arange(-n_side, n_side + 1) * edge_fit.TAP_PX
    taps = ndimage.map_coordinates(grey.astype(float), [v + s * normal[1], u + s * normal[0]], order=1)
    slope, middle = np.maximum(np.diff(taps), 0.0), 0.5 * (s[1:] + s[:-1])
    offset = (slope * middle).sum() / slope.sum()
    ends = slope[0] + slope[-1]
    return offset, taps[-1] - taps[0], (slope * middle**2).sum() / slope.sum() - offset**2, 1 - (n_side - 0.5) * ends / slope.sum()


def test_reading_an_edge_agrees_with_its_twin_and_finds_the_edge() -> None:
    columns = np.arange(60.0)
    grey = np.round(40 + 150 / (1 + np.exp(-(columns - 30.3) / 0.5)))[None, :].repeat(60, axis=0).astype(np.uint8)
    normal = np.array([math.cos(0.2), math.sin(0.2)])
    ours = edge_fit.read_edge(grey, 30.0, 30.0, normal[0], normal[1], 6, np.empty(edge_fit.MAX_TAPS))
    np.testing.assert_allclose(ours, twin_read_edge(grey, 30.0, 30.0, normal, 6), atol=1e-9)
    assert ours[0] == pytest.approx(0.3 / math.cos(0.2), abs=0.03)


def test_an_edge_of_the_wrong_polarity_is_no_edge() -> None:
    grey = np.where(np.arange(60) < 30, 40, 200)[None, :].repeat(60, axis=0).astype(np.uint8)
    assert edge_fit.read_edge(grey, 30.0, 30.0, -1.0, 0.0, 6, np.empty(edge_fit.MAX_TAPS))[1] == 0.0


def test_edge_in_image_is_the_derivative_of_the_offset() -> None:
    x, y, z, normal = 12.0, -7.0, 20.0, np.array([0.6, 0.8])
    u, v, nu, nv, rx, ry = edge_fit.edge_in_image(MODEL.lens, MODEL.motion, x, y, z, *normal)
    h, at = 1e-4, MODEL.project([[x, y, z]])[0]
    np.testing.assert_allclose([u, v], at, atol=1e-9)
    for row, step in ((rx, [h, 0.0, 0.0]), (ry, [0.0, h, 0.0])):
        moved = MODEL.project([np.add([x, y, z], step)])[0]
        assert row == pytest.approx(((moved - at) / h) @ [nu, nv], abs=1e-4)
    tangent = MODEL.project([[x - 0.8 * h, y + 0.6 * h, z]])[0] - at
    assert abs(tangent @ [nu, nv]) < 1e-6


def test_normal_equations_agree_with_their_twin() -> None:
    rng = np.random.default_rng(9)
    samples, rows = np.zeros((50, 6)), rng.normal(size=(50, 4))
    samples[:, 2], samples[:, 3] = rng.normal(0, 0.4, 50), rng.uniform(0, 200, 50)
    matrix, vector = np.empty((4, 4)), np.empty(4)
    rms, n = edge_fit._normal_equations(samples, rows, 0.8, matrix, vector)
    keep = (samples[:, 3] >= 0.4 * np.median(samples[:, 3])) & (np.abs(samples[:, 2]) < 0.8)
    weights = np.where(keep, (1 - (samples[:, 2] / 0.8) ** 2) ** 2, 0.0)
    agrees = keep & (np.abs(samples[:, 2]) < edge_fit.INLIER_PX)
    np.testing.assert_allclose(matrix, rows.T @ (weights[:, None] * rows) + np.diag([0, 0, 0, 1.0]), atol=1e-9)
    np.testing.assert_allclose(vector, rows.T @ (weights * samples[:, 2]), atol=1e-9)
    assert n == agrees.sum()
    assert rms == pytest.approx(np.sqrt(np.mean(samples[agrees, 2] ** 2)))
    np.testing.assert_array_equal(samples[:, 5] > 0, agrees)


def test_median_where_is_the_median_of_what_is_kept() -> None:
    values, keep = np.array([5.0, 1.0, 9.0, 3.0]), np.array([1.0, 0.0, 2.0, 1.0])
    assert edge_fit.median_where(values, keep) == 5.0
    assert edge_fit.median_where(values, np.zeros(4)) == 0.0


def test_quality_of_a_clear_tag_is_perfect_and_a_shifted_one_is_found_out() -> None:
    pose = Pose2(1.0, 2.0, 0.4)
    pixels = leaning_tag(MODEL.camera, PART, pose, 0.0, 0.0)
    found = fitted(pixels, pose)
    clear = edge_checks.judge(MODEL, pixels, (0, 0), TEMPLATE, PART.height_mm, found)
    assert (clear.agreeing_x, clear.agreeing_y, clear.cells_right) == (1.0, 1.0, 1.0)
    assert clear.cells_aside < 0.75
    assert clear.saturated == 0.0
    assert 0.4 < clear.blur_px < 1.0
    aside = edge_fit.EdgeFit(pose @ Pose2(TEMPLATE.cell_mm, 0.0, 0.0), found.covariance, found.residual_px, found.samples)
    wrong = edge_checks.judge(MODEL, pixels, (0, 0), TEMPLATE, PART.height_mm, aside)
    assert wrong.cells_right < 0.75
    assert wrong.cells_aside > 0.9


def test_cell_shares_agree_with_their_twin() -> None:
    pose = Pose2(1.0, 2.0, 0.4)
    rng = np.random.default_rng(4)
    pixels = leaning_tag(MODEL.camera, PART, pose, 0.0, 0.0)
    pixels = np.clip(pixels + rng.normal(0, 60, pixels.shape), 0, 255).astype(np.uint8)
    level = np.array([120.0, 0.3, -0.2, 640.0, 340.0])
    ours = edge_checks._cell_shares(
        pixels, 0, 0, MODEL.lens, MODEL.motion, 20.0, TEMPLATE.centres, TEMPLATE.white, TEMPLATE.cell_mm, pose.as_array(), level, 30.0
    )  # fmt: skip

    def share(shift: tuple[int, int]) -> float:
        px = MODEL.project_plane(pose.apply(TEMPLATE.centres + TEMPLATE.cell_mm * np.array(shift)), 20.0)
        value = ndimage.map_coordinates(pixels.astype(float), px[:, ::-1].T, order=1)
        beyond = value - level[0] - (px - level[3:]) @ level[1:3]
        return float(np.mean(np.where(TEMPLATE.white, beyond > 30.0, beyond < -30.0)))

    assert ours[0] == pytest.approx(share((0, 0)))
    assert ours[1] == pytest.approx(max(share((i, j)) for i in (-1, 0, 1) for j in (-1, 0, 1) if (i, j) != (0, 0)))


def test_blur_is_measured() -> None:
    pose, widths = Pose2(0.0, 0.0, 0.2), []
    pixels = leaning_tag(MODEL.camera, PART, pose, 0.0, 0.0)
    for sigma in (0.5, 1.0, 1.5):
        soft = ndimage.gaussian_filter(pixels.astype(float), sigma).astype(np.uint8)
        widths.append(edge_checks.judge(MODEL, soft, (0, 0), TEMPLATE, PART.height_mm, fitted(soft, pose)).blur_px)
    assert widths == sorted(widths)
    assert widths[2] - widths[0] > 0.4


@pytest.mark.parametrize("about_deg", [0.0, 60.0, 150.0, 270.0])
def test_a_leaning_tag_is_told_from_a_flat_one(about_deg: float) -> None:
    pose = Pose2(3.0, -4.0, 0.5)
    tilts = []
    for lean_deg in (0.0, 4.0):
        pixels = leaning_tag(MODEL.camera, PART, pose, math.radians(lean_deg), math.radians(about_deg))
        quality = edge_checks.judge(MODEL, pixels, (0, 0), TEMPLATE, PART.height_mm, fitted(pixels, pose))
        tilts.append(math.degrees(quality.tilt_rad))
    assert tilts[0] < 0.5
    assert 2.5 < tilts[1] < 5.5


def test_search_finds_the_tag_from_a_cell_and_a_half_away() -> None:
    pose = Pose2(3.0, -4.0, 0.5)
    pixels = leaning_tag(MODEL.camera, PART, pose, 0.0, 0.0)
    for off in ((2.8, -2.0, 0.15), (-1.5, 2.9, -0.18), (0.0, 0.0, 0.0)):
        start = Pose2(pose.x_mm + off[0], pose.y_mm + off[1], pose.yaw_rad + off[2])
        found = cell_search.search(MODEL, pixels, (0, 0), TEMPLATE, PART.height_mm, start, 3.0, 0.21)
        assert math.hypot(found.x_mm - pose.x_mm, found.y_mm - pose.y_mm) < 0.4 * TEMPLATE.cell_mm
        assert abs(found.yaw_rad - pose.yaw_rad) < math.radians(4.0)


@pytest.mark.parametrize("off_mm", [-0.6, 0.0, 0.8])
def test_a_height_unlike_the_profile_s_shows_in_the_size_of_the_tag(off_mm: float) -> None:
    pose = Pose2(3.0, -4.0, 0.5)
    pixels = leaning_tag(MODEL.camera, PART, pose, 0.0, 0.0)
    believed = PART.height_mm - off_mm
    found = edge_fit.fit(MODEL, pixels, (0, 0), TEMPLATE, believed, pose)
    assert isinstance(found, edge_fit.EdgeFit)
    quality = edge_checks.judge(MODEL, pixels, (0, 0), TEMPLATE, believed, found)
    assert quality.height_off_mm == pytest.approx(off_mm, abs=0.15)
    assert 0.0 < quality.height_sd_mm < 0.3
