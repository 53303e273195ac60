"""The part: a prism on the plate, with a fiducial on its top face."""

from __future__ import annotations

import math
from functools import cached_property
from typing import Annotated, Literal

import numpy as np
from pydantic import Field, model_validator

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
            raise refuse(
                f"outline_mm has its centroid at ({middle[0]:.1f}, {middle[1]:.1f}); allowed: near the origin of the part frame"
            )
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
        half = self.size_mm / 2.0
        return self.part_from_tag.apply([[-half, half], [half, half], [half, -half], [-half, -half]])


class Part(Profile):
    """A prismatic part."""

    name: Name
    title: str = ""
    shape: Annotated[Disc | Polygon, Field(discriminator="kind")]
    height_mm: Positive
    mass_g: Positive
    friction: NonNegative = Field(0.36, le=2.0, description="coefficient between part and finger")
    plate_friction: NonNegative = Field(0.25, le=2.0, description="coefficient between part and plate")
    fiducial: Fiducial

    @model_validator(mode="after")
    def _tag_fits(self) -> Part:
        tag, outline = self.fiducial, np.array(self.outline_mm)
        corners = tag.corners_mm()
        points = np.concatenate([corners, (corners + np.roll(corners, 1, axis=0)) / 2.0])
        notches = tag.part_from_tag.inverse().apply(outline)
        bitten = np.any(np.abs(notches).max(axis=1) < tag.size_mm / 2.0 - 1e-9)
        if bitten or not geometry.contains(outline, points).all():
            raise refuse(
                f"fiducial.size_mm {tag.size_mm:g} at ({tag.x_mm:g}, {tag.y_mm:g}) reaches past the part's outline; "
                "allowed: a tag that lies on the part"
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
