"""Overlay: it draws on a copy, shows on any background, and tells part from goal by form."""

import numpy as np
import pytest

from hw_profiles.geometry import Pose2
from tests.benchmarks.made_frames import camera_of, part_of
from vision import overlay
from vision.camera_model import model_of

CAMERA, PART = camera_of(), part_of("block-36")
POSE, GOAL = Pose2(5.0, 4.0, 0.3), Pose2(-40.0, -10.0, 1.2)
BONES = np.array(
    [[[0.0, 110.0], [-40.0, 70.0], [0.0, 40.0], [0.0, 40.0]], [[-100.0, -50.0], [-60.0, -70.0], [-30.0, -20.0], [-30.0, -20.0]]]
)
RING = np.array([[0.0, 40.0], [-35.0, -20.0], [35.0, -20.0]])


def drawn(level: int, scene: overlay.Scene) -> np.ndarray:
    return overlay.draw(np.full((720, 1280, 3), level, np.uint8), CAMERA, PART, scene)


SCENES = {
    "part": overlay.Scene(pose=POSE),
    "goal": overlay.Scene(goal=GOAL),
    "bones": overlay.Scene(bones_mm=BONES),
    "closed ring": overlay.Scene(ring_mm=RING),
    "open ring": overlay.Scene(ring_mm=RING, ring_open=np.array([True, True, True])),
    "text": overlay.Scene(text=("servoing", "0.3°")),
}


@pytest.mark.parametrize("scene", SCENES.values(), ids=SCENES.keys())
@pytest.mark.parametrize("level", [0, 24, 128, 240, 255])
def test_every_mark_stands_out_on_any_background(scene: overlay.Scene, level: int) -> None:
    change = np.abs(drawn(level, scene).astype(int) - level).max(axis=2)
    assert (change > 90).sum() > 60


def test_the_frame_itself_is_not_drawn_on() -> None:
    frame = np.full((720, 1280, 3), 99, np.uint8)
    overlay.draw(frame, CAMERA, PART, overlay.Scene(pose=POSE, goal=GOAL, bones_mm=BONES, text=("x",)))
    assert np.all(frame == 99)


def test_outline_is_drawn_where_the_part_is() -> None:
    change = np.abs(drawn(128, overlay.Scene(pose=POSE)).astype(int) - 128).max(axis=2) > 40
    outline = model_of(CAMERA).project_plane(POSE.apply(PART.outline_mm), PART.height_mm)
    middles = 0.5 * (outline + np.roll(outline, -1, axis=0))
    for u, v in np.round(np.concatenate([outline, middles])).astype(int):
        assert change[v - 2 : v + 3, u - 2 : u + 3].any()


def test_goal_is_dashed_and_part_is_not() -> None:
    model = model_of(CAMERA)

    def covered(scene: overlay.Scene, pose: Pose2) -> float:
        change = np.abs(drawn(128, scene).astype(int) - 128).max(axis=2) > 40
        corners = np.array(PART.outline_mm)
        along = np.concatenate([corners[i] + np.linspace(0, 1, 200)[:, None] * (corners[(i + 1) % 4] - corners[i]) for i in range(4)])
        u, v = np.round(model.project_plane(pose.apply(along), PART.height_mm)).astype(int).T
        return float(change[v, u].mean())

    assert covered(overlay.Scene(pose=POSE), POSE) > 0.97
    assert 0.4 < covered(overlay.Scene(goal=GOAL), GOAL) < 0.9


def test_poses_far_outside_the_picture_and_mono_frames_are_drawn_without_harm() -> None:
    mono = np.full((720, 1280), 50, np.uint8)
    out = overlay.draw(mono, CAMERA, PART, overlay.Scene(pose=Pose2(900.0, 400.0, 0.0), goal=Pose2(-3000.0, 5.0, 0.0)))
    assert out.shape == (720, 1280, 3)
