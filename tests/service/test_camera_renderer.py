"""The rendered camera: deterministic, unbiased, fingers above the part, noise as stated; its kernels against plain twins."""

import math

import numpy as np
import pytest

from control.model.kinematics import HandModel, contact_centres
from hw_profiles.geometry import Array, Pose2
from hw_profiles.load import load_rig, shipped
from service.simulated import brush
from service.simulated import camera as rendering
from service.simulated.camera import FINGER_ABOVE_MM, Renderer
from tests.benchmarks.made_frames import camera_of, leaning_tag, part_of
from vision.camera_model import model_of

RIG = load_rig("trefoil")
HAND = HandModel(RIG.hand)
AWAY = np.array(HAND.low)
POSE = Pose2(4.0, -3.0, 0.4)
MONO = camera_of().model_copy(update={"pixel_format": "mono8"})


def test_the_same_seed_and_calls_give_the_same_pixels_and_another_seed_does_not() -> None:
    one, two, other = (Renderer(MONO, HAND, RIG.part, seed) for seed in (1, 1, 2))
    for call in range(2):
        options = {"occlusion": 0.3 * call, "noise": 1.0 + call}
        first = one.render(POSE, AWAY, **options)
        np.testing.assert_array_equal(first, two.render(POSE, AWAY, **options))
        assert (first != other.render(POSE, AWAY, **options)).any()


@pytest.mark.parametrize("rig_name", shipped("rigs"))
@pytest.mark.parametrize("part_name", shipped("parts"))
def test_every_rig_and_part_is_rendered_in_the_profile_s_format(rig_name: str, part_name: str) -> None:
    rig = load_rig(rig_name, part_name)
    small = rig.camera.model_copy(update={"width_px": 320, "height_px": 180, "focal_px": (262.5, 262.5), "principal_px": (160.0, 89.0)})
    pixels = Renderer(small, HandModel(rig.hand), rig.part, 0).render(POSE, np.array(HandModel(rig.hand).home))
    assert pixels.shape == (180, 320, 3)
    assert pixels.dtype == np.uint8


def test_the_tag_is_where_supersampling_puts_it() -> None:
    part = part_of()
    rendered = Renderer(MONO, HAND, part, 0).render(POSE, AWAY, noise=0.0).astype(float)
    twin = leaning_tag(MONO, part, POSE, 0.0, 0.0).astype(float)
    u, v = model_of(MONO).project_plane(POSE.xy_mm, part.height_mm).astype(int)
    ours, theirs = (image[v - 22 : v + 23, u - 22 : u + 23] for image in (rendered, twin))
    inside = theirs != 150.0
    assert np.corrcoef(ours[inside], theirs[inside])[0, 1] > 0.997
    assert abs(np.mean(ours[inside] - theirs[inside])) < 4.0


def test_fingers_lie_above_the_part() -> None:
    renderer = Renderer(RIG.camera, HAND, RIG.part, 0)
    tip = contact_centres(HAND, np.array(HAND.home))[0]
    pixels = renderer.render(Pose2(float(tip[0]), float(tip[1]), 0.0), np.array(HAND.home), noise=0.0)
    u, v = np.round(model_of(RIG.camera).project_plane(tip, RIG.part.height_mm + FINGER_ABOVE_MM)).astype(int)
    assert np.all(pixels[v, u] < 110)
    assert np.ptp(pixels[v, u].astype(int)) < 15


def test_noise_has_the_stated_spread_on_plate_part_and_fingers() -> None:
    renderer = Renderer(RIG.camera, HAND, RIG.part, 3)
    joints = np.array(HAND.home)
    frames = np.stack([renderer.render(Pose2(40.0, 20.0, 0.2), joints, noise=1.5).astype(float) for _ in range(12)])
    spread = frames.std(axis=0, ddof=1)
    model = model_of(RIG.camera)
    tip = model.project_plane(contact_centres(HAND, joints)[1], RIG.part.height_mm + FINGER_ABOVE_MM)
    face = model.project_plane(np.array([40.0, 20.0 - 14.0]), RIG.part.height_mm)
    for u, v in np.round([(100, 100), tip, face]).astype(int):
        assert spread[v - 4 : v + 5, u - 4 : u + 5].mean() == pytest.approx(1.5 * RIG.camera.noise_sd, rel=0.15)


def test_a_moving_part_is_smeared_and_a_mono_frame_is_two_dimensional() -> None:
    slow = MONO.model_copy(update={"exposure_ms": 19.0})
    renderer = Renderer(slow, HAND, RIG.part, 0)
    still = renderer.render(POSE, AWAY, noise=0.0).astype(float)
    moved = renderer.render(POSE, AWAY, noise=0.0, twist=np.array([200.0, 0.0, 0.0])).astype(float)
    assert still.shape == (720, 1280)
    u, v = model_of(slow).project_plane(POSE.xy_mm, RIG.part.height_mm).astype(int)
    sharp, smeared = (np.abs(np.diff(image[v - 15 : v + 15, u - 15 : u + 15], axis=1)).sum() for image in (still, moved))
    assert smeared < 0.7 * sharp


def test_occlusion_hides_the_stated_share_of_the_tag() -> None:
    renderer = Renderer(MONO, HAND, part_of(), 5)
    clear = renderer.render(POSE, AWAY, noise=0.0).astype(int)
    px = np.round(model_of(MONO).project_plane(POSE.apply(np.mgrid[-7:7.1:0.5, -7:7.1:0.5].reshape(2, -1).T), 20.0)).astype(int)
    shares = [
        np.mean(np.abs(renderer.render(POSE, AWAY, noise=0.0, occlusion=0.4).astype(int) - clear)[px[:, 1], px[:, 0]] > 8)
        for _ in range(20)
    ]
    assert 0.25 < np.mean(shares) < 0.5


def flat_map(height: int, width: int) -> np.ndarray:
    """A plane that the camera looks at straight, one millimetre a pixel."""
    v, u = np.mgrid[:height, :width].astype(np.float32)
    return np.stack([u, v], axis=-1)


def distance(points: Array, a: Array, b: Array) -> Array:
    t = np.clip(((points - a) @ (b - a)) / max(float((b - a) @ (b - a)), 1e-12), 0, 1)
    return np.linalg.norm(points - a - t[..., None] * (b - a), axis=-1)


def test_row_span_holds_every_pixel_within_reach() -> None:
    rng = np.random.default_rng(1)
    for _ in range(60):
        bar = np.array([*rng.uniform(-20, 80, 4), rng.uniform(1, 12)])
        plane = flat_map(60, 60).astype(float)
        near = distance(plane, bar[:2], bar[2:4]) <= bar[4]
        for v in range(60):
            first, last = brush.row_span(bar, v, 60)
            assert near[v].sum() == near[v, first:last].sum()


def test_capsules_are_drawn_where_their_distance_says() -> None:
    plane, canvas = flat_map(60, 80), np.full((60, 80, 3), 10, np.uint8)
    capsule = np.array([[15.0, 20.0, 60.0, 40.0, 6.0, 200.0, 150.0, 100.0]])
    bars, quiet = np.array([[15.0, 20.0, 60.0, 40.0, 9.0]]), np.zeros(brush.BANK, np.int8)
    brush.draw_capsules(canvas, plane, capsule, bars, rendering.LIGHT, 1.0, quiet, 0)
    away = distance(plane.astype(float), capsule[0, :2], capsule[0, 2:4])
    assert np.all(canvas[away > 6.6] == 10)
    assert np.all(canvas[away < 5.0] > 20)
    on_axis = canvas[30, 37].astype(float)  # the middle of the bar, lit from above: shade 0.55 + 0.62 · light_z
    np.testing.assert_allclose(on_axis, capsule[0, 5:] * (0.55 + 0.62 * rendering.LIGHT[2]), atol=3.0)


def test_shadows_darken_by_their_depth_and_no_farther_than_their_edge() -> None:
    plane, canvas = flat_map(60, 80), np.full((60, 80, 1), 200, np.uint8)
    capsule, bars = np.array([[20.0, 30.0, 60.0, 30.0, 5.0, 0, 0, 0]]), np.array([[20.0, 30.0, 60.0, 30.0, 12.0]])
    brush.shade(canvas, plane, capsule, bars, 4.0, 0.3)
    away = distance(plane.astype(float), capsule[0, :2], capsule[0, 2:4])
    assert np.all(canvas[away > 10.5] == 200)
    assert np.all(np.abs(canvas[away < 0.5].astype(int) - 140) <= 3)


def test_texture_is_interpolated_and_averaged_over_the_poses() -> None:
    rng = np.random.default_rng(2)
    texture = rng.integers(0, 256, (20, 20, 2)).astype(np.uint8)
    texture[..., 1] = 255
    plane, canvas, quiet = flat_map(12, 12), np.zeros((12, 12, 1), np.uint8), np.zeros(brush.BANK, np.int8)
    poses = np.array([[6.0, 6.0, 0.3], [6.4, 6.1, 0.35]])
    low, high = np.array([0, 0]), np.array([12, 12])
    brush.draw_texture(canvas, plane, texture, np.array([1.3, 9.2, 9.7]), poses, low, high, quiet, 0)
    wanted = []
    for x, y, yaw in poses:
        off = plane.astype(float) - [x, y]
        column = 1.3 * (math.cos(yaw) * off[..., 0] + math.sin(yaw) * off[..., 1]) + 9.2
        row = 1.3 * (-math.sin(yaw) * off[..., 0] + math.cos(yaw) * off[..., 1]) + 9.7
        i, j = np.floor(row).astype(int), np.floor(column).astype(int)
        ok = (i >= 0) & (j >= 0) & (i < 19) & (j < 19)
        i, j, fr, fc = np.clip(i, 0, 18), np.clip(j, 0, 18), row - i, column - j
        grey = texture[..., 0].astype(float)
        value = (1 - fr) * ((1 - fc) * grey[i, j] + fc * grey[i, j + 1]) + fr * ((1 - fc) * grey[i + 1, j] + fc * grey[i + 1, j + 1])
        wanted.append(np.where(ok, value, 0.0))
    np.testing.assert_allclose(canvas[..., 0], np.mean(wanted, axis=0), atol=0.51)


def test_walls_are_blended_by_their_cover() -> None:
    canvas = np.full((6, 6, 3), 100, np.uint8)
    cover, shade = np.full((2, 3), 255, np.uint8), np.full((2, 3), 50, np.uint8)
    cover[0, 0] = shade[0, 0] = 0
    brush.draw_shaded(canvas, cover, shade, np.array([1.0, 2.0, 3.0]), 1, 2, np.zeros(brush.BANK, np.int8), 0)
    np.testing.assert_array_equal(canvas[2, 1], [100, 100, 100])
    np.testing.assert_array_equal(canvas[3, 3], [50, 100, 150])
    assert np.all(canvas[4:] == 100)
