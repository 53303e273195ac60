"""Teaching the colours of a part's spots from a few frames, in the light and through the camera they will be seen with."""

from __future__ import annotations

import datetime
from dataclasses import dataclass

import numpy as np

from hw_profiles.calibration import ColourCalibration
from hw_profiles.errors import CalibrationError
from hw_profiles.geometry import Array
from hw_profiles.part import Part, Spots
from vision import colour
from vision.camera_model import CameraModel
from vision.colour import CHROMA_REACH, Palette
from vision.frames import Pixels

MIN_FRAMES = 3
MAX_SPREAD = CHROMA_REACH / 2.0
MIN_APART = 2.0 * CHROMA_REACH
INSIDE = 0.6  # of a spot's radius, whose pixels are taken


@dataclass(frozen=True, slots=True, eq=False)
class Sample:
    """Chromas (n, 2) of the pixels inside the first and the second spot of one frame."""

    first: Array
    second: Array


def sample(model: CameraModel, part: Part, pixels: Pixels, spots_px: Array | None = None) -> Sample | None:
    """Chromas in one frame; None where the spots cannot be found.

    spots_px : (2, 2) where the two spots are, given by a person; None: found by their printed colours.
    """
    spots = part.fiducial
    if not isinstance(spots, Spots):
        raise ValueError(f"part '{part.name}' has no coloured spots to teach")
    plate = colour.plate_colour(pixels)
    if spots_px is None:
        spots_px = _by_printed_colour(model, part, spots, pixels, plate)
        if spots_px is None:
            return None
    found = []
    for start in model.plane_points(spots_px, part.height_mm):
        spot = colour.refine(model, pixels, (0, 0), spots, part.height_mm, start)
        if spot is None:
            return None
        found.append(colour.chroma_of(_inside(model, pixels, spot.centre_mm, part.height_mm, INSIDE * spots.spot_mm / 2.0), plate))
    return Sample(found[0], found[1])


def solve_colours(samples: list[Sample], model: CameraModel, part: Part, made_from: str, made_on: datetime.date) -> ColourCalibration:
    """The taught colours.

    Raises
    ------
    CalibrationError
        Too few frames, spots whose pixels scatter too far, or two colours too alike.
    """
    if len(samples) < MIN_FRAMES:
        raise CalibrationError(f"the spots were found in {len(samples)} frames, needed: {MIN_FRAMES}; show them uncovered, in even light")
    means, spreads = [], []
    for pixels in (np.concatenate([s.first for s in samples]), np.concatenate([s.second for s in samples])):
        means.append(pixels.mean(axis=0))
        spreads.append(float(np.sqrt(np.mean(np.sum((pixels - means[-1]) ** 2, axis=1)))))
    if max(spreads) > MAX_SPREAD:
        which = ("first", "second")[int(np.argmax(spreads))]
        raise CalibrationError(f"the {which} spot's colour scatters by {max(spreads):.3f}, allowed: {MAX_SPREAD:.3f}: is there glare?")
    apart = float(np.linalg.norm(means[0] - means[1]))
    if apart < MIN_APART:
        raise CalibrationError(f"the two colours are {apart:.2f} apart, needed: {MIN_APART:.2f}; print more vivid ones")
    camera = model.camera
    return ColourCalibration(
        made_on=made_on.isoformat(),
        made_from=made_from,
        camera=camera.name,
        width_px=camera.width_px,
        height_px=camera.height_px,
        part=part.name,
        first_chroma=(float(means[0][0]), float(means[0][1])),
        second_chroma=(float(means[1][0]), float(means[1][1])),
        spread=max(spreads),
        n_frames=len(samples),
    )


def _by_printed_colour(model: CameraModel, part: Part, spots: Spots, pixels: Pixels, plate: Array) -> Array | None:
    area_px = np.pi / 4.0 * (spots.spot_mm * model.px_per_mm((0.0, 0.0), part.height_mm)) ** 2
    seen = colour.candidates(pixels, plate, Palette.of(spots, None), 1, float(area_px))
    first, second = ([model.plane_points(middle, part.height_mm) for middle in middles] for middles in seen)
    best = colour.pair(first, second, spots.spacing_mm)
    return None if best is None else model.project_plane(np.stack(best), part.height_mm)


def _inside(model: CameraModel, pixels: Pixels, centre_mm: Array, z_mm: float, radius_mm: float) -> Array:
    """Pixels (n, 3) whose middles lie within radius_mm of a point of the plane."""
    u, v = model.project_plane(centre_mm, z_mm)
    reach = 1.2 * radius_mm * model.px_per_mm(centre_mm, z_mm) + 2.0
    rows, columns = np.mgrid[int(v - reach) : int(v + reach) + 1, int(u - reach) : int(u + reach) + 1]
    places = model.plane_points(np.stack([columns, rows], axis=-1).astype(float), z_mm)
    near = np.linalg.norm(places - centre_mm, axis=-1) < radius_mm
    return pixels[rows[near], columns[near]].astype(float)
