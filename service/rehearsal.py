"""A dry run of the law before the first real tick, so that nothing is compiled or loaded while a hand is armed."""

from __future__ import annotations

import math

import numpy as np

from control.servoing.controller import Controller
from control.servoing.goals import Arm, Goal, GoTo, Kind, Request
from control.servoing.memory import Memory
from control.servoing.report import Inputs
from control.servoing.tick import tick
from hw_profiles.geometry import Pose2
from hw_profiles.observation import Observation, PartPose

PERIOD_US = 20_000
N_TICKS = 150


def rehearse(controller: Controller) -> None:
    """Arm, grasp and carry a part that never moves; nothing leaves this function."""
    lying, memory = Pose2(0.0, 0.0, 0.1), Memory()
    goals: dict[int, Request] = {
        1: Arm(),
        3: _goal("far", Kind.POSE, 15.0, 1.0),
        80: _goal("aside", Kind.POSITION, -15.0, 0.0),
        110: _goal("turned", Kind.ANGLE, 0.0, 2.5),
    }
    for count in range(1, N_TICKS):
        now_us = count * PERIOD_US
        sight = PartPose(lying, lying, np.zeros(3), np.eye(3))
        request = goals.get(count)
        inputs = Inputs(now_us, Observation(now_us, sight), () if request is None else (request,))
        memory, _, _ = tick(controller, memory, inputs)


def _goal(name: str, kind: Kind, x_mm: float, yaw_rad: float) -> GoTo:
    return GoTo(Goal(name, kind, Pose2(x_mm, 0.0, yaw_rad), 0.01, math.radians(0.01), timeout_s=600.0))
