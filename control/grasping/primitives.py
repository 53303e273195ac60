"""Primitives: the stored postures that every carried posture is a blend of.

Around the ring pose at which a grasp is wanted stands one cell of its reach lattice. Each of the cell's eight corners gives two
primitives, one tight (tips commanded into the part) and one loose (tips standing off); blends of the sixteen reach every pose in the
cell at any squeeze between.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from control.grasping.hold import Bench
from control.grasping.reach import CORNERS, PITCH, Reach
from hw_profiles.geometry import Array

TIGHT_MM = -6.0  # clearance of a tight primitive


@dataclass(frozen=True, eq=False)
class Primitives:
    """Named postures: joints (n_primitives, n_joints), read-only."""

    names: tuple[str, ...]
    joints: Array


def primitives_of(bench: Bench, reach: Reach, cell: tuple[int, int, int], loose_mm: float) -> Primitives:
    """The sixteen primitives of a lattice cell whose corners the grasp can hold."""
    names, postures = [], []
    for corner in np.array(cell) + CORNERS:
        pose = reach.origin + PITCH * corner
        touching = reach.joints[tuple(corner)]
        for tightness, clearance_mm in (("tight", TIGHT_MM), ("loose", loose_mm)):
            joints, _ = reach.grasp.joints(bench.hand, bench.shape, pose, clearance_mm, touching)
            names.append(f"{tightness} {pose[0]:+.0f} {pose[1]:+.0f} {math.degrees(pose[2]):+.0f}")
            postures.append(joints)
    stacked = np.array(postures)
    stacked.setflags(write=False)
    return Primitives(tuple(names), stacked)
