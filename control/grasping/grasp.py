"""A primitive grasp: where each finger touches the part, and the joint values that put it there."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from control.grasping.placing import place
from control.model.contact import PartShape
from control.model.kinematics import HandModel
from hw_profiles.geometry import Array, Pose2


@dataclass(frozen=True, eq=False)
class Grasp:
    """Contacts of every finger on the part.

    Attributes
    ----------
    points_mm, normals : (n_fingers, 2) nominal contacts of the tips on the outline and outward unit normals there, in the grasp
        frame, which is the part frame when the fingers close; as tips roll, the part turns a little further than the grasp.
    jaw_turn_rad : (n_fingers,) from a contact's normal to the direction of the jaw that lies flat there; nan for round tips.
    closure : quality ε of the contacts, see `contacts.closure`.
    """

    points_mm: Array
    normals: Array
    jaw_turn_rad: Array
    closure: float

    def turned(self, angle_rad: float) -> Grasp:
        """The same contacts for a part turned by an angle within its own frame."""
        turn = Pose2(0.0, 0.0, angle_rad)
        return Grasp(turn.rotate(self.points_mm), turn.rotate(self.normals), self.jaw_turn_rad, self.closure)

    def joints(self, hand: HandModel, shape: PartShape, ring: Array, clearance_mm: float, near: Array) -> tuple[Array, float]:
        """Joint values (n_joints,) of the grasp at ring pose (3,), every finger at a clearance; and by how much [mm] that falls short.

        A negative clearance presses: the fingers are commanded that far into the part.
        """
        placed, left_mm, _ = self.touching(hand, shape, ring, clearance_mm, near)
        return placed, left_mm

    def touching(self, hand: HandModel, shape: PartShape, ring: Array, clearance_mm: float, near: Array) -> tuple[Array, float, Array]:
        """The same, and where each finger is nearest: (n_fingers, 5), see `placing.place`."""
        return place(hand, shape, self.points_mm, self.normals, self.jaw_turn_rad, ring, clearance_mm, near)


def base_bearings(hand: HandModel, about_mm: Array) -> Array:
    """Bearing (n_fingers,) [rad] of every finger's base about a point."""
    offset = hand.base_mm - about_mm
    return np.arctan2(offset[:, 1], offset[:, 0])
