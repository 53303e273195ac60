"""The hand: fingers of revolute and prismatic joints moved by hobby servos.

A finger stands at its base in the hand frame (origin at the palm centre, x to the right, y up in the overhead view, z toward the
camera) and looks along its base angle. Walking out from the base, a revolute joint turns the direction by its value (counter-
clockwise positive) and adds a link of fixed length; a prismatic joint adds a link whose length is its value. Links are capsules.
The last link ends in a round tip.
"""

from __future__ import annotations

import math
from typing import Annotated, Literal

from pydantic import Field, model_validator

from hw_profiles.base import Name, NonNegative, Positive, Profile, refuse


class Servo(Profile):
    """A hobby servo: a position drive behind a pulse width, stiff up to its stall torque."""

    pulse_low_us: Positive = 500.0
    pulse_high_us: Positive = 2500.0
    travel_deg: Positive = Field(180.0, description="turn of the horn between the two pulse ends")
    speed_deg_per_s: Positive = Field(400.0, description="no-load speed at the stated supply")
    stall_torque_nmm: Positive = 600.0
    stiffness_nmm_per_rad: Positive = Field(7000.0, description="torque per angle error before it saturates")
    damping_nmm_s_per_rad: NonNegative = 86.0
    gear_friction_nmm: NonNegative = 30.0
    dead_band_us: NonNegative = Field(4.0, description="least change of the pulse that the servo answers to")
    stall_current_ma: Positive = 1000.0

    @model_validator(mode="after")
    def _pulses_are_ordered(self) -> Servo:
        if self.pulse_low_us >= self.pulse_high_us:
            raise refuse(f"pulse_low_us {self.pulse_low_us:g} must be below pulse_high_us {self.pulse_high_us:g}")
        return self

    @property
    def centre_us(self) -> float:
        """Pulse width at the middle of the travel."""
        return 0.5 * (self.pulse_low_us + self.pulse_high_us)

    @property
    def rad_per_us(self) -> float:
        """Turn of the horn per microsecond of pulse width."""
        return math.radians(self.travel_deg) / (self.pulse_high_us - self.pulse_low_us)


class RevoluteJoint(Profile):
    """A servo horn that turns the rest of the finger; the link behind it has a fixed length (0 for none)."""

    kind: Literal["revolute"]
    low_deg: float
    high_deg: float
    home_deg: float
    horn_centre_deg: float = Field(description="joint angle at the servo's centre pulse")
    link_mm: NonNegative
    link_radius_mm: Positive = 5.0
    servo: Name

    @property
    def low(self) -> float:
        """Lower limit [rad]."""
        return math.radians(self.low_deg)

    @property
    def high(self) -> float:
        """Upper limit [rad]."""
        return math.radians(self.high_deg)

    @property
    def home(self) -> float:
        """Rest value [rad]."""
        return math.radians(self.home_deg)

    @property
    def horn_centre(self) -> float:
        """Joint value [rad] at the servo's centre pulse."""
        return math.radians(self.horn_centre_deg)

    @property
    def per_horn_rad(self) -> float:
        """Joint motion per radian of the horn [rad/rad]."""
        return 1.0


class PrismaticJoint(Profile):
    """A slide driven by a pinion: the link's length is the joint's value."""

    kind: Literal["prismatic"]
    low_mm: NonNegative
    high_mm: Positive
    home_mm: Positive
    horn_centre_mm: Positive = Field(description="slide at the servo's centre pulse")
    pinion_radius_mm: Positive
    link_radius_mm: Positive = 5.0
    servo: Name

    @property
    def low(self) -> float:
        """Lower limit [mm]."""
        return self.low_mm

    @property
    def high(self) -> float:
        """Upper limit [mm]."""
        return self.high_mm

    @property
    def home(self) -> float:
        """Rest value [mm]."""
        return self.home_mm

    @property
    def horn_centre(self) -> float:
        """Slide [mm] at the servo's centre pulse."""
        return self.horn_centre_mm

    @property
    def per_horn_rad(self) -> float:
        """Joint motion per radian of the horn [mm/rad]."""
        return self.pinion_radius_mm


Joint = Annotated[RevoluteJoint | PrismaticJoint, Field(discriminator="kind")]


class Chain(Profile):
    """A finger's build: its joints from the base outward, and how its end touches the part."""

    joints: tuple[Joint, ...] = Field(min_length=1, max_length=3)
    tip_radius_mm: Positive = 8.0
    contact: Literal["tip", "jaw"] = Field("tip", description="tip: the round end touches; jaw: the flat of the last link")
    jaw_contact_mm: NonNegative = Field(0.0, description="jaw only: how far from the end the part is meant to touch")

    @model_validator(mode="after")
    def _joints_make_sense(self) -> Chain:
        for index, joint in enumerate(self.joints):
            unit = "deg" if joint.kind == "revolute" else "mm"
            shown = {n: getattr(joint, f"{n}_{unit}") for n in ("low", "high", "home", "horn_centre")}
            if shown["low"] >= shown["high"]:
                raise refuse(f"joints[{index}].low_{unit} {shown['low']:g} must be below high_{unit} {shown['high']:g}")
            if not shown["low"] <= shown["home"] <= shown["high"]:
                raise refuse(f"joints[{index}].home_{unit} {shown['home']:g} must lie within {shown['low']:g} … {shown['high']:g}")
        last = self.joints[-1]
        if last.kind == "revolute" and last.link_mm == 0:
            raise refuse(f"joints[{len(self.joints) - 1}].link_mm 0: the last joint must carry a link")
        if self.contact == "jaw" and last.kind == "revolute" and not 0 < self.jaw_contact_mm < last.link_mm:
            raise refuse(f"jaw_contact_mm {self.jaw_contact_mm:g} must lie within the last link, 0 … {last.link_mm:g}")
        return self


class Finger(Profile):
    """Where a finger stands and looks."""

    name: Name
    chain: Name
    base_x_mm: float
    base_y_mm: float
    base_angle_deg: float = Field(description="direction of the finger when its revolute joints are at 0")


class Hand(Profile):
    """A planar hand."""

    name: Name
    title: str = ""
    servos: dict[Name, Servo]
    chains: dict[Name, Chain]
    fingers: tuple[Finger, ...] = Field(min_length=2, max_length=8)

    @model_validator(mode="after")
    def _references_hold(self) -> Hand:
        for index, finger in enumerate(self.fingers):
            if finger.chain not in self.chains:
                raise refuse(f"fingers[{index}].chain '{finger.chain}' is not a chain; allowed: {', '.join(self.chains)}")
        names = [finger.name for finger in self.fingers]
        for name in names:
            if names.count(name) > 1:
                raise refuse(f"fingers: name '{name}' is used {names.count(name)} times; each finger needs its own name")
        for chain_name, chain in self.chains.items():
            for index, joint in enumerate(chain.joints):
                self._check_joint(f"chains.{chain_name}.joints[{index}]", joint)
        return self

    def _check_joint(self, key: str, joint: RevoluteJoint | PrismaticJoint) -> None:
        if joint.servo not in self.servos:
            raise refuse(f"{key}.servo '{joint.servo}' is not a servo; allowed: {', '.join(self.servos)}")
        half = math.radians(self.servos[joint.servo].travel_deg) / 2.0 * joint.per_horn_rad
        unit, scale = ("deg", math.degrees(1.0)) if joint.kind == "revolute" else ("mm", 1.0)
        reach = (joint.horn_centre - half, joint.horn_centre + half)
        for end, value in (("low", joint.low), ("high", joint.high)):
            if not reach[0] - 1e-9 <= value <= reach[1] + 1e-9:
                raise refuse(
                    f"{key}.{end}_{unit} {value * scale:g} is beyond what its servo can reach; "
                    f"allowed: {reach[0] * scale:g} … {reach[1] * scale:g}"
                )

    def chain_of(self, finger: Finger) -> Chain:
        """The build of one of this hand's fingers."""
        return self.chains[finger.chain]

    @property
    def n_joints(self) -> int:
        """Joints of all fingers together."""
        return sum(len(self.chain_of(finger).joints) for finger in self.fingers)

    @property
    def stall_current_ma(self) -> float:
        """Supply current if every servo stalls at once: what the supply and its wires must bear."""
        joints = [joint for finger in self.fingers for joint in self.chain_of(finger).joints]
        return sum(self.servos[joint.servo].stall_current_ma for joint in joints)
