"""The part: a prism on the plate, with a fiducial on its top face."""

from __future__ import annotations

import math
from functools import cached_property
from typing import Annotated, Literal

import numpy as np
from pydantic import Discriminator, Field, Tag, model_validator

from hw_profiles import geometry
from hw_profiles.base import Name, NonNegative, Positive, Profile, refuse
from hw_profiles.geometry import Array, Pose2

N_DISC_CORNERS = 96  # outline drawn for a disc; its sagitta at 60 mm is 0.016 mm


class Disc(Profile):
    """A round part; the part frame's origin is its centre."""

    kind: Literal["disc"]
    diameter_mm: Positive


class Polygon(Profile):
    """A straight-sided part, convex or not; corners counter-clockwise in the part frame."""

    kind: Literal["polygon"]
    outline_mm: tuple[tuple[float, float], ...] = Field(min_length=3, max_length=64)

    @model_validator(mode="after")
    def _is_a_polygon(self) -> Polygon:
        if not geometry.is_simple(self.outline_mm):
            raise refuse("outline_mm: two edges touch or an edge has no length; allowed: a simple polygon")
        if geometry.signed_area(self.outline_mm) <= 0:
            raise refuse("outline_mm runs clockwise; allowed: counter-clockwise")
        middle = geometry.centroid(self.outline_mm)
        if np.linalg.norm(middle) > 0.5 * math.sqrt(geometry.signed_area(self.outline_mm)):
            raise refuse(f"outline_mm has its centroid at ({middle[0]:.1f}, {middle[1]:.1f}); allowed: near the origin of the part frame")
        return self


class Fiducial(Profile):
    """A square tag of the open 36h11 family, glued flat on the top face."""

    family: Literal["36h11"] = "36h11"
    id: int = Field(ge=0, le=586)
    size_mm: Positive = Field(description="outer edge of the black square")
    x_mm: float = 0.0
    y_mm: float = 0.0
    angle_deg: float = 0.0

    @property
    def part_from_tag(self) -> Pose2:
        """Pose of the tag (centre; x to the right of the upright tag) in the part frame."""
        return Pose2(self.x_mm, self.y_mm, math.radians(self.angle_deg))

    def corners_mm(self) -> Array:
        """Corners (4, 2) [mm] in the part frame: top left, top right, bottom right, bottom left of the upright tag."""
        return _rectangle_mm(self.part_from_tag, self.half_mm)

    @property
    def half_mm(self) -> tuple[float, float]:
        """Half its extent along its own axes."""
        return self.size_mm / 2.0, self.size_mm / 2.0


class Spots(Profile):
    """Two round spots of different colours on a white card, glued flat on the top face; the first lies to the left."""

    family: Literal["two-spots"]
    spot_mm: Positive = Field(description="diameter of a spot")
    spacing_mm: Positive = Field(description="from centre to centre")
    first_rgb: tuple[int, int, int] = Field(description="printed colour, 0 … 255; a taught colour table replaces it")
    second_rgb: tuple[int, int, int]
    x_mm: float = 0.0
    y_mm: float = 0.0
    angle_deg: float = 0.0

    @model_validator(mode="after")
    def _spots_can_be_told_apart(self) -> Spots:
        if self.spacing_mm < 1.5 * self.spot_mm:
            raise refuse(f"spacing_mm {self.spacing_mm:g} must be at least 1.5 times spot_mm {self.spot_mm:g}")
        for key, rgb in (("first_rgb", self.first_rgb), ("second_rgb", self.second_rgb)):
            if not all(0 <= value <= 255 for value in rgb) or max(rgb) - min(rgb) < 80:
                raise refuse(f"{key} {list(rgb)}: values must lie in 0 … 255 and differ by 80 or more, a vivid colour")
        shares = [np.array(rgb) / sum(rgb) for rgb in (self.first_rgb, self.second_rgb)]
        if np.linalg.norm(shares[0] - shares[1]) < 0.3:
            raise refuse(f"first_rgb {list(self.first_rgb)} and second_rgb {list(self.second_rgb)} are too alike in hue")
        return self

    @property
    def part_from_tag(self) -> Pose2:
        """Pose of the card (its middle; x from the first spot to the second) in the part frame."""
        return Pose2(self.x_mm, self.y_mm, math.radians(self.angle_deg))

    @property
    def half_mm(self) -> tuple[float, float]:
        """Half the card's extent along its own axes: a quarter of a spot's diameter is left white all round."""
        return self.spacing_mm / 2.0 + 0.75 * self.spot_mm, 0.75 * self.spot_mm

    def corners_mm(self) -> Array:
        """Corners (4, 2) [mm] of the card in the part frame: top left, top right, bottom right, bottom left."""
        return _rectangle_mm(self.part_from_tag, self.half_mm)

    def centres_mm(self) -> Array:
        """Middles (2, 2) [mm] of the first and the second spot in the part frame."""
        return self.part_from_tag.apply([[-self.spacing_mm / 2.0, 0.0], [self.spacing_mm / 2.0, 0.0]])


def _rectangle_mm(part_from_tag: Pose2, half_mm: tuple[float, float]) -> Array:
    x, y = half_mm
    return part_from_tag.apply([[-x, y], [x, y], [x, -y], [-x, -y]])


def _family(fiducial: object) -> str:
    """The kind of fiducial a table is of; tables without the key are tags."""
    found = fiducial.get("family", "36h11") if isinstance(fiducial, dict) else getattr(fiducial, "family", "36h11")
    return str(found)


Mark = Annotated[Annotated[Fiducial, Tag("36h11")] | Annotated[Spots, Tag("two-spots")], Discriminator(_family)]


class Part(Profile):
    """A prismatic part."""

    name: Name
    title: str = ""
    shape: Annotated[Disc | Polygon, Field(discriminator="kind")]
    height_mm: Positive
    mass_g: Positive
    friction: NonNegative = Field(0.36, le=2.0, description="coefficient between part and finger")
    plate_friction: NonNegative = Field(0.25, le=2.0, description="coefficient between part and plate")
    fiducial: Mark

    @model_validator(mode="after")
    def _tag_fits(self) -> Part:
        tag, outline = self.fiducial, np.array(self.outline_mm)
        corners = tag.corners_mm()
        points = np.concatenate([corners, (corners + np.roll(corners, 1, axis=0)) / 2.0])
        notches = tag.part_from_tag.inverse().apply(outline)
        bitten = np.any(np.all(np.abs(notches) < np.array(tag.half_mm) - 1e-9, axis=1))
        if bitten or not geometry.contains(outline, points).all():
            size = f"size_mm {tag.size_mm:g}" if isinstance(tag, Fiducial) else f"spacing_mm {tag.spacing_mm:g}"
            raise refuse(
                f"fiducial.{size} at ({tag.x_mm:g}, {tag.y_mm:g}) reaches past the part's outline; allowed: a tag that lies on the part"
            )
        return self

    @cached_property
    def outline_mm(self) -> tuple[tuple[float, float], ...]:
        """Outline counter-clockwise in the part frame; a disc as a fine polygon."""
        if isinstance(self.shape, Polygon):
            return self.shape.outline_mm
        turns = np.arange(N_DISC_CORNERS) * (2.0 * math.pi / N_DISC_CORNERS)
        radius = self.shape.diameter_mm / 2.0
        return tuple((float(x), float(y)) for x, y in radius * np.stack([np.cos(turns), np.sin(turns)], axis=1))

    @cached_property
    def is_convex(self) -> bool:
        """Whether the outline is convex."""
        return isinstance(self.shape, Disc) or geometry.is_convex(self.outline_mm)

    @cached_property
    def n_fold(self) -> int:
        """Order of the rotational symmetry about the part frame's origin: 6 for a hexagon, 0 for a disc (any angle), else 1."""
        if isinstance(self.shape, Disc):
            return 0
        corners = np.array(self.outline_mm)
        for n in range(len(corners), 1, -1):
            turned = Pose2(0.0, 0.0, 2.0 * math.pi / n).rotate(corners)
            if np.linalg.norm(turned[:, None] - corners[None], axis=-1).min(axis=1).max() < 1e-3:
                return n
        return 1

    @cached_property
    def circumradius_mm(self) -> float:
        """Distance from the part frame's origin to the farthest point of the outline."""
        if isinstance(self.shape, Disc):
            return self.shape.diameter_mm / 2.0
        return float(np.linalg.norm(self.outline_mm, axis=1).max())

    @cached_property
    def cage_gap_mm(self) -> float:
        """A gap below this cannot let the part through: minimum width if convex, inscribed-circle diameter if not.

        Convex: a gate is passed iff it is at least as wide as the part's minimum width. Non-convex: the width of the hull is
        unsafe (a notch can straddle a finger); the largest inscribed circle cannot pass a narrower gap, so neither can the part.
        """
        if isinstance(self.shape, Disc):
            return self.shape.diameter_mm
        if self.is_convex:
            return geometry.minimum_width(self.outline_mm)
        return 2.0 * geometry.inscribed_radius(self.outline_mm)

    @cached_property
    def inertia_gmm2(self) -> float:
        """Moment of inertia about the vertical through the centroid [g·mm²]."""
        if isinstance(self.shape, Disc):
            return self.mass_g * self.shape.diameter_mm**2 / 8.0
        return self.mass_g * geometry.gyration_radius_sq(self.outline_mm)
