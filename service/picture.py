"""A camera frame with what the loop believes drawn on it."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from control.model.kinematics import HandModel, centre_lines, contact_centres
from hw_profiles.geometry import Pose2
from hw_profiles.rig import Rig
from vision import overlay
from vision.frames import Pixels


def annotated(pixels: Pixels, rig: Rig, hand: HandModel, snapshot: dict[str, Any]) -> Pixels:
    """A BGR copy of a frame with part, goal, commanded fingers and their ring, and a line of state, from a snapshot of the API."""
    bones = ring = ring_open = None
    if snapshot["joints"] is not None:
        joints = np.array(snapshot["joints"])
        bones, ring = centre_lines(hand, joints), contact_centres(hand, joints)
        is_caged = snapshot["cage"] is not None and snapshot["cage"]["is_caged"]
        ring_open = np.full(len(ring), not is_caged)
    scene = overlay.Scene(_pose(snapshot["pose"]), _goal(snapshot), bones, ring, ring_open, _text(snapshot))
    return overlay.draw(pixels, rig.camera, rig.part, scene)


def _pose(shown: dict[str, float] | None) -> Pose2 | None:
    return None if shown is None else Pose2(shown["x_mm"], shown["y_mm"], math.radians(shown["angle_deg"]))


def _goal(snapshot: dict[str, Any]) -> Pose2 | None:
    """The goal's pose; what it leaves free is drawn where the part is."""
    goal, part = snapshot["goal"], _pose(snapshot["pose"])
    if goal is None or goal["kind"] == "turn":
        return None
    wanted = _pose(goal)
    if wanted is None or part is None:
        return wanted
    if goal["kind"] == "position":
        return Pose2(wanted.x_mm, wanted.y_mm, part.yaw_rad)
    return Pose2(part.x_mm, part.y_mm, wanted.yaw_rad) if goal["kind"] == "angle" else wanted


def _text(snapshot: dict[str, Any]) -> tuple[str, ...]:
    lines = [f"{snapshot['state']}  {snapshot['phase']}", snapshot["why"]]
    if snapshot["error_mm"] is not None:
        lines.append(f"{snapshot['error_mm']:.2f} mm to go")
    if snapshot["error_deg"] is not None:
        lines.append(f"{snapshot['error_deg']:.1f} deg to go")
    if snapshot["cage"] is not None:
        lines.append(f"cage margin {snapshot['cage']['margin_mm']:.1f} mm")
    return tuple(lines)
