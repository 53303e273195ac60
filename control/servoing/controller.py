"""One controller for one rig and part: what does not change from tick to tick."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from functools import cached_property

from control.grasping.library import Library
from control.grasping.transfer import Speeds
from control.model.kinematics import HandModel
from control.wire.pulses import PulseMap
from hw_profiles.errors import CommandError
from hw_profiles.geometry import Array
from hw_profiles.rig import Rig

REQUIRED_MARGIN_MM = 1.0  # what the touching posture must show; pressed, as it is commanded, it shows more


@dataclass(frozen=True, slots=True)
class Limits:
    """When the loop waits, gives up or faults.

    stale_ms : age of the newest frame beyond which no pulses go out. lost_s : how long the part may be unseen while a goal is
    under way. silent_ms : how long a board with telemetry may be silent. wake_ms : how long after arming the board is not yet
    judged. settle_s : wait after the fingers closed or a stroke ended. max_regrasps_per_turn : grasps anew for one revolution
    before the loop says that it makes no progress.
    """

    stale_ms: float = 150.0
    lost_s: float = 3.0
    silent_ms: float = 300.0
    wake_ms: float = 200.0
    settle_s: float = 0.12
    max_regrasps_per_turn: int = 24


@dataclass(frozen=True, eq=False)
class Controller:
    """Rig, hand model, pulse map and grasp library; `tick` reads it and never changes it."""

    rig: Rig
    hand: HandModel
    pulses: PulseMap
    library: Library
    limits: Limits = field(default_factory=Limits)

    @classmethod
    def of(cls, rig: Rig) -> Controller:
        """Prepare a rig; searches the grasps of its hand on its part (a second or a few).

        Raises
        ------
        CommandError
            The hand cannot hold the part, or not with the cage that the rig requires.
        """
        hand = HandModel(rig.hand)
        margin_mm = REQUIRED_MARGIN_MM if rig.cage == "required" else -math.inf
        library = Library.of(hand, rig.part, margin_mm, rig.motion.clearance_mm)
        if not library.reaches:
            caged = " with a certified cage; allowed: another part, or cage = 'preferred' in the rig" if rig.cage == "required" else ""
            raise CommandError(f"rig '{rig.name}': hand '{rig.hand.name}' finds no way to hold part '{rig.part.name}'{caged}")
        return cls(rig, hand, PulseMap.of(rig), library)

    @cached_property
    def joint_scale(self) -> Array:
        """Joint motion (n_joints,) at which each servo's torque saturates: one unit of joint error."""
        scale: Array = self.hand.stall / self.hand.stiffness
        return scale

    @property
    def tip_speed_mm_per_s(self) -> float:
        """Fastest the ring may move while it carries the part."""
        return self.rig.motion.tip_speed_mm_per_s

    @property
    def turn_speed_rad_per_s(self) -> float:
        """Fastest the ring may turn while it carries the part."""
        return math.radians(self.rig.motion.turn_speed_deg_per_s)

    @property
    def speeds(self) -> Speeds:
        """How fast fingers move that carry nothing."""
        return Speeds()
