"""Joint values to pulse widths and back, by the rig's wiring."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hw_profiles.geometry import Array
from hw_profiles.rig import Rig


@dataclass(frozen=True, eq=False)
class PulseMap:
    """pulse_us = centre + gain · (joint − horn_centre), one entry a joint of the hand, in joint order."""

    channel: NDArray[np.int64]
    centre_us: Array
    horn_centre: Array
    us_per_joint: Array  # µs per rad or mm, signed by the wiring's direction
    low_us: Array
    high_us: Array
    step_us: float

    @classmethod
    def of(cls, rig: Rig) -> PulseMap:
        """The map of a rig: servo travel and pulse range from the hand, direction and channel from the wiring."""
        hand, rows = rig.hand, []
        joints = [joint for finger in hand.fingers for joint in hand.chain_of(finger).joints]
        for joint, wire in zip(joints, rig.wires, strict=True):
            servo = hand.servos[joint.servo]
            gain = (-1.0 if wire.reversed else 1.0) / (servo.rad_per_us * joint.per_horn_rad)
            ends = sorted(servo.centre_us + gain * (end - joint.horn_centre) for end in (joint.low, joint.high))
            rows.append((servo.centre_us, joint.horn_centre, gain, *ends))
        centre, horn, gains, low, high = np.array(rows).T
        return cls(np.array([wire.channel for wire in rig.wires]), centre, horn, gains, low, high, rig.board.pulse_step_us)

    def pulses_us(self, joints: Array) -> Array:
        """Pulse widths (n_joints,) [µs] on the board's grid, clamped to the joints' limits."""
        wanted = self.centre_us + self.us_per_joint * (joints - self.horn_centre)
        stepped = np.round(wanted / self.step_us) * self.step_us
        return np.asarray(np.clip(stepped, self.low_us, self.high_us))

    def joints(self, pulses_us: Array) -> Array:
        """Joint values (n_joints,) that pulse widths (n_joints,) [µs] ask for."""
        return np.asarray(self.horn_centre + (pulses_us - self.centre_us) / self.us_per_joint)
