"""A part as a union of convex pieces: what the closed forms of `sweep` and `reach` work on."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from hw_profiles.geometry import Array
from hw_profiles.part import Disc, Part


class Pieces(NamedTuple):
    """Convex pieces as kernels take them, in the part frame.

    corners_mm : (m, 2) corners of all pieces, each counter-clockwise. first : (n + 1,) piece i owns corners first[i]:first[i + 1].
    round_mm : the radius by which every piece is rounded; a disc is one corner with its radius.
    """

    corners_mm: Array
    first: NDArray[np.int64]
    round_mm: float


def pieces_of(part: Part) -> Pieces:
    """The convex pieces of a part."""
    if isinstance(part.shape, Disc):
        return Pieces(np.zeros((1, 2)), np.array([0, 1]), part.circumradius_mm)
    found = convex_pieces(np.array(part.outline_mm))
    return Pieces(np.concatenate(found), np.concatenate([[0], np.cumsum([len(piece) for piece in found])]), 0.0)


def convex_pieces(outline_mm: Array) -> list[Array]:
    """Convex polygons whose union is a simple polygon (n, 2), cut at each reflex corner along one of its edges (Chazelle 1980, naive)."""
    edges = outline_mm - np.roll(outline_mm, 1, axis=0)  # into each corner
    ahead = np.roll(edges, -1, axis=0)
    turn = edges[:, 0] * ahead[:, 1] - edges[:, 1] * ahead[:, 0]
    reflex = np.flatnonzero(turn < -1e-9)
    if not len(reflex):
        return [outline_mm]
    corner = int(reflex[0])
    polygon = np.roll(outline_mm, -corner, axis=0)  # the reflex corner comes first
    edge, spot = _hit(polygon, edges[corner])
    halves = (np.concatenate([polygon[: edge + 1], [spot]]), np.concatenate([[polygon[0], spot], polygon[edge + 1 :]]))
    return [piece for half in halves for piece in convex_pieces(_tidy(half))]


def _hit(polygon: Array, direction: Array) -> tuple[int, Array]:
    """The first edge that the ray from the first corner meets, and where."""
    best, best_edge = np.inf, -1
    for i in range(1, len(polygon) - 1):
        a, b = polygon[i] - polygon[0], polygon[i + 1] - polygon[0]
        side_a, side_b = direction[0] * a[1] - direction[1] * a[0], direction[0] * b[1] - direction[1] * b[0]
        if side_a * side_b > 0.0 or side_a == side_b:
            continue
        share = side_a / (side_a - side_b)
        along = float((a + share * (b - a)) @ direction) / float(direction @ direction)
        if 1e-9 < along < best:
            best, best_edge = along, i
    return best_edge, polygon[0] + best * direction


def _tidy(polygon: Array) -> Array:
    """The polygon without corners that coincide with the one before."""
    apart = np.linalg.norm(polygon - np.roll(polygon, 1, axis=0), axis=1) > 1e-9
    return polygon[apart]
