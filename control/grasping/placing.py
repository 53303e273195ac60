"""Placing fingers about a part so that each one, by whatever of it is nearest, stands off or presses by a wanted amount.

A tip is put over its contact along the contact's normal. Where the last link would then run into the part beside the tip (fingers that
wrap a part like an iris touch it with their flank), the tip is drawn back along the normal until the finger as a whole stands where it
should. One solve costs some 10 µs a finger.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from control.model.contact import PartShape, touches
from control.model.kinematics import HandArrays, HandModel, centre_lines_kernel, place_all
from hw_profiles.geometry import Array

SETTLED_MM = 0.05
N_CORRECTIONS = 8


def place(
    hand: HandModel, shape: PartShape, contacts_mm: Array, normals: Array, turns_rad: Array, pose: Array, clearance_mm: float, near: Array
) -> tuple[Array, float, Array]:
    """Joint values that put every finger at a clearance about the part at `pose` (3,).

    Parameters
    ----------
    contacts_mm, normals : (n_fingers, 2) nominal contacts and outward normals in the part frame.
    turns_rad : (n_fingers,) from a contact's normal to the wanted direction of the last link; nan where it does not matter.
    clearance_mm : wanted distance of each finger to the part; negative presses that far in.

    Returns
    -------
    joints (n_joints,); the worst distance [mm] that inverse kinematics or the clearance fall short by; and where each finger is
    nearest: (n_fingers, 5) point and outward normal in the part frame [mm], and the signed clearance [mm].
    """
    joints, left_mm, touch = place_about(
        hand.arrays, shape.outline_mm, shape.radius_mm, contacts_mm, normals, turns_rad, pose, clearance_mm, near
    )
    return joints, float(left_mm), touch


@njit(cache=True)
def place_about(
    hand: HandArrays,
    outline_mm: Array,
    disc_mm: float,
    contacts_mm: Array,
    normals: Array,
    turns_rad: Array,
    pose: Array,
    clearance_mm: float,
    near: Array,
) -> tuple[Array, float, Array]:
    """Kernel of `place`."""
    n = hand.base_mm.shape[0]
    cos, sin = math.cos(pose[2]), math.sin(pose[2])
    drawn_back, left_mm = np.zeros(n), np.empty(n)
    centres, yaws, touch = np.empty((n, 2)), np.empty(n), np.empty((n, 5))
    joints = near
    for _ in range(N_CORRECTIONS):
        for f in range(n):
            off = hand.contact_radius_mm[f] + clearance_mm + drawn_back[f]
            px, py = contacts_mm[f, 0] + normals[f, 0] * off, contacts_mm[f, 1] + normals[f, 1] * off
            centres[f, 0], centres[f, 1] = pose[0] + cos * px - sin * py, pose[1] + sin * px + cos * py
            yaws[f] = math.atan2(normals[f, 1], normals[f, 0]) + turns_rad[f] + pose[2]
        joints = place_all(hand, centres, yaws, joints, left_mm)
        touches(hand, centre_lines_kernel(hand, joints), pose, outline_mm, disc_mm, touch)
        short = 0.0
        for f in range(n):
            lack = clearance_mm - touch[f, 4]
            if lack > SETTLED_MM:
                drawn_back[f] += 1.2 * lack
            short = max(short, lack)
        if short <= SETTLED_MM:
            break
    return joints, max(left_mm.max(), short), touch
