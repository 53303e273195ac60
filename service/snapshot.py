"""What the control process shows of itself: one JSON text a tick, in the units of the HTTP API (mm, deg, s)."""

from __future__ import annotations

import math
from typing import Any

from control.servoing.goals import Goal, Outcome
from control.servoing.report import BoardHealth, Report
from hw_profiles.geometry import Pose2

N_GOALS_KEPT = 100


def finite(value: float, digits: int = 4) -> float | None:
    """A number for JSON; None for nan and inf, which JSON cannot say."""
    return round(value, digits) if math.isfinite(value) else None


def pose_json(pose: Pose2 | None) -> dict[str, float] | None:
    """x_mm, y_mm, angle_deg."""
    if pose is None:
        return None
    return {"x_mm": round(pose.x_mm, 4), "y_mm": round(pose.y_mm, 4), "angle_deg": round(math.degrees(pose.yaw_rad), 4)}


def goal_json(goal: Goal, outcome: Outcome | None) -> dict[str, Any]:
    """A goal and how it ended, if it has."""
    ended = None
    if outcome is not None:
        ended = {
            "outcome": outcome.ending.value,
            "reason": outcome.reason,
            "error_mm": finite(outcome.error_mm),
            "error_deg": finite(math.degrees(outcome.error_rad)),
            "nearest": pose_json(outcome.nearest),
        }
    return {
        "id": goal.id,
        "kind": goal.kind.value,
        **(pose_json(goal.pose) or {}),
        "tolerance_mm": goal.tolerance_mm,
        "tolerance_deg": round(math.degrees(goal.tolerance_rad), 4),
        "hold_s": goal.hold_s,
        "timeout_s": goal.timeout_s,
        "ended": ended,
    }


def report_json(report: Report, board: BoardHealth | None, now_us: int) -> dict[str, Any]:
    """The state as the API shows it."""
    cage = report.cage
    return {
        "at_us": now_us,
        "state": report.state.value,
        "phase": report.phase,
        "why": report.why,
        "faults": list(report.faults),
        "pose": pose_json(report.pose),
        "measured": pose_json(report.measured),
        "frame_age_ms": finite(report.age_ms, 1),
        "goal": None if report.goal is None else goal_json(report.goal, None),
        "error_mm": finite(report.error_mm),
        "error_deg": finite(math.degrees(report.error_rad)),
        "weights": {name: round(weight, 4) for name, weight in report.weights},
        "joints": None if report.joints is None else [round(float(joint), 6) for joint in report.joints],
        "cage": None if cage is None else {"is_caged": bool(cage.is_caged), "margin_mm": finite(float(cage.margin_mm), 2)},
        "board": None
        if board is None
        else {
            "silent_ms": finite(board.silent_ms, 1),
            "watchdog_latched": board.latched,
            "supply_v": finite(board.supply_v, 3),
            "temperature_c": finite(board.temperature_c, 1),
        },
    }
