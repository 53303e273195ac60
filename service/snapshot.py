"""What the control process shows of itself: one JSON text a tick, in the units of the HTTP API (mm, deg, s)."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from control.model.kinematics import centre_lines
from control.servoing.carry import Carry
from control.servoing.controller import Controller
from control.servoing.goals import Goal, Outcome
from control.servoing.memory import Memory
from control.servoing.report import BoardHealth, Report
from hw_profiles.geometry import Array, Pose2


def finite(value: float, digits: int = 4) -> float | None:
    """A number for JSON; None for nan and inf, which JSON cannot say."""
    return round(value, digits) if math.isfinite(value) else None


def pose_json(pose: Pose2 | None) -> dict[str, float] | None:
    """x_mm, y_mm, angle_deg."""
    if pose is None:
        return None
    return {"x_mm": round(pose.x_mm, 4), "y_mm": round(pose.y_mm, 4), "angle_deg": round(math.degrees(pose.yaw_rad), 4)}


def goal_json(goal: Goal) -> dict[str, Any]:
    """A goal as it was asked."""
    return {
        "id": goal.id,
        "kind": goal.kind.value,
        **(pose_json(goal.pose) or {}),
        "tolerance_mm": goal.tolerance_mm,
        "tolerance_deg": round(math.degrees(goal.tolerance_rad), 4),
        "hold_s": goal.hold_s,
        "timeout_s": goal.timeout_s,
    }


def outcome_json(outcome: Outcome) -> dict[str, Any]:
    """How a goal ended."""
    return {
        "outcome": outcome.ending.value,
        "reason": outcome.reason,
        "error_mm": finite(outcome.error_mm),
        "error_deg": finite(math.degrees(outcome.error_rad)),
        "nearest": pose_json(outcome.nearest),
    }


def report_json(report: Report, board: BoardHealth | None, now_us: int) -> dict[str, Any]:
    """The state as the API shows it."""
    return {
        "at_us": now_us,
        "state": report.state.value,
        "phase": report.phase,
        "why": report.why,
        "faults": list(report.faults),
        "pose": pose_json(report.pose),
        "measured": pose_json(report.measured),
        "frame_age_ms": finite(report.age_ms, 1),
        "goal": None if report.goal is None else goal_json(report.goal),
        "error_mm": finite(report.error_mm),
        "error_deg": finite(math.degrees(report.error_rad)),
        "weights": {name: round(weight, 4) for name, weight in report.weights},
        "joints": None if report.joints is None else [round(float(joint), 6) for joint in report.joints],
        "cage": _cage_json(report),
        "board": None if board is None else _board_json(board),
    }


def _cage_json(report: Report) -> dict[str, Any] | None:
    cage = report.cage
    if cage is None:
        return None
    gaps = [finite(float(gap), 2) for gap in cage.gaps_mm]
    return {"is_caged": bool(cage.is_caged), "margin_mm": finite(float(cage.margin_mm), 2), "gaps_mm": gaps}


def _board_json(board: BoardHealth) -> dict[str, Any]:
    return {
        "silent_ms": finite(board.silent_ms, 1),
        "watchdog_latched": board.latched,
        "supply_v": finite(board.supply_v, 3),
        "temperature_c": finite(board.temperature_c, 1),
    }


def drawing_json(controller: Controller, memory: Memory, report: Report) -> dict[str, Any]:
    """What a picture of the state needs, in the hand frame.

    fingers_mm : centre line of each finger as commanded. bridges_mm : narrowest bridge from each finger to the next, null where there
    is none. primitives : names that a blend may use now, where a part is grasped.
    """
    fingers: list[list[list[float]]] = []
    bridges: list[list[list[float]] | None] = []
    if report.joints is not None:
        lines = centre_lines(controller.hand, report.joints)
        n_links = np.diff(controller.hand.first)
        fingers = [_points(line[: n + 1]) for line, n in zip(lines, n_links, strict=True)]
        if report.measured is not None:
            found = controller.library.bench.ring.bridges(report.joints, report.measured.as_array())
            bridges = [_points(bridge) if np.isfinite(bridge).all() else None for bridge in found]
    return {"fingers_mm": fingers, "bridges_mm": bridges, "primitives": list(_primitives(controller, memory))}


def _primitives(controller: Controller, memory: Memory) -> tuple[str, ...]:
    carry = memory.motion
    if not isinstance(carry, Carry):
        return ()
    reach = controller.library.reaches[carry.reach_index]
    return controller.library.primitives(carry.reach_index, reach.held_cell_near(carry.ring)).names


def _points(line: Array) -> list[list[float]]:
    return [[round(float(x), 2), round(float(y), 2)] for x, y in line]
