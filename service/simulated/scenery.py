"""What the simulated camera looks at, painted once: the plate with its servo cases, and the part's top face."""

from __future__ import annotations

import math

import cv2
import numpy as np
from numpy.typing import NDArray

from control.model.kinematics import HandModel
from hw_profiles.geometry import Array
from hw_profiles.part import Fiducial, Part, Spots
from vision import pattern
from vision.camera_model import CameraModel

Colour = tuple[float, float, float]  # blue, green, red
PLATE: Colour = (118.0, 110.0, 102.0)
CASE: Colour = (62.0, 56.0, 52.0)
ENGRAVING = -22.0
FACE: Colour = (172.0, 176.0, 178.0)
PAPER: Colour = (226.0, 229.0, 230.0)
INK: Colour = (34.0, 32.0, 32.0)
SCRIBE: Colour = (46.0, 60.0, 176.0)
LENS_BLUR_PX = 0.5  # standard deviation of the lens and the pixel's own square together: 0.5² + 1/12
PIXEL_BLUR_PX = math.sqrt(LENS_BLUR_PX**2 + 1.0 / 12.0)
TEXELS_PER_PX = 3.0


def plate_image(model: CameraModel, hand_model: HandModel, plate_mm: NDArray[np.float32], rng: np.random.Generator) -> NDArray[np.float32]:
    """The empty plate (height, width, 3) in grey levels: brushed grain, engraved rings and cross, servo cases, a soft light.

    plate_mm (height, width, 2) : where on the plate each pixel looks.
    """
    height, width = plate_mm.shape[:2]
    x, y = plate_mm[..., 0], plate_mm[..., 1]
    grain = cv2.GaussianBlur(rng.normal(0.0, 1.0, (height, width)).astype(np.float32), (0, 0), sigmaX=6.0, sigmaY=0.7)
    cloud = cv2.resize(rng.normal(0.0, 1.0, (9, 16)).astype(np.float32), (width, height), interpolation=cv2.INTER_CUBIC)
    shade = 4.0 * grain / max(float(grain.std()), 1e-6) * 0.6 + 1.5 * cloud
    radius = np.hypot(x, y)
    reach = float(np.linalg.norm(hand_model.base_mm, axis=1).max())
    for ring in (25.0, 50.0, 75.0):
        shade += ENGRAVING * 0.6 * _line(np.abs(radius - ring), 0.25)
    shade += ENGRAVING * np.maximum(_line(np.abs(x), 0.25), _line(np.abs(y), 0.25)) * (radius < 82.0)
    light = 1.06 - 0.20 * (np.hypot(x + 60.0, y - 80.0) / (3.0 * reach)) ** 2
    image = (np.array(PLATE, np.float32) + shade[..., None]) * light[..., None]
    for base, yaw in zip(hand_model.base_mm, hand_model.base_yaw_rad, strict=True):
        _servo_case(image, x - base[0], y - base[1], yaw)
    soft: NDArray[np.float32] = cv2.GaussianBlur(image.astype(np.float32), (0, 0), LENS_BLUR_PX)
    return soft


def _line(distance: NDArray[np.float32], half_width: float) -> NDArray[np.float32]:
    return np.clip((half_width + 0.2 - distance) / 0.4, 0.0, 1.0)


def _servo_case(image: NDArray[np.float32], dx: NDArray[np.float32], dy: NDArray[np.float32], yaw: float) -> None:
    """A servo of the common size (40 × 20 mm) under the finger's base, its shaft a quarter in from the front."""
    along = math.cos(yaw) * dx + math.sin(yaw) * dy + 10.0
    across = -math.sin(yaw) * dx + math.cos(yaw) * dy
    for half_along, half_across, colour in ((27.0, 9.0, CASE), (20.0, 10.0, CASE), (18.6, 8.6, tuple(1.25 * c for c in CASE))):
        outside = np.maximum(np.abs(along) - half_along, np.abs(across) - half_across)
        cover = np.clip(0.5 - outside / 0.5, 0.0, 1.0)[..., None]
        if half_along == 27.0:
            shadow = 0.45 * np.clip((3.0 - np.maximum(np.abs(along) - 26.0, np.abs(across) - 10.0)) / 5.0, 0.0, 1.0)[..., None]
            image *= 1.0 - shadow
        image += cover * (np.array(colour, np.float32) - image)


def face_texture(part: Part, px_per_mm: float) -> tuple[NDArray[np.uint8], Array]:
    """The top face, blurred as the lens and the pixels will blur it, so that plain interpolation of it is unbiased.

    Returns
    -------
    texture, uint8 (n, n, 4) : blue, green, red, and how much of the texel the part covers (255: all).
    texel_from_part, (3,) : texels per mm, and the texel (column, row) of the part frame's origin; rows run along +y.
    """
    fine = 4  # painted so much finer, then averaged
    cell_mm = part.fiducial.half_mm[0] / (pattern.N_CELLS / 2)
    scale = round(TEXELS_PER_PX * px_per_mm * cell_mm * fine / 2) * 2 / (cell_mm * fine)  # cells end between fine texels
    half = math.ceil((part.circumradius_mm + 2.0) * scale)
    n = 2 * half + 1
    tag = np.array([part.fiducial.x_mm, part.fiducial.y_mm]) * scale
    column_0, row_0 = half - (tag - np.round(tag)) + 0.5  # and the tag's middle does so too
    steps = (np.arange(n * fine, dtype=np.float32) + 0.5) / fine - 0.5
    x, y = np.meshgrid((steps - column_0) / scale, (steps - row_0) / scale)
    cover = np.zeros((n * fine, n * fine), np.uint8)
    corners = (np.array(part.outline_mm) * scale + np.array([column_0, row_0]) + 0.5) * fine - 0.5
    cv2.fillPoly(cover, [np.round(corners * 16).astype(np.int32)], 255, cv2.LINE_8, 4)
    colour = _paint_face(part, x, y)
    layers = np.dstack(
        [cv2.resize(layer, (n, n), interpolation=cv2.INTER_AREA) for layer in (*cv2.split(colour), cover.astype(np.float32))]
    )
    blurred = cv2.GaussianBlur(layers, (0, 0), PIXEL_BLUR_PX * TEXELS_PER_PX)
    return np.clip(np.round(blurred), 0, 255).astype(np.uint8), np.array([scale, column_0, row_0])


def _paint_face(part: Part, x: NDArray[np.float32], y: NDArray[np.float32]) -> NDArray[np.float32]:
    """Turned or milled face, a scribed radius to read the angle by, and the paper tag."""
    radius = np.hypot(x, y)
    tool_marks = 2.5 * np.sin(radius * 5.0) if part.is_convex else 2.5 * np.sin((x + 0.4 * y) * 4.0)
    colour = np.array(FACE, np.float32) + (tool_marks + 0.25 * (y - 0.5 * x))[..., None].astype(np.float32)
    scribe = (np.abs(y) < 0.35) & (x > 0.55 * part.circumradius_mm)
    colour[scribe] = SCRIBE
    mark = part.fiducial
    in_mark = mark.part_from_tag.inverse().apply(np.stack([x, y], axis=-1))
    if isinstance(mark, Spots):
        _paint_spots(colour, mark, in_mark)
    else:
        _paint_tag(colour, mark, in_mark)
    return colour


def _paint_tag(colour: NDArray[np.float32], tag: Fiducial, in_mark: Array) -> None:
    cell = in_mark / (tag.size_mm / pattern.N_CELLS) + pattern.N_CELLS / 2
    column, row = np.floor(cell[..., 0]).astype(int), pattern.N_CELLS - 1 - np.floor(cell[..., 1]).astype(int)
    on_paper = (np.minimum(column, row) >= -1) & (np.maximum(column, row) <= pattern.N_CELLS)
    colour[on_paper] = PAPER
    on_tag = (np.minimum(column, row) >= 0) & (np.maximum(column, row) < pattern.N_CELLS)
    white = pattern.cells(tag.id)[np.clip(row, 0, pattern.N_CELLS - 1), np.clip(column, 0, pattern.N_CELLS - 1)]
    colour[on_tag & ~white] = INK


def _paint_spots(colour: NDArray[np.float32], spots: Spots, in_mark: Array) -> None:
    colour[np.all(np.abs(in_mark) <= np.array(spots.half_mm), axis=-1)] = PAPER
    for side, rgb in ((-0.5, spots.first_rgb), (0.5, spots.second_rgb)):
        away = np.hypot(in_mark[..., 0] - side * spots.spacing_mm, in_mark[..., 1])
        colour[away <= spots.spot_mm / 2.0] = rgb[::-1]
