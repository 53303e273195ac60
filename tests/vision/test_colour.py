"""Coloured spots: precise, indifferent to light, silent when covered; and teaching them."""

import datetime
import math

import numpy as np
import pytest
from scipy import ndimage

from hw_profiles.errors import CalibrationError, ProfileError
from hw_profiles.geometry import Pose2
from hw_profiles.load import parse
from hw_profiles.observation import NoPose, PartPose
from hw_profiles.part import Fiducial, Part, Spots
from tests.benchmarks.made_frames import Bench, Spoiled, camera_of, part_of
from tests.benchmarks.vision import spots_part
from vision import colour, teach
from vision.camera_model import model_of
from vision.frames import Frame
from vision.tracker import Tracker

TODAY = datetime.date(2026, 3, 4)
TEXT = """
name = "spotted"
height_mm = 20.0
mass_g = 68.0
[shape]
kind = "disc"
diameter_mm = 40.0
[fiducial]
family = "two-spots"
spot_mm = 8.0
spacing_mm = 15.0
first_rgb = [205, 40, 50]
second_rgb = [30, 90, 200]
"""


@pytest.fixture(scope="module")
def bench() -> Bench:
    return Bench(camera_of(), spots_part(), 3)


def run(bench: Bench, n: int, spoiled: Spoiled, tint: np.ndarray | None = None) -> tuple[np.ndarray, list[str]]:
    tracker, found, reasons = Tracker(bench.camera, bench.part), [], []
    for truth, frame in bench.run(n, np.random.default_rng(21), spoiled):
        if tint is not None:
            frame = Frame(frame.captured_at_us, np.clip(frame.pixels * tint, 0, 255).astype(np.uint8))
        sight = tracker.observe(frame).sight
        if isinstance(sight, PartPose):
            apart = truth.inverse() @ sight.measured
            found.append((math.hypot(apart.x_mm, apart.y_mm), abs(math.degrees(apart.yaw_rad))))
        else:
            reasons.append(sight.reason)
    return np.array(found).reshape(-1, 2), reasons


@pytest.mark.parametrize("spoiled", [Spoiled(), Spoiled(gain=0.3), Spoiled(gain=2.0), Spoiled(noise=3.0), Spoiled(blur_px=1.5)])
def test_spots_are_placed_to_five_hundredths_in_any_light(bench: Bench, spoiled: Spoiled) -> None:
    errors, reasons = run(bench, 25, spoiled)
    assert reasons == []
    assert errors[:, 0].max() < 0.05
    assert errors[:, 1].max() < 0.3


@pytest.mark.parametrize("tint", [(0.6, 0.8, 1.0), (1.0, 0.8, 0.6)])
def test_white_balance_does_not_matter(bench: Bench, tint: tuple[float, float, float]) -> None:
    errors, reasons = run(bench, 10, Spoiled(), np.array(tint))
    assert reasons == []
    assert errors[:, 0].max() < 0.05


def test_covered_spots_give_no_wrong_pose(bench: Bench) -> None:
    errors, reasons = run(bench, 40, Spoiled(occlusion=0.25))
    assert len(reasons) > 30
    assert all("spot" in reason for reason in reasons)
    assert np.all(errors < [0.5, 2.0])


def test_a_picture_without_spots_gives_no_pose() -> None:
    plain = Bench(camera_of(), part_of(), 3)
    frame = plain.frame(0, np.zeros(3), np.zeros(3), Spoiled())
    sight = Tracker(plain.camera, spots_part()).observe(frame).sight
    assert isinstance(sight, NoPose)
    assert "no first colour spot" in sight.reason


def test_a_mono_camera_cannot_take_spots() -> None:
    with pytest.raises(ValueError, match="mono8; allowed: bgr8"):
        Tracker(camera_of().model_copy(update={"pixel_format": "mono8"}), spots_part())


def test_tags_stay_the_default_family_of_a_profile() -> None:
    text = TEXT.replace('family = "two-spots"\n', "id = 7\nsize_mm = 16.0\n")
    text = text[: text.index("spot_mm")]
    assert isinstance(parse(Part, text, "own.toml").fiducial, Fiducial)
    assert isinstance(parse(Part, TEXT, "own.toml").fiducial, Spots)


@pytest.mark.parametrize(
    ("old", "new", "wanted"),
    [
        ("spacing_mm = 15.0", "spacing_mm = 11.0", ["spacing_mm 11", "1.5 times spot_mm 8"]),
        ("[30, 90, 200]", "[210, 50, 60]", ["too alike"]),
        ("[30, 90, 200]", "[120, 120, 130]", ["second_rgb", "vivid"]),
        ("spacing_mm = 15.0", "spacing_mm = 33.0", ["fiducial.spacing_mm 33", "outline"]),
        ("spot_mm", "spt_mm", ["fiducial.spt_mm", "did you mean spot_mm"]),
    ],
)
def test_bad_spots_are_refused_by_name(old: str, new: str, wanted: list[str]) -> None:
    with pytest.raises(ProfileError) as caught:
        parse(Part, TEXT.replace(old, new, 1), "own.toml")
    for words in wanted:
        assert words in str(caught.value)


def test_classification_agrees_with_its_twin() -> None:
    rng = np.random.default_rng(5)
    pixels = rng.integers(0, 256, (40, 60, 3)).astype(np.uint8)
    plate, chromas = np.array([90.0, 110.0, 120.0]), np.array([[0.7, 0.15], [0.1, 0.3]])
    ours = colour._classify(pixels, plate, chromas, 2)
    part = pixels[::2, ::2].reshape(-1, 3)
    away = np.linalg.norm(colour.chroma_of(part, plate)[:, None] - chromas, axis=2)
    twin = np.where(away.min(axis=1) < colour.CHROMA_REACH, away.argmin(axis=1) + 1, 0)
    twin[part.max(axis=1) < colour.LEAST_LEVEL] = 0
    np.testing.assert_array_equal(ours.ravel(), twin)


def test_unmixing_finds_the_middle_of_a_drawn_disc() -> None:
    camera, spots, centre = camera_of(), spots_part().fiducial, np.array([3.21, -4.56])
    assert isinstance(spots, Spots)
    model, fine = model_of(camera), 8
    u, v = model.project_plane(centre, 20.0).astype(int)
    steps = (np.arange(40 * fine) + 0.5) / fine - 0.5
    columns, rows = np.meshgrid(u - 20 + steps, v - 20 + steps)
    away = np.linalg.norm(model.plane_points(np.stack([columns, rows], axis=-1), 20.0) - centre, axis=-1)
    share = (away <= spots.spot_mm / 2).astype(float).reshape(40, fine, 40, fine).mean(axis=(1, 3))
    cut = np.round(share[..., None] * np.array([40.0, 40.0, 200.0]) + (1 - share[..., None]) * 220.0)
    cut = ndimage.gaussian_filter(cut, (0.5, 0.5, 0)).round().astype(np.uint8)
    found = colour.refine(model, cut, (u - 20, v - 20), spots, 20.0, np.add(centre, [0.5, -0.4]))
    assert found is not None
    assert np.linalg.norm(found.centre_mm - centre) < 0.01
    assert found.area_mm2 == pytest.approx(math.pi * spots.spot_mm**2 / 4, rel=0.01)
    assert found.ovalness < 0.02


def test_taught_colours_find_spots_that_the_printed_ones_do_not() -> None:
    printed = spots_part()
    assert isinstance(printed.fiducial, Spots)
    believed = printed.fiducial.model_copy(update={"first_rgb": (200, 190, 40)})
    part = printed.model_copy(update={"fiducial": believed})
    camera, model = camera_of(), model_of(camera_of())
    real = Bench(camera, printed, 9)
    frames = [frame for _, frame in real.run(6, np.random.default_rng(2), Spoiled())]
    assert isinstance(Tracker(camera, part).observe(frames[0]).sight, NoPose)
    poses = [pose for pose, _ in real.run(6, np.random.default_rng(2), Spoiled())]
    samples = [
        teach.sample(model, part, frame.pixels, model.project_plane(pose.apply(believed.centres_mm()), part.height_mm))
        for pose, frame in zip(poses, frames, strict=True)
    ]
    taught = teach.solve_colours([sample for sample in samples if sample is not None], model, part, "six frames", TODAY)
    assert taught.n_frames == 6
    assert isinstance(Tracker(camera, part, taught).observe(frames[0]).sight, PartPose)


def test_teaching_refuses_too_few_frames_and_colours_too_alike(bench: Bench) -> None:
    model = model_of(bench.camera)
    frame = bench.frame(0, np.zeros(3), np.zeros(3), Spoiled())
    sample = teach.sample(model, bench.part, frame.pixels)
    assert sample is not None
    with pytest.raises(CalibrationError, match="in 2 frames, needed: 3"):
        teach.solve_colours([sample] * 2, model, bench.part, "x", TODAY)
    with pytest.raises(CalibrationError, match="vivid"):
        teach.solve_colours([teach.Sample(sample.first, sample.first)] * 3, model, bench.part, "x", TODAY)


def test_pairs_are_chosen_by_their_spacing() -> None:
    first, second = [np.array([0.0, 0.0]), np.array([100.0, 0.0])], [np.array([14.8, 0.0]), np.array([60.0, 0.0])]
    best = colour.pair(first, second, 15.0)
    assert best is not None
    np.testing.assert_array_equal(best[0], first[0])
    assert colour.pair(first[1:], second, 15.0) is None


def test_pose_of_a_card_that_is_not_in_the_middle() -> None:
    part = spots_part()
    moved = part.model_copy(update={"fiducial": part.fiducial.model_copy(update={"x_mm": 3.0, "y_mm": -2.0, "angle_deg": 40.0})})
    bench, pose = Bench(camera_of(), moved, 1), Pose2(2.0, 7.0, -1.1)
    sight = Tracker(bench.camera, moved).observe(bench.frame(0, pose.as_array(), np.zeros(3), Spoiled())).sight
    assert isinstance(sight, PartPose)
    assert np.all(np.abs(sight.measured.as_array() - pose.as_array()) < [0.03, 0.03, 0.005])
