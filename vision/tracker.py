"""The tracker: frames in, observations out, the same for the same frames.

Per part and frame: predict where it is, fit its cell edges there; where that fails decode the tag in a cut-out around the
prediction, then in the whole frame. A pose must pass every check of `_fault` and the filter's gate, or the frame has no pose.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import cv2
import numpy as np

from hw_profiles.camera import Camera
from hw_profiles.geometry import Array, Pose2
from hw_profiles.observation import NoPose, Observation, PartPose
from hw_profiles.part import Part
from vision import edge_fit, fiducial, pose_filter
from vision.camera_model import CameraModel, model_of
from vision.edge_fit import EdgeFit, EdgeTemplate
from vision.fiducial import Finder
from vision.frames import Frame, Pixels
from vision.pose_filter import Belief

MAX_BLUR_PX = 4.0
COAST_US = 400_000  # a prediction older than this is no place to look
POSITION_FLOOR_MM, YAW_FLOOR_RAD = 0.004, 0.0004  # standard deviations below which calibration, not noise, decides


class Tracker:
    """Watches one part or several; `observe` reports the first."""

    def __init__(self, camera: Camera, parts: tuple[Part, ...] | Part) -> None:
        self.parts = (parts,) if isinstance(parts, Part) else parts
        self._model = model_of(camera)
        self._finder = Finder(self._model, self.parts)
        self._tracks = [_Track(self._model, part) for part in self.parts]

    def observe(self, frame: Frame) -> Observation:
        """What one frame shows of the first part."""
        return self.observe_all(frame)[0]

    def observe_all(self, frame: Frame) -> tuple[Observation, ...]:
        """What one frame shows of every part, in their order."""
        camera = self._model.camera
        if frame.pixels.shape[:2] != (camera.height_px, camera.width_px):
            shown = f"{frame.pixels.shape[1]} × {frame.pixels.shape[0]}"
            raise ValueError(f"frame of {shown} px; camera '{camera.name}' gives {camera.width_px} × {camera.height_px}")
        sights = [track.follow(frame) for track in self._tracks]
        lost = [index for index, sight in enumerate(sights) if isinstance(sight, NoPose)]
        if lost:
            for sighting in self._finder.find(frame.pixels):
                if sighting.part_index in lost:
                    sights[sighting.part_index] = self._tracks[sighting.part_index].restart(frame, sighting.corners_px)
        return tuple(Observation(frame.captured_at_us, sight) for sight in sights)


@dataclass
class _Track:
    """One part being followed."""

    model: CameraModel
    part: Part
    belief: Belief | None = None

    def __post_init__(self) -> None:
        self.template = EdgeTemplate.of(self.part.fiducial)
        self.finder = Finder(self.model, (self.part,))

    def follow(self, frame: Frame) -> PartPose | NoPose:
        """The pose near where the part was expected."""
        if self.belief is None or frame.captured_at_us - self.belief.at_us > COAST_US:
            return NoPose(f"tag {self.part.fiducial.id} is not in view: is it covered, out of the image or too dark?")
        expected = pose_filter.predict(self.belief, frame.captured_at_us)
        found = self._fit(frame.pixels, expected.pose)
        fault = _fault(found)
        if found is None or fault is not None:
            return NoPose(f"tag {self.part.fiducial.id}: {fault}")
        covariance = _with_floor(found.covariance)
        if pose_filter.surprise(expected, found.pose, covariance) > pose_filter.GATE:
            return NoPose(f"tag {self.part.fiducial.id} jumped farther than the part can move: is something else moving it?")
        return self._accept(expected, found, covariance)

    def restart(self, frame: Frame, corners_px: Array) -> PartPose | NoPose:
        """The pose from a decoded tag, whatever was believed before."""
        start, misfit_mm = fiducial.rigid_pose(self.model, self.part, corners_px)
        tag = self.part.fiducial
        if misfit_mm > 0.12 * tag.size_mm:
            return NoPose(f"tag {tag.id} does not have its size of {tag.size_mm:g} mm on the part's top: check size, height, calibration")
        found = self._fit(frame.pixels, start)
        fault = _fault(found)
        if found is None or fault is not None:
            return NoPose(f"tag {tag.id}: {fault}")
        covariance = _with_floor(found.covariance)
        if self.belief is not None and frame.captured_at_us - self.belief.at_us <= COAST_US:
            expected = pose_filter.predict(self.belief, frame.captured_at_us)
            if pose_filter.surprise(expected, found.pose, covariance) <= pose_filter.GATE:
                return self._accept(expected, found, covariance)
        return self._accept(pose_filter.begin(frame.captured_at_us, found.pose, covariance), found, covariance)

    def _fit(self, pixels: Pixels, start: Pose2) -> EdgeFit | None:
        tag = self.part.fiducial
        middle = self.model.project_plane(start.apply([tag.x_mm, tag.y_mm]), self.part.height_mm)
        reach = tag.size_mm * self.model.px_per_mm(start.apply([tag.x_mm, tag.y_mm]), self.part.height_mm) * 0.95 + 10.0
        rows, columns = pixels.shape[:2]
        if not (np.isfinite(middle).all() and -reach < middle[0] < columns + reach and -reach < middle[1] < rows + reach):
            return None
        u_0, v_0 = max(int(middle[0] - reach), 0), max(int(middle[1] - reach), 0)
        cut = pixels[v_0 : int(middle[1] + reach) + 1, u_0 : int(middle[0] + reach) + 1]
        if min(cut.shape[:2]) < 8:
            return None
        grey = np.ascontiguousarray(cut if cut.ndim == 2 else cv2.cvtColor(cut, cv2.COLOR_BGR2GRAY), dtype=np.uint8)
        return edge_fit.fit(self.model, grey, (u_0, v_0), self.template, self.part.height_mm, start)

    def _accept(self, expected: Belief, found: EdgeFit, covariance: Array) -> PartPose:
        self.belief = pose_filter.update(expected, found.pose, covariance)
        return PartPose(found.pose, self.belief.pose, self.belief.twist, covariance)


def _with_floor(covariance: Array) -> Array:
    return covariance + np.diag([POSITION_FLOOR_MM**2, POSITION_FLOOR_MM**2, YAW_FLOOR_RAD**2])


def _fault(found: EdgeFit | None) -> str | None:
    """Why a fit must not be believed; None when it may."""
    if found is None:
        return "no edges where the part was expected: is it covered, out of the image or too dark?"
    if found.blur_px > MAX_BLUR_PX:
        return f"blurred over {found.blur_px:.1f} px: shorten the exposure or slow down"
    if min(found.agreeing_x, found.agreeing_y) < 0.25:
        return "too few of its edges are seen: is it covered, blurred or too dark?"
    if found.cells_right < 0.55 or found.cells_right < found.cells_shifted + 0.12:
        return "its cells do not look as they should: is it covered, damaged or badly lit?"
    sd_mm, sd_rad = math.sqrt(max(found.covariance[0, 0], found.covariance[1, 1])), math.sqrt(found.covariance[2, 2])
    if sd_mm > 0.1 or sd_rad > math.radians(0.5):
        return f"its pose is only known to {sd_mm:.2f} mm, {math.degrees(sd_rad):.2f} deg: is it covered or too small in the image?"
    return None
