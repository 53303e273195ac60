"""One tagged part being followed from frame to frame.

Predict where it is and fit its cell edges there; where that fails, search the surroundings by the pattern of the cells and fit again;
where that fails, decode the tag in a cut-out. A fit must pass every check of `fault`, and the filter's gate unless it was decoded.
"""

from __future__ import annotations

import math

import cv2
import numpy as np

from hw_profiles.geometry import Array, Pose2
from hw_profiles.observation import NoPose, PartPose
from hw_profiles.part import Fiducial, Part
from vision import cell_search, edge_checks, edge_fit, fiducial, pose_filter
from vision.camera_model import CameraModel
from vision.edge_checks import Quality
from vision.edge_fit import EdgeFit, EdgeTemplate, NoFit
from vision.fiducial import Finder, Sighting
from vision.frames import Frame, Pixels
from vision.pose_filter import Belief

MAX_BLUR_CELLS = 0.36  # more, and neighbouring edges pull at each other
SURE_CELLS, SURE_EDGES = 0.72, 0.5  # a tag seen so well needs no prediction to vouch for it
LEAST_CONSISTENT = 0.7
MAX_TILT_RAD = math.radians(5.0)
TILT_SDS = 3.0  # standard deviations a tilt must stand out by to be believed
POSITION_FLOOR_MM, YAW_FLOOR_RAD = 0.004, 0.0004  # standard deviations below which calibration, not noise, decides
FLOOR = np.diag([POSITION_FLOOR_MM**2, POSITION_FLOOR_MM**2, YAW_FLOOR_RAD**2])
CUT_SIDES = 0.95  # half width of the cut-out, of the tag's side: holds the tag at any angle
Cut = tuple[Pixels, tuple[int, int]]  # grey pixels and the (u, v) of their first


class TagTrack:
    """Follows one part by its tag; `quality` is of the last fit, None where there was none."""

    def __init__(self, model: CameraModel, part: Part, tag: Fiducial) -> None:
        self.part, self.tag = part, tag
        self.quality: Quality | None = None
        self._model = model
        self._belief: Belief | None = None
        self._template = EdgeTemplate.of(tag)
        self._finder = Finder(model, (part,))

    def follow(self, frame: Frame) -> PartPose | NoPose:
        """The pose near where the part was expected."""
        self.quality = None
        expected = pose_filter.recall(self._belief, frame.captured_at_us)
        if expected is None:
            return NoPose(f"tag {self.tag.id} is not in view: is it covered, out of the image or too dark?")
        near = self._near(frame.pixels, expected)
        if near is not None and not isinstance(near, NoPose):
            return self._join(expected, frame.captured_at_us, *near)
        cut = self._cut(frame.pixels, expected.pose, 2.0)
        for sighting in self._finder.find(*cut, shrink=1) if cut else ():
            return self.restart(frame, sighting)
        return near or NoPose(f"tag {self.tag.id} left the image: bring the part back into view")

    def restart(self, frame: Frame, sighting: Sighting) -> PartPose | NoPose:
        """The pose from a decoded tag, whatever was believed before."""
        start, misfit_mm = fiducial.rigid_pose(self._model, self.part, sighting.corners_px)
        tag = self.tag
        if misfit_mm > 0.12 * tag.size_mm:
            wanted = f"{tag.size_mm:g} mm wide at height {self.part.height_mm:g} mm"
            return NoPose(f"tag {tag.id} is not {wanted}: check the part's profile and the calibration")
        cut = self._cut(frame.pixels, start)
        found = None if cut is None else self._fit(cut, start)
        if found is None or isinstance(found, NoPose):
            return found or NoPose(f"tag {tag.id} stands at the rim of the image: bring the part back into view")
        return self._join(pose_filter.recall(self._belief, frame.captured_at_us), frame.captured_at_us, *found)

    def _near(self, pixels: Pixels, expected: Belief) -> tuple[Pose2, Array] | NoPose | None:
        """Pose and covariance by a fit at the expected pose, else at the best place around it; gated. None: outside the image."""
        cut = self._cut(pixels, expected.pose)
        if cut is None:
            return None
        found = self._fit(cut, expected.pose)
        if isinstance(found, NoPose):
            again = self._search(pixels, expected)
            found = found if again is None or isinstance(again, NoPose) else again
        if isinstance(found, NoPose) or pose_filter.surprise(expected, *found) <= pose_filter.GATE or self._is_sure():
            return found
        return NoPose(f"tag {self.tag.id} jumped farther than the part can move in a frame: is something else moving it?")

    def _search(self, pixels: Pixels, expected: Belief) -> tuple[Pose2, Array] | NoPose | None:
        """A fit from the place where the cells match best, as far around as the prediction is unsure."""
        cell = self._template.cell_mm
        sd = np.sqrt(np.diag(expected.covariance))
        reach_mm, reach_rad = min(max(3.0 * max(sd[0], sd[1]), 1.5 * cell), 4.0 * cell), min(max(3.0 * sd[2], 0.2), 0.6)
        cut = self._cut(pixels, expected.pose, CUT_SIDES + reach_mm / self.tag.size_mm)
        if cut is None:
            return None
        return self._fit(
            cut, cell_search.search(self._model, *cut, self._template, self.part.height_mm, expected.pose, reach_mm, reach_rad)
        )

    def _is_sure(self) -> bool:
        seen = self.quality
        return seen is not None and seen.cells_right >= SURE_CELLS and min(seen.agreeing_x, seen.agreeing_y) >= SURE_EDGES

    def _fit(self, cut: Cut, start: Pose2) -> tuple[Pose2, Array] | NoPose:
        tag, height = self.tag, self.part.height_mm
        found = edge_fit.fit(self._model, *cut, self._template, height, start)
        if isinstance(found, NoFit):
            return NoPose(f"tag {tag.id} {found.reason}")
        self.quality = edge_checks.judge(self._model, *cut, self._template, height, found)
        wrong = fault(found, self.quality)
        if wrong is not None:
            glare = "; the picture is overexposed" if self.quality.saturated > 0.5 else ""
            return NoPose(f"tag {tag.id} {wrong}{glare}")
        # Neighbouring edges begin to pull, and glare moves edges by different amounts.
        smear = (1.0 + (self.quality.blur_cells / 0.25) ** 4) * (1.0 + 3.0 * self.quality.saturated)
        return found.pose, found.covariance * smear + FLOOR

    def _cut(self, pixels: Pixels, pose: Pose2, sides: float = CUT_SIDES) -> Cut | None:
        """Grey cut-out around the tag; None where the tag is outside the image."""
        tag = self.tag
        middle = pose.apply([tag.x_mm, tag.y_mm])
        u, v = self._model.project_plane(middle, self.part.height_mm)
        reach = tag.size_mm * self._model.px_per_mm(middle, self.part.height_mm) * sides + 8.0
        rows, columns = pixels.shape[:2]
        if not (math.isfinite(u + v) and -reach < u < columns + reach and -reach < v < rows + reach):
            return None
        u_0, v_0 = max(int(u - reach), 0), max(int(v - reach), 0)
        cut = pixels[v_0 : int(v + reach) + 1, u_0 : int(u + reach) + 1]
        if min(cut.shape[:2]) < 8:
            return None
        grey = np.ascontiguousarray(cut if cut.ndim == 2 else cv2.cvtColor(cut, cv2.COLOR_BGR2GRAY), dtype=np.uint8)
        return grey, (u_0, v_0)

    def _join(self, expected: Belief | None, at_us: int, pose: Pose2, covariance: Array) -> PartPose:
        self._belief = pose_filter.join(expected, at_us, pose, covariance)
        return PartPose(pose, self._belief.pose, self._belief.twist, covariance)


def fault(found: EdgeFit, quality: Quality) -> str | None:
    """Why a fit must not be believed; None when it may."""
    if quality.blur_cells > MAX_BLUR_CELLS:
        return f"is blurred over {quality.blur_px:.1f} px: shorten the exposure, focus, or slow down"
    if min(quality.agreeing_x, quality.agreeing_y) < 0.3:
        return "shows too few of its edges: is it covered, blurred or too dark?"
    if quality.cells_right < 0.55 or quality.cells_right < quality.cells_aside + 0.12:
        return "does not look as it should: is it covered, damaged or badly lit?"
    # Covered cells are right half of the time, so a share v in view gives (1 + v) / 2 right cells and v agreeing edges.
    in_view = 2.0 * quality.cells_right - 1.0
    if 0.5 * (quality.agreeing_x + quality.agreeing_y) < LEAST_CONSISTENT * in_view:
        return "shows its cells but not its edges: is it blurred, covered or badly printed?"
    sd_mm = math.sqrt(max(found.covariance[0, 0], found.covariance[1, 1]))
    sd_rad = math.sqrt(found.covariance[2, 2])
    if sd_mm > 0.1 or sd_rad > math.radians(0.5):
        return f"is only placed to {sd_mm:.2f} mm, {math.degrees(sd_rad):.2f} deg: is it covered or too small in the image?"
    if quality.tilt_rad > max(MAX_TILT_RAD, TILT_SDS * quality.tilt_sd_rad):
        return f"stands {math.degrees(quality.tilt_rad):.0f} deg off the plate: the part is tipping, or the camera has moved"
    return None
