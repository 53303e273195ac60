"""Carrying a grasped part to where it is wanted, by moving the ring of contacts.

The part follows the ring of contacts: its position one to one, its angle a little more than the ring's, for the tips roll. What the
camera sees beyond that is an offset (slip, a hand that is not as drawn, dead bands). The law commands the ring to the wanted pose less
the offset, and learns the offset from each frame: internal model control (Garcia & Morari 1982) with the model 'ring pose one delay
ago, plus offset'. Without model error the part's error decays as e' = −e / LEARN_S, and the learning cannot wind up while the ring
is still on its way.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from hw_profiles.geometry import Array

ROLL = np.array([1.0, 1.0, 1.25])  # part motion per ring motion: x, y, angle
LEARN_S = 0.16  # time constant of the offset
SERVO_LAG_S = 0.05  # from a command to the part having followed it
TRAIL_S = 0.6  # how long commanded rings are remembered
OFFSET_LIMIT = np.array([14.0, 14.0, math.radians(35.0)])  # about the offset at grasping


@dataclass(frozen=True, slots=True, eq=False)
class Carry:
    """A grasp that holds the part.

    Attributes
    ----------
    reach_index : which reach of the library.
    ring : (3,) commanded hand_from_grasp: mm, mm, rad unwrapped.
    offset : (3,) part pose less ROLL · ring, as learnt; yaw unwrapped. first_offset : the same when the grasp closed.
    trail : (commanded_at_us, ring) of the recent past, oldest first.
    heading : (3,) where the ring is on its way to when the goal's own is not straight ahead; None otherwise.
    """

    reach_index: int
    ring: Array
    offset: Array
    first_offset: Array
    trail: tuple[tuple[int, Array], ...]
    heading: Array | None = None

    @classmethod
    def begin(cls, reach_index: int, ring: Array, part: Array, now_us: int) -> Carry:
        """Just closed on the part, seen at `part` (3,) with unwrapped yaw."""
        offset = part - ROLL * ring
        return cls(reach_index, ring, offset, offset, ((now_us, ring),))

    def ring_at(self, at_us: int) -> Array:
        """The ring (3,) that the part had followed at a time: the one commanded a servo lag before, interpolated."""
        times = np.array([time for time, _ in self.trail], dtype=float)
        rings = np.array([ring for _, ring in self.trail])
        wanted = at_us - SERVO_LAG_S * 1e6
        return np.array([np.interp(wanted, times, column) for column in rings.T])

    def learn(self, part: Array, captured_at_us: int, elapsed_s: float) -> Carry:
        """Take in a part pose (3,), yaw unwrapped, seen at a time; `elapsed_s` since the last one."""
        seen = part - ROLL * self.ring_at(captured_at_us)
        offset = self.offset + (1.0 - math.exp(-elapsed_s / LEARN_S)) * (seen - self.offset)
        limited = np.clip(offset, self.first_offset - OFFSET_LIMIT, self.first_offset + OFFSET_LIMIT)
        return replace(self, offset=limited)

    def ring_for(self, target: Array) -> Array:
        """Ring pose (3,) that should bring the part to `target` (3,); where a coordinate is nan it stays as commanded."""
        wanted = (target - self.offset) / ROLL
        return np.where(np.isnan(wanted), self.ring, wanted)

    def steer(self, ring: Array, now_us: int) -> Carry:
        """With a newly commanded ring."""
        kept = tuple(entry for entry in self.trail if entry[0] >= now_us - TRAIL_S * 1e6)
        return replace(self, ring=ring, trail=(*kept, (now_us, ring)))


def slewed(ring: Array, wanted: Array, tip_speed_mm_per_s: float, turn_speed_rad_per_s: float, elapsed_s: float) -> Array:
    """The ring (3,) after moving toward `wanted` no faster than allowed; position and angle arrive together."""
    step = wanted - ring
    share = max(
        float(np.hypot(step[0], step[1])) / (tip_speed_mm_per_s * elapsed_s),
        abs(float(step[2])) / (turn_speed_rad_per_s * elapsed_s),
        1.0,
    )
    return np.asarray(ring + step / share)
