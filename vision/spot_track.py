"""One part with two coloured spots being followed from frame to frame; the same interface as a tagged one."""

from __future__ import annotations

import math

import numpy as np

from hw_profiles.calibration import ColourCalibration
from hw_profiles.geometry import Array, Pose2
from hw_profiles.observation import NoPose, PartPose
from hw_profiles.part import Part, Spots
from vision import colour, pose_filter
from vision.camera_model import CameraModel
from vision.colour import Palette, SpotFit
from vision.edge_checks import Quality
from vision.frames import Frame, Pixels
from vision.pose_filter import Belief

MAX_SPACING_OFF = 0.008  # of the spacing, that the spots found may be off it
AREA_RANGE = (0.85, 1.12)  # of a spot's area; a covered spot is smaller
MAX_STRAYS = 0.04
MAX_OVALNESS = 0.05
FLOOR_MM = 0.01
SEARCH_STRIDE = 2


class SpotTrack:
    """Follows one part by its two spots."""

    def __init__(self, model: CameraModel, part: Part, spots: Spots, taught: ColourCalibration | None) -> None:
        if model.camera.pixel_format != "bgr8":
            raise ValueError(f"part '{part.name}' has coloured spots, camera '{model.camera.name}' is mono8; allowed: bgr8")
        self.part = part
        self.quality: Quality | None = None  # the numbers of a tag; a spot is judged by its area, spacing and mixture
        self._model, self._spots = model, spots
        self._palette = Palette.of(spots, taught)
        self._belief: Belief | None = None

    def follow(self, frame: Frame) -> PartPose | NoPose:
        """The pose near where the part was expected, else wherever the two spots are found."""
        expected = pose_filter.recall(self._belief, frame.captured_at_us)
        if expected is not None:
            found = self._measure(frame.pixels, expected.pose.apply(self._spots.centres_mm()))
            if not isinstance(found, NoPose) and pose_filter.surprise(expected, *found) <= pose_filter.GATE:
                return self._join(expected, frame.captured_at_us, *found)
        starts = self._search(frame.pixels)
        if isinstance(starts, NoPose):
            return starts
        found = self._measure(frame.pixels, starts)
        if isinstance(found, NoPose):
            return found
        return self._join(expected, frame.captured_at_us, *found)

    def _search(self, pixels: Pixels) -> Array | NoPose:
        """Middles (2, 2) [mm] of the best pair of spots in the whole frame."""
        z_mm, spots = self.part.height_mm, self._spots
        scale = self._model.px_per_mm((0.0, 0.0), z_mm)
        stride = max(min(SEARCH_STRIDE, int(spots.spot_mm * scale / 6.0)), 1)
        area_px = math.pi / 4.0 * (spots.spot_mm * scale) ** 2
        seen = colour.candidates(pixels, colour.plate_colour(pixels), self._palette, stride, area_px)
        first, second = ([self._model.plane_points(middle, z_mm) for middle in middles] for middles in seen)
        best = colour.pair(first, second, spots.spacing_mm)
        if best is None:
            missing = "first" if not first else "second" if not second else "pair at the right spacing of"
            return NoPose(f"part {self.part.name}: no {missing} colour spot in view: is it covered, or the light too different?")
        return np.stack(best)

    def _measure(self, pixels: Pixels, starts_mm: Array) -> tuple[Pose2, Array] | NoPose:
        fits = [colour.refine(self._model, pixels, (0, 0), self._spots, self.part.height_mm, start) for start in starts_mm]
        for which, found in zip(("first", "second"), fits, strict=True):
            wrong = _spot_fault(found, self._spots)
            if wrong is not None:
                return NoPose(f"part {self.part.name}: {which} colour spot {wrong}")
        first, second = (found for found in fits if found is not None)
        return self._pose(first, second)

    def _pose(self, first: SpotFit, second: SpotFit) -> tuple[Pose2, Array] | NoPose:
        apart = second.centre_mm - first.centre_mm
        spacing = float(np.linalg.norm(apart))
        if abs(spacing / self._spots.spacing_mm - 1.0) > MAX_SPACING_OFF:
            wanted = f"{self._spots.spacing_mm:g} mm"
            return NoPose(f"part {self.part.name}: spots {spacing:.2f} mm apart, not {wanted}: is one covered, or the height wrong?")
        middle = 0.5 * (first.centre_mm + second.centre_mm)
        hand_from_card = Pose2(float(middle[0]), float(middle[1]), math.atan2(apart[1], apart[0]))
        pose = hand_from_card @ self._spots.part_from_tag.inverse()
        variance = 0.5 * (first.variance + second.variance) + FLOOR_MM**2
        return pose, np.diag([0.5 * variance, 0.5 * variance, 2.0 * variance / spacing**2])

    def _join(self, expected: Belief | None, at_us: int, pose: Pose2, covariance: Array) -> PartPose:
        self._belief = pose_filter.join(expected, at_us, pose, covariance)
        return PartPose(pose, self._belief.pose, self._belief.twist, covariance)


def _spot_fault(found: SpotFit | None, spots: Spots) -> str | None:
    """Why a spot must not be believed; None when it may."""
    if found is None:
        return "cannot be told from its card: is it covered, dark or out of the image?"
    share = found.area_mm2 / (math.pi / 4.0 * spots.spot_mm**2)
    if not AREA_RANGE[0] < share < AREA_RANGE[1]:
        return f"shows {share:.0%} of its area: is it partly covered, or its diameter or height wrong in the profile?"
    if found.ovalness > MAX_OVALNESS:
        return "is not round: is it partly covered, smeared, or is there glare?"
    if found.strays > MAX_STRAYS:
        return "is not one colour on white: is it partly covered, or is there glare?"
    return None
