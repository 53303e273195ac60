"""A primitive grasp: where each finger touches the part, and the joint values that put it there."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from control.model.kinematics import HandModel, place_contacts
from hw_profiles.geometry import Array, Pose2


@dataclass(frozen=True, eq=False)
class Grasp:
    """Contacts of every finger on the part.

    Attributes
    ----------
    points_mm, normals : (n_fingers, 2) contacts on the outline and outward unit normals there, in the grasp frame, which is
        the part frame when the fingers close; as tips roll, the part turns a little further than the grasp.
    jaw_turn_rad : (n_fingers,) from a contact's normal to the direction of the jaw that lies flat there; nan for round tips.
    closure : quality ε of the contacts, see `contacts.closure`.
    """

    points_mm: Array
    normals: Array
    jaw_turn_rad: Array
    closure: float

    def placement(self, hand: HandModel, hand_from_grasp: Pose2, clearance_mm: float) -> tuple[Array, Array]:
        """Contact centres (n_fingers, 2) [mm] and last-link directions (n_fingers,) [rad, nan free] at a clearance.

        A negative clearance presses: the tips are commanded that far into the part.
        """
        stand_off = (hand.contact_radius_mm + clearance_mm)[:, None]
        centres = hand_from_grasp.apply(self.points_mm + self.normals * stand_off)
        yaws = np.arctan2(self.normals[:, 1], self.normals[:, 0]) + self.jaw_turn_rad + hand_from_grasp.yaw_rad
        return centres, yaws

    def joints(self, hand: HandModel, hand_from_grasp: Pose2, clearance_mm: float, near: Array) -> tuple[Array, float]:
        """Joint values (n_joints,) of that placement, and the worst distance left [mm] of any finger."""
        centres, yaws = self.placement(hand, hand_from_grasp, clearance_mm)
        joints, left_mm = place_contacts(hand, centres, yaws, near)
        return joints, float(left_mm.max())


def base_bearings(hand: HandModel, about_mm: Array) -> Array:
    """Bearing (n_fingers,) [rad] of every finger's base about a point."""
    offset = hand.base_mm - about_mm
    return np.arctan2(offset[:, 1], offset[:, 0])


def phases(grasp: Grasp, hand: HandModel, hand_from_grasp: Pose2) -> Array:
    """Bearing of every contact about the part less that of its finger's base (n_fingers,) [rad in (−π, π]]."""
    points = hand_from_grasp.rotate(grasp.points_mm)
    turn = np.arctan2(points[:, 1], points[:, 0]) - base_bearings(hand, hand_from_grasp.xy_mm)
    return np.asarray(math.pi - (math.pi - turn) % (2.0 * math.pi))
