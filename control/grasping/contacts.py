"""Where a finger may touch a part, and how well a set of such contacts holds it."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from hw_profiles import geometry
from hw_profiles.geometry import Array
from hw_profiles.part import Disc, Part

PITCH_MM = 4.0  # between candidate contacts along the outline
CORNER_MM = 4.0  # least distance of a contact from a corner
BACK_OUT_MM = 12.0  # how far a tip must be able to retreat along the normal
N_DIRECTIONS = 96


@dataclass(frozen=True, eq=False)
class Outline:
    """Candidate contacts of a part: points (m, 2) [mm] on its outline and outward unit normals (m, 2), in the part frame."""

    points_mm: Array
    normals: Array

    @property
    def bearings_rad(self) -> Array:
        """Bearing (m,) of each point about the part frame's origin."""
        return np.arctan2(self.points_mm[:, 1], self.points_mm[:, 0])


def tip_contacts(part: Part, tip_radius_mm: float) -> Outline:
    """Points that a round tip can touch and back out from along the normal, every few mm of the outline."""
    if isinstance(part.shape, Disc):
        n = max(24, round(math.pi * part.shape.diameter_mm / PITCH_MM))
        turns = np.arange(n) * (2.0 * math.pi / n)
        normals = np.stack([np.cos(turns), np.sin(turns)], axis=1)
        return Outline(part.circumradius_mm * normals, normals)
    points, normals = _edge_points(np.array(part.outline_mm))
    outline = np.array(part.outline_mm)
    is_free = np.ones(len(points), dtype=bool)
    for back_mm in np.linspace(0.0, BACK_OUT_MM, 7):
        centres = points + normals * (tip_radius_mm + back_mm)
        is_clear = geometry.boundary_distance(outline, centres) > tip_radius_mm - 1e-6
        is_free &= is_clear & ~geometry.contains(outline, centres)
    return Outline(points[is_free], normals[is_free])


def _edge_points(outline_mm: Array) -> tuple[Array, Array]:
    points: list[Array] = []
    normals: list[Array] = []
    for a, b in zip(outline_mm, np.roll(outline_mm, -1, axis=0), strict=True):
        length = float(np.linalg.norm(b - a))
        usable = length - 2.0 * CORNER_MM
        # A short edge offers its middle only.
        along = np.linspace(CORNER_MM, length - CORNER_MM, max(2, round(usable / PITCH_MM) + 1)) if usable > 0 else [length / 2.0]
        direction = (b - a) / length
        points.extend(a + direction * s for s in along)
        normals.extend([np.array([direction[1], -direction[0]])] * len(along))
    return np.array(points), np.array(normals)


def jaw_pairs(part: Part) -> list[Outline]:
    """Ways to take a part between two parallel flat jaws: one jaw on a hull edge, the other on the feature opposite.

    Kept where the opposite feature projects inside the edge, so that the squeeze does not tip the part over the edge's end: the
    stable minima of the diameter function (Goldberg, Algorithmica 1993).
    """
    if isinstance(part.shape, Disc):
        radius = part.circumradius_mm
        turns = np.arange(12) * (2.0 * math.pi / 12)
        rays = [np.array([math.cos(t), math.sin(t)]) for t in turns]
        return [Outline(np.array([radius * ray, -radius * ray]), np.array([ray, -ray])) for ray in rays]
    hull = geometry.convex_hull(part.outline_mm)
    pairs = []
    for a, b in zip(hull, np.roll(hull, -1, axis=0), strict=True):
        length = float(np.linalg.norm(b - a))
        along = (b - a) / length
        normal = np.array([along[1], -along[0]])
        depth = (hull - a) @ normal
        opposite = hull[depth < depth.min() + 1e-6]
        reach = (opposite - a) @ along
        low, high = max(float(reach.min()), 0.0), min(float(reach.max()), length)
        middle = 0.5 * (low + high)
        if not 0.05 * length < middle < 0.95 * length or low > high:
            continue
        here = a + along * middle
        pairs.append(Outline(np.array([here, here + normal * depth.min()]), np.array([normal, -normal])))
    return pairs


def _directions(n: int) -> Array:
    """Unit vectors (n, 3), evenly spread over the sphere (Fibonacci lattice)."""
    k = np.arange(n) + 0.5
    z, turn = 1.0 - 2.0 * k / n, math.pi * (1.0 + math.sqrt(5.0)) * k
    radius = np.sqrt(1.0 - z * z)
    return np.stack([radius * np.cos(turn), radius * np.sin(turn), z], axis=1)


DIRECTIONS = _directions(N_DIRECTIONS)


def closures(points_mm: Array, normals: Array, sets: NDArray[np.int64], friction: float, lever_mm: float) -> Array:
    """`closure` of many sets (k, n) of indices into the contacts: (k,)."""
    return np.array([closure(points_mm[one], normals[one], friction, lever_mm) for one in sets])


@njit(cache=True)
def closure(points_mm: Array, normals: Array, friction: float, lever_mm: float) -> float:
    """How well contacts resist every wrench: least over directions d of the greatest d·w over friction-cone edge wrenches.

    Parameters
    ----------
    points_mm, normals : (n, 2) contacts and outward normals in the part frame.
    friction : coefficient; the cone edges are ±atan(friction) from the inward normal.
    lever_mm : divides the moment, so that all three wrench components are forces.

    Returns
    -------
    ε of unit-force contacts; > 0 is force closure. The grasp quality of Ferrari & Canny (ICRA 1992) for independent contact forces,
    sampled on 96 directions.
    """
    n = points_mm.shape[0]
    angle = math.atan(friction)
    wrenches = np.empty((2 * n, 3))
    for c in range(n):
        inward = math.atan2(-normals[c, 1], -normals[c, 0])
        for side in range(2):
            turned = inward + (angle if side == 0 else -angle)
            fx, fy = math.cos(turned), math.sin(turned)
            wrenches[2 * c + side] = fx, fy, (points_mm[c, 0] * fy - points_mm[c, 1] * fx) / lever_mm
    least = np.inf
    for d in range(DIRECTIONS.shape[0]):
        most = -np.inf
        for w in range(2 * n):
            most = max(most, DIRECTIONS[d, 0] * wrenches[w, 0] + DIRECTIONS[d, 1] * wrenches[w, 1] + DIRECTIONS[d, 2] * wrenches[w, 2])
        least = min(least, most)
    return least
