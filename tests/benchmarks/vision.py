"""Measures vision on rendered frames: `python -m tests.benchmarks.vision [SECTION ...] [--frames N]`.

Sections: accuracy colour robustness nothing speed sensitivity filter; without any, all of them. The seeds (1000 and up) are a test
set: nothing was tuned on them. Poses are compared with the rendered truth.
"""

from __future__ import annotations

import argparse
import json
import math
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import cv2
import numpy as np
from rich.console import Console
from rich.table import Table

from hw_profiles.camera import Camera
from hw_profiles.geometry import Array, Pose2, wrap_angle
from hw_profiles.observation import PartPose
from hw_profiles.part import Part
from tests.benchmarks.made_frames import Bench, Spoiled, camera_of, motion, part_of
from vision import fiducial, pattern
from vision.camera_model import model_of
from vision.frames import Frame, Pixels
from vision.tracker import Tracker

SEED = 1000
RESOLUTIONS = ((640, 360), (1280, 720), (1920, 1080))
TAGS_MM = (12.0, 16.0, 20.0)
TILTS_DEG = (0.0, 8.0, 15.0, 25.0)
WRONG_MM, WRONG_DEG = 0.5, 2.0
PUPIL = Path(__file__).parents[1] / "outside" / "pupil_detect.py"
console = Console(width=150, highlight=False)


def error_of(truth: Pose2, seen: Pose2) -> Array:
    """x, y [mm] and yaw [deg] by which a pose is off."""
    return np.array([seen.x_mm - truth.x_mm, seen.y_mm - truth.y_mm, math.degrees(wrap_angle(seen.yaw_rad - truth.yaw_rad))])


def errors(bench: Bench, n: int, seed: int, spoiled: Spoiled, first_clear: bool = True) -> tuple[Array, int]:
    """Errors (m, 3) of the frames of a run that gave a pose, and the number of frames; the first frame is a clear one."""
    tracker, rng, found = Tracker(bench.camera, bench.part), np.random.default_rng(seed), []
    for index, (truth, frame) in enumerate(bench.run(n, rng, spoiled)):
        if index == 0 and first_clear:
            frame = bench.frame(0, truth.as_array(), np.zeros(3), Spoiled())
        sight = tracker.observe(frame).sight
        if isinstance(sight, PartPose):
            found.append(error_of(truth, sight.measured))
    return np.array(found).reshape(-1, 3), n


def spread(found: Array) -> list[str]:
    """Noise and bias as cells of a table."""
    if len(found) == 0:
        return ["–"] * 4
    sd_mm, bias = found[:, :2].std(), found.mean(axis=0)
    return [f"{sd_mm:.4f}", f"{found[:, 2].std():.3f}", f"{math.hypot(bias[0], bias[1]):.4f}", f"{abs(bias[2]):.4f}"]


def accuracy(n: int) -> None:
    """Noise and bias against tag size, resolution and tilt; pupil-apriltags on the same frames."""
    table = Table(
        "image",
        "tag mm",
        "tilt deg",
        "poses",
        "sd mm",
        "sd deg",
        "bias mm",
        "bias deg",
        "their poses",
        "sd mm",
        "sd deg",
        "bias mm",
        "bias deg",
    )
    table.title = f"accuracy, {n} frames a row; right: pupil-apriltags, same frames, its corners through the same plane fit"
    for case, (width, height) in enumerate(RESOLUTIONS):
        for tag_mm in TAGS_MM:
            for tilt in TILTS_DEG:
                bench = Bench(camera_of(width, height, tilt), part_of("roller-40", tag_mm), SEED + case)
                frames = list(bench.run(n, np.random.default_rng(SEED + case), Spoiled()))
                tracker = Tracker(bench.camera, bench.part)
                sights = [(truth, tracker.observe(frame).sight) for truth, frame in frames]
                ours = np.array([error_of(truth, sight.measured) for truth, sight in sights if isinstance(sight, PartPose)]).reshape(-1, 3)
                theirs = pupil_errors(bench.camera, bench.part, frames[:: max(n // 60, 1)])
                table.add_row(
                    f"{width}x{height}", f"{tag_mm:g}", f"{tilt:g}", f"{len(ours)}/{n}", *spread(ours), str(len(theirs)), *spread(theirs)
                )
    console.print(table)


def pupil_errors(camera: Camera, part: Part, frames: list[tuple[Pose2, Frame]]) -> Array:
    """Errors (m, 3) of pupil-apriltags' corners, mapped by the same homography and fitted by the same three parameters."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "frames.npy"
        np.save(path, np.stack([cv2.cvtColor(frame.pixels, cv2.COLOR_BGR2GRAY) for _, frame in frames]))
        answer = subprocess.run([sys.executable, str(PUPIL), str(path)], capture_output=True, check=True, text=True)
    found = []
    for (truth, _), detections in zip(frames, json.loads(answer.stdout), strict=True):
        for detection in detections:
            if detection["id"] == part.fiducial.id:
                pose, _ = fiducial.rigid_pose(model_of(camera), part, np.array(detection["corners"]) - 0.5)
                found.append(error_of(truth, pose))
    return np.array(found).reshape(-1, 3)


def spots_part() -> Part:
    """A roller with two coloured spots."""
    return part_of("roller-40-spots")


def colour(n: int) -> None:
    """Coloured spots: noise, bias, and what light does to them."""
    table = Table(
        "image",
        "tilt deg",
        "frames",
        "poses",
        "sd mm",
        "sd deg",
        "bias mm",
        "bias deg",
        "wrong",
        title=f"colour spots of 8 mm, 15 mm apart, {n} frames a row",
    )
    cases = [("as it is", Spoiled()), ("gain 0.3", Spoiled(gain=0.3)), ("gain 2", Spoiled(gain=2.0)), ("blur 1.5 px", Spoiled(blur_px=1.5))]
    cases += [("noise × 3", Spoiled(noise=3.0)), ("glare", Spoiled(glare=120.0)), ("10 % covered", Spoiled(occlusion=0.1))]
    for tilt in TILTS_DEG:
        for name, spoiled in cases if tilt == 15.0 else cases[:1]:
            bench = Bench(camera_of(1280, 720, tilt), spots_part(), SEED + 10)
            found, _ = errors(bench, n, SEED + 10, spoiled)
            table.add_row("1280x720", f"{tilt:g}", name, f"{len(found)}/{n}", *spread(found), str(n_wrong(found)))
    console.print(table)


def n_wrong(found: Array) -> int:
    """Poses off by more than WRONG_MM or WRONG_DEG."""
    return int(((np.hypot(found[:, 0], found[:, 1]) > WRONG_MM) | (np.abs(found[:, 2]) > WRONG_DEG)).sum())


SPOILS = {
    "as it is": Spoiled(),
    "20 % covered": Spoiled(occlusion=0.2),
    "40 % covered": Spoiled(occlusion=0.4),
    "60 % covered": Spoiled(occlusion=0.6),
    "80 % covered": Spoiled(occlusion=0.8),
    "blur 1 px": Spoiled(blur_px=1.0),
    "blur 2 px": Spoiled(blur_px=2.0),
    "blur 3 px": Spoiled(blur_px=3.0),
    "exposure 20 ms": Spoiled(exposure_ms=20.0),
    "gain 0.3": Spoiled(gain=0.3),
    "gain 0.15": Spoiled(gain=0.15),
    "gain 2": Spoiled(gain=2.0),
    "glare 150": Spoiled(glare=150.0),
    "glare 300": Spoiled(glare=300.0),
    "noise × 4": Spoiled(noise=4.0),
    "all together": Spoiled(occlusion=0.35, blur_px=1.0, gain=0.5, noise=2.0, glare=60.0, exposure_ms=8.0),
}


def robustness(n: int) -> None:
    """Track rate and wrong poses under what spoils a picture, over several cameras, parts and tags."""
    benches = [(1280, 720, 16.0, "roller-40"), (1280, 720, 12.0, "nut-m30"), (640, 360, 16.0, "block-36"), (1920, 1080, 20.0, "collar-60")]
    table = Table("frames", *[f"{w}x{h} {tag:g} mm" for w, h, tag, _ in benches], "sd mm", "worst mm", "worst deg", "wrong")
    table.title = f"track rate (frames with a pose) of {n} frames a cell, the first one clear; wrong: over {WRONG_MM} mm or {WRONG_DEG} deg"
    total = wrong = 0
    for name, spoiled in SPOILS.items():
        rates, everything = [], []
        for case, (width, height, tag_mm, part) in enumerate(benches):
            bench = Bench(camera_of(width, height), part_of(part, tag_mm), SEED + 20 + case)
            found, _ = errors(bench, n, SEED + 20 + case, spoiled)
            rates.append(f"{len(found) / n:.1%}")
            everything.append(found)
            total += n
        found = np.concatenate(everything)
        wrong += n_wrong(found)
        table.add_row(
            name,
            *rates,
            f"{found[:, :2].std():.4f}",
            f"{np.hypot(found[:, 0], found[:, 1]).max():.3f}",
            f"{np.abs(found[:, 2]).max():.2f}",
            str(n_wrong(found)),
        )
    console.print(table)
    console.print(f"wrong poses: {wrong} of {total} frames")


def nothing(n: int) -> None:
    """Frames without the tag that is looked for: other tags, boards of squares, clutter, noise."""
    camera, rng = camera_of(), np.random.default_rng(SEED + 30)
    tracker, n_false = Tracker(camera, tuple(part_of(name) for name in ("roller-40", "collar-60", "nut-m30"))), 0
    other = Bench(camera, part_of().model_copy(update={"fiducial": part_of().fiducial.model_copy(update={"id": 77})}), SEED + 30)
    plain = Bench(camera, spots_part(), SEED + 31)
    for index in range(n):
        pose, _ = motion(rng, 1)
        if index % 4 == 0:
            pixels = other.frame(index, pose[0], np.zeros(3), Spoiled()).pixels
        elif index % 4 == 1:
            pixels = plain.frame(index, pose[0], np.zeros(3), Spoiled()).pixels
        else:
            pixels = clutter(camera, rng, squares=index % 4 == 2)
        n_false += sum(isinstance(seen.sight, PartPose) for seen in tracker.observe_all(Frame(20_000 * index, pixels)))
    console.print(f"false detections: {n_false} in {n} frames without a tag that is looked for (other tags, spots, clutter, squares)")


def clutter(camera: Camera, rng: np.random.Generator, squares: bool) -> Pixels:
    """Random rectangles and lines, or squares of 10 × 10 random cells in white margins: tags that are no tags."""
    pixels = np.full((camera.height_px, camera.width_px, 3), 110, np.uint8)
    for _ in range(60):
        u, v = rng.integers(0, camera.width_px), rng.integers(0, camera.height_px)
        side = int(rng.integers(24, 64))
        if squares:
            cells = rng.integers(0, 2, (10, 10)).astype(np.uint8) * 255
            cells[[0, -1], :] = cells[:, [0, -1]] = 255
            cells[[1, -2], 1:-1] = cells[1:-1, [1, -2]] = 0
            block = cv2.resize(cells, (side, side), interpolation=cv2.INTER_NEAREST)[: camera.height_px - v, : camera.width_px - u]
            pixels[v : v + side, u : u + side] = block[..., None]
        else:
            colour_of = tuple(int(value) for value in rng.integers(0, 256, 3))
            cv2.rectangle(
                pixels, (int(u), int(v)), (int(u) + side, int(v) + int(rng.integers(4, 90))), colour_of, int(rng.choice([-1, 1, 3]))
            )
    noisy = pixels + rng.normal(0.0, 4.0, pixels.shape)
    return np.clip(noisy, 0, 255).astype(np.uint8)


def timed(action: Callable[[], object], n: int) -> Array:
    """Processor times [ms] of n calls in this thread, after a few to warm up: what else the machine does is left out."""
    for _ in range(3):
        action()
    times = np.empty(n)
    for index in range(n):
        start = time.thread_time()
        action()
        times[index] = (time.thread_time() - start) * 1e3
    return times


def speed(n: int) -> None:
    """Tracking and acquisition against OpenCV's default full-frame detection, and against reading the cut-out once."""
    cv2.setNumThreads(1)
    table = Table("image", "default detection ms", "acquire ms", "ratio", "track ms p50", "p99", "ratio", "cut-out to grey ms", "render ms")
    table.title = "processor time on one core, medians of one run; ratios to OpenCV's default detection of the whole frame"
    for width, height in RESOLUTIONS:
        bench = Bench(camera_of(width, height), part_of(), SEED + 40)
        frames = [frame for _, frame in bench.run(100, np.random.default_rng(SEED + 40), Spoiled())]
        default = cv2.aruco.DetectorParameters()
        default.cornerRefinementMethod = cv2.aruco.CORNER_REFINE_SUBPIX
        detector = cv2.aruco.ArucoDetector(pattern.family(), default)
        slow = float(np.median(timed(lambda d=detector, f=frames[5]: d.detectMarkers(cv2.cvtColor(f.pixels, cv2.COLOR_BGR2GRAY)), 20)))
        finder = fiducial.Finder(model_of(bench.camera), (bench.part,))
        acquire = float(np.median(timed(lambda f=finder, p=frames[5].pixels: f.find(p), 50)))
        times = []
        for _ in range(max(n // 95, 1) + 1):
            tracker = Tracker(bench.camera, bench.part)
            for frame in frames:
                start = time.thread_time()
                tracker.observe(frame)
                times.append((time.thread_time() - start) * 1e3)
        track = np.array(times).reshape(-1, len(frames))[1:, 5:]  # without the acquisition at the start of each run
        reach = int(0.95 * bench.part.fiducial.size_mm * model_of(bench.camera).px_per_mm((0.0, 0.0), 20.0)) + 8
        middle = (height // 2, width // 2)
        cut = frames[5].pixels[middle[0] - reach : middle[0] + reach, middle[1] - reach : middle[1] + reach]
        read = float(np.median(timed(lambda c=cut: cv2.cvtColor(c, cv2.COLOR_BGR2GRAY), 200)))
        render = float(np.median(timed(lambda b=bench: b.frame(0, np.array([3.0, 2.0, 0.4]), np.zeros(3), Spoiled()), 30)))
        p50, p99 = np.median(track), np.quantile(track, 0.99)
        table.add_row(
            f"{width}x{height}",
            f"{slow:.2f}",
            f"{acquire:.2f}",
            f"{slow / acquire:.1f}",
            f"{p50:.3f}",
            f"{p99:.3f}",
            f"{slow / p50:.0f}",
            f"{read:.4f}",
            f"{render:.2f}",
        )
    console.print(table)


def sensitivity(n: int) -> None:
    """What errors of calibration do to the pose: the same frames tracked with a camera or part that is believed wrongly."""
    del n  # geometry: a few poses are enough
    camera, part = camera_of(), part_of()
    eye = camera.mount.eye_mm
    tilt = math.radians(1.0)
    leaning = (eye[0], eye[1] * math.cos(tilt) - eye[2] * math.sin(tilt), eye[1] * math.sin(tilt) + eye[2] * math.cos(tilt))
    aimed = camera.mount.model_copy(update={"target_mm": (0.0, 430.0 * math.tan(tilt), 0.0)})
    cases: list[tuple[str, Camera, Part]] = [
        ("part 0.5 mm higher than its profile", camera, part.model_copy(update={"height_mm": part.height_mm - 0.5})),
        (
            "camera swung 1 deg about the middle of the plate",
            camera.model_copy(update={"mount": camera.mount.model_copy(update={"eye_mm": leaning})}),
            part,
        ),
        ("camera turned 1 deg in its mount", camera.model_copy(update={"mount": aimed}), part),
        ("focal length 0.1 % off", camera.model_copy(update={"focal_px": (camera.focal_px[0] * 1.001, camera.focal_px[1] * 1.001)}), part),
        (
            "middle of the image 1 px off",
            camera.model_copy(update={"principal_px": (camera.principal_px[0] + 1.0, camera.principal_px[1])}),
            part,
        ),
        ("distortion left out", camera.model_copy(update={"distortion": (0.0,) * 5}), part),
        (
            "camera 1 mm higher than believed",
            camera.model_copy(update={"mount": camera.mount.model_copy(update={"eye_mm": (eye[0], eye[1], eye[2] - 1.0)})}),
            part,
        ),
    ]
    table = Table(
        "what is believed wrongly",
        "at the middle mm",
        "at 30 mm off mm",
        "of it not a mere shift mm",
        "angle deg",
        title="sensitivity of the pose (16 mm tag, 720p, 15 deg tilt)",
    )
    poses = [Pose2(0.0, 0.0, 0.3)] + [Pose2(30.0 * math.cos(a), 30.0 * math.sin(a), a) for a in np.arange(8) * math.pi / 4.0]
    true_model = model_of(camera)
    for name, believed, believed_part in cases:
        off = []
        for pose in poses:
            corners = true_model.project_plane(pose.apply(part.fiducial.corners_mm()), part.height_mm)
            off.append(error_of(pose, fiducial.rigid_pose(model_of(believed), believed_part, corners)[0]))
        found = np.array(off)
        sizes = np.hypot(found[:, 0], found[:, 1])
        rest = np.hypot(*(found[1:, :2] - found[1:, :2].mean(axis=0)).T)
        table.add_row(name, f"{sizes[0]:.3f}", f"{sizes[1:].max():.3f}", f"{rest.max():.3f}", f"{np.abs(found[:, 2]).max():.3f}")
    console.print(table)


def filter_(n: int) -> None:
    """What prediction over the latency is worth: the true pose 60 ms after capture against the last pose and the filter's."""
    bench = Bench(camera_of(), part_of(), SEED + 50)
    times = np.arange(n) * 0.02
    turn = 40.0 / 12.0 * times  # 40 mm/s around a circle of 12 mm, 86 deg/s about itself
    poses = np.stack([12.0 * np.cos(turn), 12.0 * np.sin(turn), 1.5 * times], axis=1)
    twists = np.gradient(poses, times, axis=0)
    tracker, held, ahead = Tracker(bench.camera, bench.part), [], []
    for index in range(n - 3):
        sight = tracker.observe(bench.frame(index, poses[index], twists[index], Spoiled())).sight
        if isinstance(sight, PartPose) and index > 5:
            later = Pose2.from_array(poses[index + 3])
            held.append(error_of(later, sight.measured))
            ahead.append(error_of(later, sight.predicted(0.06)))
    table = Table("pose used 60 ms later", "RMS mm", "RMS deg", title="latency")
    for name, found in (("as measured", np.array(held)), ("predicted by the filter", np.array(ahead))):
        table.add_row(name, f"{np.sqrt(np.mean(np.sum(found[:, :2] ** 2, axis=1))):.3f}", f"{np.sqrt(np.mean(found[:, 2] ** 2)):.3f}")
    console.print(table)


SECTIONS: dict[str, tuple[Callable[[int], None], int]] = {
    "accuracy": (accuracy, 120),
    "colour": (colour, 200),
    "robustness": (robustness, 160),
    "nothing": (nothing, 2000),
    "speed": (speed, 2000),
    "sensitivity": (sensitivity, 1),
    "filter": (filter_, 400),
}


def main() -> None:
    """Run the sections asked for."""
    options = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    options.add_argument("sections", nargs="*", choices=[*SECTIONS, []], metavar="SECTION")
    options.add_argument("--frames", type=int, help="of each row or section, instead of its own number")
    asked = options.parse_args()
    for name in asked.sections or SECTIONS:
        section, n = SECTIONS[name]
        section(asked.frames or n)


if __name__ == "__main__":
    main()
