"""Tag centres and corners against an independent detector, the library pupil-apriltags, in a process of its own.

Its pixel coordinates are 0.5 px more than those used here (integer values on pixel centres): subtracted before comparing.
"""

import json
import subprocess
import sys
from pathlib import Path

import cv2
import numpy as np
import pytest

from hw_profiles.observation import PartPose
from tests.benchmarks.made_frames import Bench, Spoiled, camera_of, part_of
from vision.camera_model import model_of
from vision.tracker import Tracker

SCRIPT = Path(__file__).with_name("pupil_detect.py")
N_FRAMES = 24


@pytest.fixture(scope="module")
def seen(tmp_path_factory: pytest.TempPathFactory) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Corners (n, 4, 2) [px] by the truth, by this tracker and by the other detector."""
    bench = Bench(camera_of(), part_of(), 31)
    model, corners_mm = model_of(bench.camera), bench.part.fiducial.corners_mm()
    tracker, truth, ours, grey = Tracker(bench.camera, bench.part), [], [], []
    for pose, frame in bench.run(N_FRAMES, np.random.default_rng(31), Spoiled()):
        sight = tracker.observe(frame).sight
        assert isinstance(sight, PartPose)
        truth.append(model.project_plane(pose.apply(corners_mm), bench.part.height_mm))
        ours.append(model.project_plane(sight.measured.apply(corners_mm), bench.part.height_mm))
        grey.append(cv2.cvtColor(frame.pixels, cv2.COLOR_BGR2GRAY))
    path = tmp_path_factory.mktemp("pupil") / "frames.npy"
    np.save(path, np.stack(grey))
    answer = subprocess.run([sys.executable, str(SCRIPT), str(path)], capture_output=True, check=True, text=True, timeout=120)
    detections = json.loads(answer.stdout)
    assert [[found["id"] for found in frame] for frame in detections] == [[bench.part.fiducial.id]] * N_FRAMES
    theirs = np.array([frame[0]["corners"] for frame in detections]) - 0.5
    return np.array(truth), np.array(ours), theirs


def test_centres_agree_within_a_twentieth_of_a_pixel(seen: tuple[np.ndarray, np.ndarray, np.ndarray]) -> None:
    _, ours, theirs = seen
    apart = np.linalg.norm(ours.mean(axis=1) - theirs.mean(axis=1), axis=1)
    assert np.median(apart) <= 0.05


def test_corners_agree_corner_by_corner(seen: tuple[np.ndarray, np.ndarray, np.ndarray]) -> None:
    _, ours, theirs = seen
    assert np.abs((ours - theirs).mean(axis=(0, 1))).max() <= 0.05
    assert np.median(np.linalg.norm(ours - theirs, axis=2)) <= 0.15


def test_this_tracker_is_the_nearer_to_the_truth(seen: tuple[np.ndarray, np.ndarray, np.ndarray]) -> None:
    truth, ours, theirs = seen
    off_ours, off_theirs = (np.median(np.linalg.norm(found - truth, axis=2)) for found in (ours, theirs))
    assert off_ours <= 0.01
    assert off_ours < off_theirs
