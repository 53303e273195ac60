"""What a square tag of the 36h11 family looks like: its cells, and where they stand on the part.

A code of 6 × 6 cells inside a black border one cell wide (Olson, AprilTag, ICRA 2011; Wang & Olson, AprilTag 2, IROS 2016). The
tag needs a white margin one cell wide around the border.

Upright is as OpenCV draws the family; some other programs draw the same codes turned by 180 degrees, and a tag printed by those
reads half a turn off: set angle_deg = 180 in the part's profile, or print the tag with `palmloop calibrate mark`.
"""

from __future__ import annotations

from functools import lru_cache

import cv2
import numpy as np
from numpy.typing import NDArray

from hw_profiles.geometry import Array
from hw_profiles.part import Fiducial

N_CELLS = 8  # along a side, border included
N_CODES = 587


def family() -> cv2.aruco.Dictionary:
    """All codes of 36h11."""
    return cv2.aruco.getPredefinedDictionary(cv2.aruco.DICT_APRILTAG_36h11)


@lru_cache(maxsize=64)
def cells(tag_id: int) -> NDArray[np.bool_]:
    """Whether each cell (8, 8) is white, rows from the top of the upright tag; read-only."""
    white = np.asarray(family().generateImageMarker(tag_id, N_CELLS)) > 127
    white.setflags(write=False)
    return white


def cell_centres_mm(fiducial: Fiducial, margin: int = 0) -> Array:
    """Centres (n, n, 2) [mm] of the cells in the part frame, n = 8 + 2 · margin, rows from the top of the upright tag."""
    pitch = fiducial.size_mm / N_CELLS
    steps = (np.arange(N_CELLS + 2 * margin) - margin + 0.5) * pitch - fiducial.size_mm / 2.0
    x, y = np.meshgrid(steps, -steps)
    return fiducial.part_from_tag.apply(np.stack([x, y], axis=-1))
