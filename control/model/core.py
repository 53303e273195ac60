"""The convex core of a part: what of it a gate has to let through.

A part that contains a convex body cannot go where that body cannot go. A convex part is its own core; of any other part the widest convex
piece is taken that a sweep of seeds finds. It is at least as wide as the part's largest inscribed circle, so it certifies no less.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import linprog

from hw_profiles import geometry
from hw_profiles.geometry import Array
from hw_profiles.part import Disc, Part

N_SEEDS = 13  # a side of the grid of seeds over the part's bounding box


@dataclass(frozen=True, eq=False)
class ConvexCore:
    """A convex body inside a part, in the part frame.

    Attributes
    ----------
    outline_mm : (m, 2) corners counter-clockwise; (0, 2) for a disc.
    centre_mm, radius_mm : (2,) and [mm], the largest circle inside the core.
    width_mm : minimum width; no gap narrower than this lets the core, and so the part, through.
    """

    outline_mm: Array
    centre_mm: Array
    radius_mm: float
    width_mm: float

    @classmethod
    def of(cls, part: Part) -> ConvexCore:
        """The core of a part; a fraction of a second for a part that is not convex."""
        if isinstance(part.shape, Disc):
            return cls(np.zeros((0, 2)), np.zeros(2), part.circumradius_mm, part.shape.diameter_mm)
        outline = np.array(part.outline_mm)
        core = geometry.convex_hull(outline) if part.is_convex else widest_piece(outline)
        centre, radius_mm = incircle(core)
        return cls(core, centre, radius_mm, geometry.minimum_width(core))


def incircle(convex_mm: Array) -> tuple[Array, float]:
    """Centre (2,) and radius [mm] of the largest circle inside a convex polygon (m, 2): the Chebyshev centre, a linear programme."""
    edges = np.roll(convex_mm, -1, axis=0) - convex_mm
    lengths = np.linalg.norm(edges, axis=1)
    is_edge = lengths > 1e-9
    normals = np.stack([edges[:, 1], -edges[:, 0]], axis=1)[is_edge] / lengths[is_edge, None]
    offsets = (normals * convex_mm[is_edge]).sum(axis=1)
    constraints = np.concatenate([normals, np.ones((len(normals), 1))], axis=1)
    found = linprog([0.0, 0.0, -1.0], A_ub=constraints, b_ub=offsets, bounds=[(None, None), (None, None), (0.0, None)])
    return np.asarray(found.x[:2]), float(found.x[2])


def widest_piece(outline_mm: Array) -> Array:
    """The widest of the convex pieces grown around a grid of seeds inside a simple polygon (n, 2); corners (m, 2) [mm]."""
    low, high = outline_mm.min(axis=0), outline_mm.max(axis=0)
    steps = (np.arange(N_SEEDS) + 0.5) / N_SEEDS
    seeds = low + np.stack(np.meshgrid(steps, steps), axis=-1).reshape(-1, 2) * (high - low)
    seeds = seeds[geometry.contains(outline_mm, seeds)]
    clear = geometry.boundary_distance(outline_mm, seeds)
    seeds = seeds[clear > 0.3 * clear.max()]
    return max((convex_piece(outline_mm, seed) for seed in seeds), key=geometry.minimum_width)


def convex_piece(outline_mm: Array, seed_mm: Array) -> Array:
    """Convex polygon (m, 2) [mm] inside a simple polygon (n, 2), around a seed (2,) in it.

    Every edge is cut off by the line through its point nearest to the seed, square to the way there. A segment lies wholly on the far
    side of such a line, so the piece meets no edge; it holds the seed, so it lies inside.
    """
    low, high = outline_mm.min(axis=0), outline_mm.max(axis=0)
    piece = np.array([[low[0], low[1]], [high[0], low[1]], [high[0], high[1]], [low[0], high[1]]])
    edges = np.roll(outline_mm, -1, axis=0) - outline_mm
    along = np.clip(((seed_mm - outline_mm) * edges).sum(axis=1) / (edges * edges).sum(axis=1), 0.0, 1.0)
    nearest = outline_mm + along[:, None] * edges
    for spot in nearest:
        piece = _cut(piece, spot - seed_mm, spot)
    return piece


def _cut(convex_mm: Array, normal: Array, through_mm: Array) -> Array:
    """What of a convex polygon lies on the inner side of the line through a point, square to `normal` (Sutherland & Hodgman 1974)."""
    height = (convex_mm - through_mm) @ normal
    kept: list[Array] = []
    for i, (p, h) in enumerate(zip(convex_mm, height, strict=True)):
        q, g = convex_mm[(i + 1) % len(convex_mm)], height[(i + 1) % len(convex_mm)]
        if h <= 0.0:
            kept.append(p)
        if (h < 0.0 < g) or (g < 0.0 < h):
            kept.append(p + (q - p) * (h / (h - g)))
    return np.array(kept)
