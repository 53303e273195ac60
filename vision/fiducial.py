"""Finding tags without knowing where they are: whitelist of ids, half resolution, parameters tuned to the size a tag must have."""

from __future__ import annotations

import math
from dataclasses import dataclass

import cv2
import numpy as np

from hw_profiles.geometry import Array, Pose2
from hw_profiles.part import Fiducial, Part
from vision import pattern
from vision.camera_model import CameraModel
from vision.frames import Pixels

MIN_TAG_PX = 17.0  # a tag needs about two pixels a cell to be decoded
MAX_BITS_MENDED = 3  # of the 5 that a minimum distance of 11 would allow


@dataclass(frozen=True, slots=True, eq=False)
class Sighting:
    """A decoded tag: which part, and its corners (4, 2) in full-resolution pixels."""

    part_index: int
    corners_px: Array


class Finder:
    """Looks for the tags of some parts in a whole frame or a cut-out of one."""

    def __init__(self, model: CameraModel, parts: tuple[Part, ...]) -> None:
        tags = [part.fiducial for part in parts if isinstance(part.fiducial, Fiducial)]
        if len(tags) != len(parts):
            raise ValueError("the finder of tags was given a part without a tag")
        heights = [part.height_mm for part in parts]
        scales = [model.px_per_mm((0.0, 0.0), height) for height in heights]
        self._tag_px = [tag.size_mm * scale for tag, scale in zip(tags, scales, strict=True)]
        self.shrink = 2 if min(self._tag_px) / 2.0 >= MIN_TAG_PX else 1
        ids = [tag.id for tag in tags]
        self._family = cv2.aruco.Dictionary(np.ascontiguousarray(pattern.family().bytesList[ids]), 6, 5)

    def find(self, pixels: Pixels, corner_px: tuple[int, int] = (0, 0), shrink: int | None = None) -> list[Sighting]:
        """Tags in an image (rows, columns[, 3]) whose first pixel stands at corner_px (u, v) of the frame."""
        shrink = self.shrink if shrink is None else shrink
        small = pixels
        if shrink > 1:
            size = (pixels.shape[1] // shrink, pixels.shape[0] // shrink)
            small = np.asarray(cv2.resize(pixels[: size[1] * shrink, : size[0] * shrink], size, interpolation=cv2.INTER_AREA), np.uint8)
        grey = np.asarray(small if small.ndim == 2 else cv2.cvtColor(small, cv2.COLOR_BGR2GRAY), np.uint8)
        corners, ids, _ = self._detector(grey, shrink).detectMarkers(grey)
        if ids is None:
            return []
        # Pixel centres are whole numbers, so a block of pixels has its centre at shrink · u + (shrink - 1) / 2.
        offset = np.array(corner_px) + (shrink - 1) / 2.0
        return [
            Sighting(int(index), np.asarray(quad, dtype=float).reshape(4, 2) * shrink + offset)
            for quad, index in zip(corners, ids.reshape(-1), strict=True)
        ]

    def _detector(self, grey: Pixels, shrink: int) -> cv2.aruco.ArucoDetector:
        """Detector whose limits are in pixels of this image: OpenCV takes perimeters relative to the longer side."""
        tuned = cv2.aruco.DetectorParameters()
        longest = max(grey.shape)
        perimeters = [4.0 * size / shrink / longest for size in self._tag_px]
        tuned.minMarkerPerimeterRate = 0.55 * min(perimeters)
        tuned.maxMarkerPerimeterRate = 1.8 * max(perimeters)
        window = 2 * math.ceil(min(self._tag_px) / shrink / pattern.N_CELLS) + 3
        tuned.adaptiveThreshWinSizeMin = tuned.adaptiveThreshWinSizeMax = max(window | 1, 5)
        tuned.adaptiveThreshConstant = 5.0
        tuned.minCornerDistanceRate = 0.1
        tuned.minDistanceToBorder = 1
        tuned.polygonalApproxAccuracyRate = 0.06
        tuned.perspectiveRemovePixelPerCell = 4
        tuned.errorCorrectionRate = MAX_BITS_MENDED / 5.0
        tuned.maxErroneousBitsInBorderRate = 0.15
        tuned.cornerRefinementMethod = cv2.aruco.CORNER_REFINE_NONE
        return cv2.aruco.ArucoDetector(self._family, tuned)


def rigid_pose(model: CameraModel, part: Part, corners_px: Array) -> tuple[Pose2, float]:
    """hand_from_part that fits a tag's corners (4, 2) on the plane at the part's height, and the RMS misfit [mm].

    Least-squares rotation and translation in the plane (orthogonal Procrustes without scale; Umeyama 1991).
    """
    seen = model.plane_points(corners_px, part.height_mm)
    known = part.fiducial.corners_mm()
    seen_0, known_0 = seen - seen.mean(axis=0), known - known.mean(axis=0)
    dot = float(np.sum(known_0 * seen_0))
    cross = float(np.sum(known_0[:, 0] * seen_0[:, 1] - known_0[:, 1] * seen_0[:, 0]))
    turn = Pose2(0.0, 0.0, math.atan2(cross, dot))
    shift = seen.mean(axis=0) - turn.rotate(known.mean(axis=0))
    pose = Pose2(float(shift[0]), float(shift[1]), turn.yaw_rad)
    misfit = float(np.sqrt(np.mean(np.sum((pose.apply(known) - seen) ** 2, axis=1))))
    return pose, misfit
