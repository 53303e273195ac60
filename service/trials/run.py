"""Running a trial: goals one after another on a loop, and what came of each."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np

from control.servoing.goals import Arm, Disarm, Ending, Goal, GoTo, Kind, Outcome, Reset
from control.servoing.report import Report
from control.servoing.states import PULSES_ON, State
from hw_profiles.geometry import Pose2
from service.loop import Loop
from service.trials.spec import TrialSpec, draw_goal

FIRST_SIGHT_S = 2.0
MAX_RESTARTS = 3


@dataclass(frozen=True, slots=True)
class Result:
    """One goal and how it ended; errors are against the truth where there is one, else by the camera. nan: the goal leaves it free."""

    goal: Goal
    ending: Ending
    reason: str
    error_mm: float
    error_deg: float
    time_s: float
    end_pose: Pose2
    regrasps: int


@dataclass(frozen=True, slots=True, eq=False)
class TrialRun:
    """Everything a trial found."""

    spec: TrialSpec
    results: tuple[Result, ...]
    ejections: int
    ticks: int
    ticks_without_cage: int
    busy_ms: tuple[float, ...]
    simulated_s: float
    wall_s: float


class Counter:
    """Counts over all ticks of a trial."""

    def __init__(self) -> None:
        self.ticks = 0
        self.without_cage = 0

    def see(self, report: Report) -> None:
        """Count a tick with pulses on, and whether its posture held the part in."""
        if report.state in PULSES_ON and report.cage is not None:
            self.ticks += 1
            self.without_cage += not report.cage.is_caged


@dataclass
class Stage:
    """What a trial needs to know of the bench beyond the loop.

    truth : where the part really is; None on a real rig. has_escaped : whether it has left the hand. restart : puts the part back.
    """

    loop: Loop
    truth: Callable[[], Pose2] | None
    has_escaped: Callable[[], bool]
    restart: Callable[[], None]
    last_report: Report | None = None  # of the goal that was worked on last


def run_trial(stage: Stage, spec: TrialSpec, progress: Callable[[Result], None] = lambda _: None) -> TrialRun:
    """Run every goal of a trial; a part that is lost is put back (simulated bench) and the trial goes on.

    Raises
    ------
    DeviceError
        A device broke down, or the part was never seen.
    """
    rng = np.random.default_rng([spec.seed, 1])
    counter, results, ejections = Counter(), [], 0
    loop, started_s = stage.loop, time.perf_counter()
    began_us = loop.clock.now_us()
    _wake(loop, counter)
    for index, repeat in _order(spec):
        if repeat == 0:
            goal = draw_goal(spec, index, loop.controller.library, _where(stage), rng)
        result = _pursue(stage, goal, counter)
        results.append(result)
        progress(result)
        if stage.has_escaped() or loop.memory.state not in PULSES_ON:
            ejections += stage.has_escaped()
            stage.restart()
            _wake(loop, counter)
    simulated_s = (loop.clock.now_us() - began_us) * 1e-6
    loop.step((Disarm(),))
    return TrialRun(
        spec,
        tuple(results),
        ejections,
        counter.ticks,
        counter.without_cage,
        tuple(loop.busy_ms),
        simulated_s,
        time.perf_counter() - started_s,
    )


def _order(spec: TrialSpec) -> Iterator[tuple[int, int]]:
    for index in range(spec.goals):
        for repeat in range(spec.repeats):
            yield index, repeat


def _wake(loop: Loop, counter: Counter) -> None:
    """Arm, and wait until the part is seen."""
    deadline_us = loop.clock.now_us() + FIRST_SIGHT_S * 1e6
    if loop.memory.state in (State.STOPPED, State.FAULTED):
        counter.see(loop.step((Reset(),)))
    counter.see(loop.step((Arm(),)))
    while loop.clock.now_us() < deadline_us:
        report = loop.step()
        counter.see(report)
        if report.pose is not None and report.phase == "still":
            return


def _where(stage: Stage) -> Pose2:
    if stage.truth is not None:
        return stage.truth()
    sight = stage.loop.memory.sight
    return Pose2(0.0, 0.0, 0.0) if sight is None else Pose2.from_array(sight.measured)


def _pursue(stage: Stage, goal: Goal, counter: Counter) -> Result:
    """One goal to its end; while it is held the truth is averaged, so that the figure is of the hold and not of one instant."""
    loop = stage.loop
    began_us, outcome = loop.clock.now_us(), None
    turned = _Turned(_where(stage))
    requests: tuple[GoTo, ...] = (GoTo(goal),)
    n_before = 0
    while outcome is None:
        report = loop.step(requests)
        requests = ()
        stage.last_report = report
        counter.see(report)
        turned.see(_where(stage))
        n_before = loop.memory.task.n_regrasps if loop.memory.task is not None else n_before
        outcome = next((o for o in report.outcomes if o.goal_id == goal.id), None)
        if outcome is None and report.refusals:
            outcome = Outcome(goal.id, Ending.CANCELLED, report.refusals[0])
    time_s = (loop.clock.now_us() - began_us) * 1e-6
    error_mm, error_rad = _error(goal, _where(stage), turned)
    reached_s = time_s - goal.hold_s if outcome.ending is Ending.REACHED else math.nan
    within = not error_mm > goal.tolerance_mm and not abs(error_rad) > goal.tolerance_rad
    ending, reason = outcome.ending, outcome.reason
    if ending is Ending.REACHED and not within:
        ending, reason = Ending.TIMED_OUT, "the camera saw it within tolerance, the truth is not"
    return Result(goal, ending, reason, error_mm, abs(math.degrees(error_rad)), reached_s, _where(stage), n_before)


class _Turned:
    """The part's angle unwrapped over a goal."""

    def __init__(self, start: Pose2) -> None:
        self.start = self.total = start.yaw_rad

    def see(self, pose: Pose2) -> None:
        self.total += math.remainder(pose.yaw_rad - self.total, 2.0 * math.pi)


def _error(goal: Goal, part: Pose2, turned: _Turned) -> tuple[float, float]:
    """Distance [mm] and angle [rad] between where the part is and where the goal wants it; nan where it leaves that free."""
    distance = math.hypot(goal.pose.x_mm - part.x_mm, goal.pose.y_mm - part.y_mm)
    turn = math.remainder(goal.pose.yaw_rad - part.yaw_rad, 2.0 * math.pi)
    match goal.kind:
        case Kind.POSITION:
            return distance, math.nan
        case Kind.ANGLE:
            return math.nan, turn
        case Kind.POSE:
            return distance, turn
        case Kind.TURN:
            return math.nan, turned.start + goal.pose.yaw_rad - turned.total
