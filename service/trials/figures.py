"""Figures of a trial, and how they are shown."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from rich.console import Console
from rich.table import Table

from control.servoing.goals import Ending
from hw_profiles.geometry import Pose2
from hw_profiles.rig import Rig
from service.trials.run import Result, TrialRun


def summary(rig: Rig, run: TrialRun, recording: str | None) -> dict[str, Any]:
    """The figures of a trial as JSON values; None where there is nothing to say.

    Errors and times are of the goals that were reached; a goal counts as reached when the part was within tolerance of it for the whole
    hold by the camera, and by the truth at its end where there is one.
    """
    reached = [result for result in run.results if result.ending is Ending.REACHED]
    busy_ms = np.array(run.busy_ms[10:] or run.busy_ms)  # without the first ticks, which compile or load kernels
    return {
        "rig": rig.name,
        "part": rig.part.name,
        "kind": run.spec.kind,
        "seed": run.spec.seed,
        "tolerance_mm": run.spec.tolerance_mm,
        "tolerance_deg": run.spec.tolerance_deg,
        "goals": len(run.results),
        "reached": len(reached),
        "success_rate": len(reached) / len(run.results),
        **_spread("error_mm", [result.error_mm for result in reached], 4),
        **_spread("error_deg", [result.error_deg for result in reached], 4),
        **_spread("time_s", [result.time_s for result in reached], 3),
        "ejections": run.ejections,
        "ticks": run.ticks,
        "ticks_without_cage": run.ticks_without_cage,
        "loop_ms": {"p50": round(float(np.percentile(busy_ms, 50)), 2), "p99": round(float(np.percentile(busy_ms, 99)), 2)},
        "sim_speed": round(run.simulated_s / run.wall_s, 2),
        "recording": recording,
    }


WALL_CLOCK_KEYS = ("loop_ms", "sim_speed")  # the only figures that differ between two runs of one seed


def _spread(name: str, values: list[float], digits: int) -> dict[str, float | None]:
    known = [value for value in values if not math.isnan(value)]
    if not known:
        return {f"median_{name}": None, f"p95_{name}": None}
    return {
        f"median_{name}": round(float(np.median(known)), digits),
        f"p95_{name}": round(float(np.percentile(known, 95)), digits),
    }


def per_goal(run: TrialRun) -> list[dict[str, Any]]:
    """One row a goal, as JSON values."""
    return [
        {
            "id": result.goal.id,
            "kind": result.goal.kind.value,
            "wanted": _pose(result.goal.pose),
            "ended_at": _pose(result.end_pose),
            "ending": result.ending.value,
            "reason": result.reason,
            "error_mm": None if math.isnan(result.error_mm) else round(result.error_mm, 4),
            "error_deg": None if math.isnan(result.error_deg) else round(result.error_deg, 4),
            "time_s": None if math.isnan(result.time_s) else round(result.time_s, 3),
            "grasps": result.regrasps,
        }
        for result in run.results
    ]


def _pose(pose: Pose2) -> dict[str, float]:
    return {"x_mm": round(pose.x_mm, 3), "y_mm": round(pose.y_mm, 3), "angle_deg": round(math.degrees(pose.yaw_rad), 3)}


def print_summary(console: Console, figures: dict[str, Any], run: TrialRun) -> None:
    """The result as a table that a person reads."""
    is_whole = figures["reached"] == figures["goals"]
    console.print(f"[bold]{figures['part']}[/] in {figures['rig']}, {figures['kind']} goals, seed {figures['seed']}")
    table = Table(header_style="bold")
    table.add_column("")
    table.add_column("median", justify="right")
    table.add_column("95 %", justify="right")
    for label, name, unit in (("position error", "error_mm", "mm"), ("angle error", "error_deg", "°"), ("time to goal", "time_s", "s")):
        median, p95 = figures[f"median_{name}"], figures[f"p95_{name}"]
        if median is not None:
            table.add_row(label, f"{median:.2f} {unit}", f"{p95:.2f} {unit}")
    console.print(table)
    within = f"{figures['tolerance_mm']:g} mm / {figures['tolerance_deg']:g}°"
    console.print(f"{'✔' if is_whole else '✘'} {figures['reached']} of {figures['goals']} goals held within {within}")
    console.print(
        f"  part lost: {figures['ejections']}   ticks: {figures['ticks']}, without a certified cage: {figures['ticks_without_cage']}"
    )
    loop = figures["loop_ms"]
    console.print(f"  one tick: {loop['p50']:.1f} ms (99 %: {loop['p99']:.1f} ms)   {figures['sim_speed']:.1f} × real time")
    for result in _failed(run)[:5]:
        console.print(f"  {result.goal.id}: {result.ending.value}: {result.reason}", style="yellow")


def _failed(run: TrialRun) -> list[Result]:
    return [result for result in run.results if result.ending is not Ending.REACHED]
