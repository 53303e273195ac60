"""The rig: one hand, one board, one camera, one part, and how they are wired."""

from __future__ import annotations

from typing import Literal

from pydantic import Field, model_validator

from hw_profiles.base import Name, Positive, Profile, refuse
from hw_profiles.board import Board
from hw_profiles.camera import Camera
from hw_profiles.hand import Hand
from hw_profiles.part import Part


class Wire(Profile):
    """Which board channel moves a joint."""

    finger: Name
    joint: int = Field(ge=0, le=2)
    channel: int = Field(ge=0)
    reversed: bool = False


class Motion(Profile):
    """How fast and how hard this rig may move."""

    tip_speed_mm_per_s: Positive = Field(default=60.0, le=400.0)
    turn_speed_deg_per_s: Positive = Field(default=120.0, le=720.0)
    squeeze_mm: Positive = Field(default=1.5, le=4.0, description="how far a fingertip is commanded into the part")
    clearance_mm: Positive = Field(default=10.0, le=30.0, description="how far the tips stand off when the grasp is loose")


class Bench(Profile):
    """Fields that a rig file holds itself; the rest of it are names of other profiles."""

    name: Name
    title: str = ""
    serial_device: str = Field("", description="serial device of the board, e.g. one under /dev/serial/by-id; empty: none yet")
    camera_device: str = Field("", description="V4L2 device of the camera, e.g. /dev/video0; empty: none yet")
    cage: Literal["required", "preferred"] = "required"
    motion: Motion = Motion()
    wiring: tuple[Wire, ...]


class RigFile(Bench):
    """A rig as its TOML file says it: names of shipped profiles, or paths of TOML files beside the rig's."""

    hand: str
    part: str
    camera: str
    board: str


class Rig(Bench):
    """A rig with everything it is made of."""

    hand: Hand
    part: Part
    camera: Camera
    board: Board

    @model_validator(mode="after")
    def _wiring_is_complete(self) -> Rig:
        joints = [(f.name, j) for f in self.hand.fingers for j in range(len(self.hand.chain_of(f).joints))]
        used: dict[int, str] = {}
        for index, wire in enumerate(self.wiring):
            key, place = f"wiring[{index}]", f"{wire.finger}.{wire.joint}"
            if (wire.finger, wire.joint) not in joints:
                allowed = ", ".join(f"{finger}.{joint}" for finger, joint in joints)
                raise refuse(f"{key}: finger.joint {place} is not a joint of hand '{self.hand.name}'; allowed: {allowed}")
            if wire.channel >= self.board.n_channels:
                raise refuse(f"{key}.channel {wire.channel} is not on board '{self.board.name}'; allowed: 0 … {self.board.n_channels - 1}")
            if wire.channel in used:
                raise refuse(f"{key}.channel {wire.channel} drives both {used[wire.channel]} and {place}; allowed: one servo a channel")
            used[wire.channel] = place
        wired = [(wire.finger, wire.joint) for wire in self.wiring]
        for finger, joint in joints:
            if wired.count((finger, joint)) != 1:
                raise refuse(f"wiring: joint {finger}.{joint} is wired {wired.count((finger, joint))} times; allowed: once")
        return self

    @property
    def wires(self) -> tuple[Wire, ...]:
        """One wire a joint, in joint order: fingers as listed, each from its base outward."""
        place = {(wire.finger, wire.joint): wire for wire in self.wiring}
        return tuple(place[finger.name, joint] for finger in self.hand.fingers for joint in range(len(self.hand.chain_of(finger).joints)))
