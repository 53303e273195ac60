"""What one tick takes in and gives out: the whole traffic between control and the rest."""

from __future__ import annotations

from dataclasses import dataclass

from control.model.caging import RingCertificate
from control.servoing.goals import Goal, Outcome, Request
from control.servoing.states import State
from hw_profiles.geometry import Array, Pose2
from hw_profiles.observation import Observation


@dataclass(frozen=True, slots=True)
class BoardHealth:
    """What the board last said of itself.

    silent_ms : since its last telemetry. latched : its watchdog has tripped and waits for a re-arm. supply_v, temperature_c :
    nan where it has no such sensor.
    """

    silent_ms: float
    latched: bool
    supply_v: float
    temperature_c: float


@dataclass(frozen=True, slots=True, eq=False)
class Inputs:
    """Everything a tick sees; recorded, so that a replay can show it the same again.

    observation : of the newest camera frame, None when no new frame came. board : None for a board without telemetry.
    """

    now_us: int
    observation: Observation | None
    requests: tuple[Request, ...] = ()
    board: BoardHealth | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Command:
    """What goes to the board: pulse widths (n_joints,) [µs] in joint order, None for none; `rearm` unlatches its watchdog."""

    pulses_us: Array | None
    rearm: bool = False


@dataclass(frozen=True, slots=True, eq=False)
class Report:
    """What the loop is doing, for people, robots and the recording.

    pose : predicted hand_from_part, None while unseen. measured : of the newest frame. age_ms : of that frame.
    error_mm, error_rad : goal minus part along what the goal fixes (signed angle), nan without a goal or a sight.
    weights : (primitive name, weight) of the present blend. joints : commanded (n_joints,), None without pulses.
    cage : certificate of the commanded posture about the measured part, None while unseen.
    outcomes : goals that ended in this tick. refusals : requests that were refused in this tick, with the reason.
    """

    state: State
    phase: str
    why: str
    pose: Pose2 | None
    measured: Pose2 | None
    age_ms: float
    goal: Goal | None
    error_mm: float
    error_rad: float
    weights: tuple[tuple[str, float], ...]
    joints: Array | None
    cage: RingCertificate | None
    outcomes: tuple[Outcome, ...]
    refusals: tuple[str, ...]
    faults: tuple[str, ...]
