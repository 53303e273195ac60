"""Tracker: precise on good frames, silent on bad ones, never wrong, the same for the same frames."""

import math

import cv2
import numpy as np
import pytest

from hw_profiles.geometry import Pose2, wrap_angle
from hw_profiles.observation import NoPose, PartPose
from hw_profiles.part import Fiducial
from service.simulated.camera import Renderer
from tests.benchmarks.made_frames import FRAME_US, Bench, Spoiled, camera_of, leaning_tag, motion, part_of
from vision import fiducial
from vision.camera_model import model_of
from vision.frames import Frame
from vision.tracker import Tracker


@pytest.fixture(scope="module")
def bench() -> Bench:
    return Bench(camera_of(), part_of(), 3)


def off(truth: Pose2, seen: Pose2) -> tuple[float, float]:
    return math.hypot(seen.x_mm - truth.x_mm, seen.y_mm - truth.y_mm), abs(math.degrees(wrap_angle(seen.yaw_rad - truth.yaw_rad)))


def run(bench: Bench, n: int, seed: int, spoiled: Spoiled) -> tuple[np.ndarray, int]:
    """Errors (m, 2) [mm, deg] of the poses of a run whose first frame is clear, and how many frames gave none."""
    tracker, found, none = Tracker(bench.camera, bench.part), [], 0
    for index, (truth, frame) in enumerate(bench.run(n, np.random.default_rng(seed), spoiled)):
        if index == 0:
            frame = bench.frame(0, truth.as_array(), np.zeros(3), Spoiled())
        sight = tracker.observe(frame).sight
        if isinstance(sight, PartPose):
            found.append(off(truth, sight.measured))
        else:
            none += 1
    return np.array(found), none


def test_noise_at_720p_is_below_a_hundredth_of_a_millimetre(bench: Bench) -> None:
    errors, none = run(bench, 40, 11, Spoiled())
    assert none == 0
    assert np.sqrt(np.mean(errors[:, 0] ** 2) / 2) < 0.01
    assert np.sqrt(np.mean(errors[:, 1] ** 2)) < 0.05


@pytest.mark.parametrize(
    "spoiled",
    [
        Spoiled(occlusion=0.4),
        Spoiled(blur_px=1.5),
        Spoiled(gain=0.3),
        Spoiled(gain=2.0),
        Spoiled(glare=150.0),
        Spoiled(exposure_ms=20.0),
        Spoiled(occlusion=0.35, blur_px=1.0, gain=0.5, noise=2.0, glare=60.0, exposure_ms=8.0),
    ],
    ids=["40 % covered", "blur", "dark", "bright", "glare", "smear", "all"],
)
def test_spoiled_frames_are_tracked_and_never_wrong(bench: Bench, spoiled: Spoiled) -> None:
    errors, none = run(bench, 25, 12, spoiled)
    assert none <= 2
    assert errors[:, 0].max() < 0.5
    assert errors[:, 1].max() < 2.0


def test_a_covered_tag_gives_no_pose_and_comes_back(bench: Bench) -> None:
    tracker, pose = Tracker(bench.camera, bench.part), np.array([3.0, -2.0, 0.5])
    assert isinstance(tracker.observe(bench.frame(0, pose, np.zeros(3), Spoiled())).sight, PartPose)
    for index in range(1, 30):
        sight = tracker.observe(bench.frame(index, pose, np.zeros(3), Spoiled(occlusion=1.0))).sight
        assert isinstance(sight, NoPose)
        assert "covered" in sight.reason
    far = np.array([-20.0, 12.0, -2.0])
    sight = tracker.observe(bench.frame(30, far, np.zeros(3), Spoiled())).sight
    assert isinstance(sight, PartPose)
    assert off(Pose2.from_array(far), sight.measured)[0] < 0.05


def test_a_leap_between_two_frames_is_followed_when_the_tag_is_plain_to_see(bench: Bench) -> None:
    tracker = Tracker(bench.camera, bench.part)
    for index, pose in enumerate(([0.0, 0.0, 0.0], [25.0, -10.0, 2.0], [25.0, -10.0, 2.0])):
        sight = tracker.observe(bench.frame(index, np.array(pose), np.zeros(3), Spoiled())).sight
        assert isinstance(sight, PartPose)
        assert off(Pose2.from_array(pose), sight.measured)[0] < 0.05


def test_the_same_frames_give_the_same_observations(bench: Bench) -> None:
    frames = [frame for _, frame in bench.run(15, np.random.default_rng(4), Spoiled(occlusion=0.3))]
    first, second = Tracker(bench.camera, bench.part), Tracker(bench.camera, bench.part)
    for frame in frames:
        one, two = first.observe(frame), second.observe(frame)
        assert type(one.sight) is type(two.sight)
        if isinstance(one.sight, PartPose) and isinstance(two.sight, PartPose):
            assert one.sight.measured == two.sight.measured
            np.testing.assert_array_equal(one.sight.covariance, two.sight.covariance)
            np.testing.assert_array_equal(one.sight.twist, two.sight.twist)


def test_filter_reports_the_motion_at_the_time_of_capture(bench: Bench) -> None:
    tracker, twist = Tracker(bench.camera, bench.part), np.array([30.0, 10.0, 1.0])
    for index in range(25):
        pose = np.array([-8.0, -3.0, 0.1]) + twist * index * FRAME_US * 1e-6
        seen = tracker.observe(bench.frame(index, pose, twist, Spoiled()))
    assert seen.captured_at_us == 24 * FRAME_US
    assert isinstance(seen.sight, PartPose)
    assert np.all(np.abs(seen.sight.twist - twist) < [1.5, 1.5, 0.08])
    assert off(Pose2.from_array(pose), seen.sight.filtered)[0] < 0.02


def test_several_parts_are_told_apart_by_their_ids() -> None:
    camera, parts = camera_of(), (part_of("roller-40"), part_of("block-36"))
    poses = (Pose2(-25.0, 5.0, 0.4), Pose2(28.0, -8.0, -1.3))
    left, right = (
        Bench(camera, part, 1).frame(0, pose.as_array(), np.zeros(3), Spoiled()) for part, pose in zip(parts, poses, strict=True)
    )
    joined = left.pixels.copy()
    joined[:, 640:] = right.pixels[:, 640:]
    tracker = Tracker(camera, parts)
    for index in range(2):
        seen = tracker.observe_all(Frame(index * FRAME_US, joined))
        for truth, observation in zip(poses, seen, strict=True):
            assert isinstance(observation.sight, PartPose)
            assert off(truth, observation.sight.measured)[0] < 0.05


def test_a_tag_of_another_id_is_not_seen(bench: Bench) -> None:
    other = bench.part.model_copy(update={"fiducial": bench.part.fiducial.model_copy(update={"id": 77})})
    frame = bench.frame(0, np.array([1.0, 1.0, 1.0]), np.zeros(3), Spoiled())
    assert isinstance(Tracker(bench.camera, other).observe(frame).sight, NoPose)


def test_a_tag_of_another_size_is_refused_by_name(bench: Bench) -> None:
    other = part_of(tag_mm=12.0)
    sight = Tracker(bench.camera, other).observe(bench.frame(0, np.zeros(3), np.zeros(3), Spoiled())).sight
    assert isinstance(sight, NoPose)


def test_a_tipping_part_gives_no_pose() -> None:
    camera, part = camera_of(), part_of()
    for lean_deg in (7.0, 9.0, 12.0):
        pixels = cv2.cvtColor(leaning_tag(camera, part, Pose2(2.0, 1.0, 0.3), math.radians(lean_deg), 0.8), cv2.COLOR_GRAY2BGR)
        sight = Tracker(camera, part).observe(Frame(0, np.asarray(pixels, np.uint8))).sight
        assert isinstance(sight, NoPose)
        assert "tipping" in sight.reason


def test_a_blurred_tag_is_named_as_blurred(bench: Bench) -> None:
    tracker, pose = Tracker(bench.camera, bench.part), np.array([2.0, 2.0, 0.2])
    tracker.observe(bench.frame(0, pose, np.zeros(3), Spoiled()))
    sight = tracker.observe(bench.frame(1, pose, np.zeros(3), Spoiled(blur_px=3.2))).sight
    assert isinstance(sight, NoPose)
    assert "blurred" in sight.reason
    assert "exposure" in sight.reason


def test_frames_of_another_size_are_misuse(bench: Bench) -> None:
    with pytest.raises(ValueError, match="640 × 360 px; camera 'overhead-720p' gives 1280 × 720"):
        Tracker(bench.camera, bench.part).observe(Frame(0, np.zeros((360, 640, 3), np.uint8)))


def test_mono_frames_are_tracked_as_well() -> None:
    camera = camera_of().model_copy(update={"pixel_format": "mono8"})
    mono = Bench(camera, part_of(), 2)
    frame = mono.frame(0, np.array([4.0, -6.0, 1.0]), np.zeros(3), Spoiled())
    assert frame.pixels.ndim == 2
    sight = Tracker(camera, mono.part).observe(frame).sight
    assert isinstance(sight, PartPose)
    assert off(Pose2(4.0, -6.0, 1.0), sight.measured)[0] < 0.02


@pytest.mark.parametrize("tilt_deg", [0.0, 25.0])
def test_bias_stays_small_at_any_tilt_of_the_camera(tilt_deg: float) -> None:
    tilted = Bench(camera_of(tilt_deg=tilt_deg, roll_deg=30.0), part_of("nut-m30"), 6)
    tracker, found = Tracker(tilted.camera, tilted.part), []
    poses, _ = motion(np.random.default_rng(7), 15)
    for index, pose in enumerate(poses):
        sight = tracker.observe(tilted.frame(index, pose, np.zeros(3), Spoiled())).sight
        assert isinstance(sight, PartPose)
        found.append(sight.measured.as_array()[:2] - pose[:2])
    assert np.linalg.norm(np.mean(found, axis=0)) < 0.005


def test_corners_of_acquisition_are_in_full_resolution_pixels() -> None:
    camera, part = camera_of(), part_of(tag_mm=20.0)
    model, pose = model_of(camera), Pose2(5.0, -3.0, 0.6)
    pixels = leaning_tag(camera, part, pose, 0.0, 0.0)
    finder = fiducial.Finder(model, (part,))
    assert finder.shrink == 2
    tag = part.fiducial
    assert isinstance(tag, Fiducial)
    wanted = model.project_plane(pose.apply(tag.corners_mm()), part.height_mm)
    for shrink in (1, 2):
        for corner in ((0, 0), (501, 203)):
            (sighting,) = finder.find(pixels[corner[1] :, corner[0] :], corner, shrink)
            off_px = sighting.corners_px - wanted
            assert np.abs(off_px.mean(axis=0)).max() < 0.35  # a half-pixel mistake at half resolution would be 0.5 to 1
            assert np.abs(off_px).max() < 3.0


def test_rigid_pose_is_exact_for_exact_corners() -> None:
    model, part = model_of(camera_of(tilt_deg=25.0)), part_of("bracket-l")
    pose = Pose2(-7.0, 4.0, 2.5)
    corners = model.project_plane(pose.apply(part.fiducial.corners_mm()), part.height_mm)
    found, misfit_mm = fiducial.rigid_pose(model, part, corners)
    assert misfit_mm < 1e-6
    np.testing.assert_allclose(found.as_array(), pose.as_array(), atol=1e-6)


def test_no_tag_in_clutter_and_under_fingers(bench: Bench) -> None:
    rng, tracker = np.random.default_rng(8), Tracker(bench.camera, bench.part)
    bare = replace_tag(bench)
    for index in range(20):
        joints = rng.uniform(bench.hand.low, bench.hand.high)
        pixels = bare.render(Pose2(*rng.uniform(-15, 15, 3)), joints)
        assert isinstance(tracker.observe(Frame(index * FRAME_US, pixels)).sight, NoPose)


def replace_tag(bench: Bench) -> Renderer:
    """The bench with a part whose tag is another."""
    other = bench.part.fiducial.model_copy(update={"id": 300})
    return Renderer(bench.camera, bench.hand, bench.part.model_copy(update={"fiducial": other}), 5)
