"""Drawing what palmloop believes onto a camera frame.

Every stroke is a light core inside a dark halo, so it shows on any background; what a mark means is told by its form as well as by its
colour: the part is a solid outline, the goal a dashed one with a cross, the commanded hand thin bones with round joints, the ring of
fingertips a chain of dots that stands open where the part could leave.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from hw_profiles.camera import Camera
from hw_profiles.geometry import Array, Pose2
from hw_profiles.part import Part
from vision.camera_model import CameraModel, model_of
from vision.frames import Pixels

Colour = tuple[int, int, int]  # blue, green, red
HALO: Colour = (24, 20, 18)
WHITE: Colour = (250, 250, 250)
PART: Colour = (240, 226, 120)
GOAL: Colour = (90, 200, 255)
BONE: Colour = (225, 225, 225)
OPEN: Colour = (120, 130, 255)
SHIFT = 4  # fractional bits of drawn coordinates
DASH_PX = 9.0
FINGER_ABOVE_MM = 4.0


@dataclass(frozen=True, slots=True, eq=False)
class Scene:
    """What to draw; None leaves a mark out.

    Attributes
    ----------
    pose, goal : hand_from_part as seen, and as wanted.
    bones_mm : (n_fingers, n_points, 2) centre lines of the commanded fingers.
    ring_mm, ring_open : (n, 2) fingertip contacts in order around the part, and (n,) whether the gap to the next lets the part out.
    text : lines for the corner, e.g. state and error; the first is drawn larger.
    """

    pose: Pose2 | None = None
    goal: Pose2 | None = None
    bones_mm: Array | None = None
    ring_mm: Array | None = None
    ring_open: NDArray[np.bool_] | None = None
    text: tuple[str, ...] = ()


def draw(pixels: Pixels, camera: Camera, part: Part, scene: Scene) -> Pixels:
    """A BGR copy of a frame with the scene drawn over it."""
    canvas = np.array(pixels if pixels.ndim == 3 else cv2.cvtColor(pixels, cv2.COLOR_GRAY2BGR), dtype=np.uint8)
    pen = _Pen(canvas, model_of(camera), max(canvas.shape[0] / 720.0, 0.5))
    if scene.bones_mm is not None:
        pen.bones(scene.bones_mm, part.height_mm + FINGER_ABOVE_MM)
    if scene.ring_mm is not None:
        pen.ring(scene.ring_mm, scene.ring_open, part.height_mm)
    if scene.goal is not None:
        pen.goal(part, scene.goal)
    if scene.pose is not None:
        pen.part(part, scene.pose)
    if scene.pose is not None and scene.goal is not None:
        pen.error(part, scene.pose, scene.goal)
    pen.text(scene.text)
    return canvas


@dataclass
class _Pen:
    canvas: Pixels
    model: CameraModel
    size: float

    def part(self, part: Part, pose: Pose2) -> None:
        """Solid outline, the tag's square, and a pointer along the part's x axis."""
        self._line(self._on_top(pose.apply(part.outline_mm), part), PART, 1.6, closed=True)
        self._line(self._on_top(pose.apply(part.fiducial.corners_mm()), part), PART, 1.0, closed=True)
        reach = part.circumradius_mm
        tip = [[0.62 * reach, 0.0], [1.12 * reach, 0.0]]
        barb = [[1.0 * reach, 0.06 * reach], [1.12 * reach, 0.0], [1.0 * reach, -0.06 * reach]]
        for stroke in (tip, barb):
            self._line(self._on_top(pose.apply(stroke), part), PART, 1.6)

    def goal(self, part: Part, goal: Pose2) -> None:
        """Dashed outline, a cross at the origin and a dashed pointer."""
        outline = goal.apply(part.outline_mm)
        self._dashes(self._on_top(np.concatenate([outline, outline[:1]]), part), GOAL)
        arm = 0.14 * part.circumradius_mm
        for stroke in ([[-arm, 0.0], [arm, 0.0]], [[0.0, -arm], [0.0, arm]]):
            self._line(self._on_top(goal.apply(stroke), part), GOAL, 1.4)
        reach = part.circumradius_mm
        self._dashes(self._on_top(goal.apply([[0.3 * reach, 0.0], [1.12 * reach, 0.0]]), part), GOAL)

    def error(self, part: Part, pose: Pose2, goal: Pose2) -> None:
        """How far the part is from the goal, beside the part."""
        off = pose.inverse() @ goal
        words = f"{math.hypot(off.x_mm, off.y_mm):.2f} mm  {abs(math.degrees(off.yaw_rad)):.1f}°"
        below = pose.xy_mm - np.array([0.0, part.circumradius_mm + 7.0])
        u, v = self._on_top(below[None], part)[0]
        width = cv2.getTextSize((0, 0), words, (0, 0), cv2.FontFace("sans"), int(17 * self.size), 500)[2]
        self._words(words, (round(float(u) - width / 2), round(float(v))), 17)

    def bones(self, lines_mm: Array, z_mm: float) -> None:
        """Thin links with round joints."""
        for line in self.model.project_plane(lines_mm, z_mm):
            self._line(line, BONE, 1.0)
            for joint in line:
                self._dot(joint, 3.2, BONE, 1.0)

    def ring(self, ring_mm: Array, is_open: NDArray[np.bool_] | None, z_mm: float) -> None:
        """Dots from contact to contact where the gap is closed; two stubs and a bare middle where it is open."""
        points = self.model.project_plane(ring_mm, z_mm)
        for index, (start, end) in enumerate(zip(points, np.roll(points, -1, axis=0), strict=True)):
            gap_open = is_open is not None and bool(is_open[index])
            if gap_open:
                self._line(np.stack([start, 0.8 * start + 0.2 * end]), OPEN, 1.6)
                self._line(np.stack([0.2 * start + 0.8 * end, end]), OPEN, 1.6)
                continue
            n = max(int(np.linalg.norm(end - start) / (8.0 * self.size)), 2)
            for t in np.arange(1, n) / n:
                self._dot((1.0 - t) * start + t * end, 1.1, WHITE, -1.0)

    def text(self, lines: tuple[str, ...]) -> None:
        """Lines of words down from the top left corner."""
        v = 12.0 * self.size
        for index, words in enumerate(lines):
            height = 24 if index == 0 else 17
            v += 1.35 * height * self.size
            self._words(words, (round(16 * self.size), round(v)), height)

    def _words(self, words: str, at: tuple[int, int], height: int) -> None:
        font, size = cv2.FontFace("sans"), int(height * self.size)
        reach = max(round(1.5 * self.size), 1)
        for du, dv in (
            (-reach, 0),
            (reach, 0),
            (0, -reach),
            (0, reach),
            (-reach, -reach),
            (reach, reach),
            (-reach, reach),
            (reach, -reach),
        ):
            cv2.putText(self.canvas, words, (at[0] + du, at[1] + dv), HALO, font, size, 500)
        cv2.putText(self.canvas, words, at, WHITE, font, size, 500)

    def _on_top(self, points_mm: Array, part: Part) -> Array:
        return self.model.project_plane(points_mm, part.height_mm)

    def _line(self, points_px: Array, colour: Colour, width: float, closed: bool = False) -> None:
        fixed = [np.round(np.clip(points_px, -4e3, 2e4) * (1 << SHIFT)).astype(np.int32)]
        for shade, extra in ((HALO, 2.4), (colour, 0.0)):
            cv2.polylines(self.canvas, fixed, closed, shade, max(round((width + extra) * self.size), 1), cv2.LINE_AA, SHIFT)

    def _dot(self, point_px: Array, radius: float, colour: Colour, width: float) -> None:
        u, v = (round(float(value) * (1 << SHIFT)) for value in np.clip(point_px, -4e3, 2e4))
        for shade, extra in ((HALO, 1.2), (colour, 0.0)):
            thickness = -1 if width < 0.0 or shade is HALO else max(round(width * self.size), 1)
            cv2.circle(self.canvas, (u, v), round((radius + extra) * self.size * (1 << SHIFT)), shade, thickness, cv2.LINE_AA, SHIFT)

    def _dashes(self, points_px: Array, colour: Colour) -> None:
        steps = np.linalg.norm(np.diff(points_px, axis=0), axis=1)
        along = np.concatenate([[0.0], np.cumsum(steps)])
        n = max(int(along[-1] / (2.0 * DASH_PX * self.size)), 1)
        ends = (np.arange(n)[:, None] + np.array([0.0, 0.28, 0.55])) * along[-1] / n
        for dash in ends:
            u, v = (np.interp(dash, along, points_px[:, axis]) for axis in (0, 1))
            self._line(np.stack([u, v], axis=1), colour, 1.6)
