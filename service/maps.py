"""What `palmloop map` and the page show of a hand and a part: the numbers behind each layer. Drawing is in `map_figures`."""

from __future__ import annotations

import difflib
import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from control.grasping.hold import Bench
from control.grasping.library import Library, park_posture
from control.grasping.reach import PITCH
from control.model.caging import RingCertificate
from control.model.energy import Energy, PoseGrid, Yielding
from control.model.escape import Escape, escape
from control.model.free_space import FreeSpace, free_space
from control.model.kinematics import HandModel
from control.model.settle import Settled, Settling
from control.model.workspace import theoretical_workspace
from control.servoing.controller import REQUIRED_MARGIN_MM
from hw_profiles.errors import CommandError
from hw_profiles.geometry import Array, Pose2
from hw_profiles.rig import Rig

Flags = NDArray[np.bool_]
LAYERS = ("energy", "cage", "reach")
N_CELLS = 128
VIEW_MM = 128.0  # half side of what the energy layer shows
REACH_PITCH_MM, REACH_PITCH_RAD = 5.0, math.radians(15.0)
REACH_HALF_MM = 90.0


@dataclass(frozen=True, eq=False)
class MapCommand:
    """A posture (n_joints,) that the servos are sent to, and what it is called."""

    name: str
    joints: Array


@dataclass(frozen=True, eq=False)
class EnergyLayer:
    """E over positions at one part angle, where the part settles, and the lowest way out."""

    rig: Rig
    command: MapCommand
    pose: Pose2
    grid: PoseGrid
    values_mj: Array
    yielding: Yielding
    settled: Settled
    out: Escape
    certificate: RingCertificate
    fingers_apart_mm: float

    def numbers(self) -> dict[str, Any]:
        """The layer as JSON values: inf and nan as null."""
        values = self.values_mj[:, :, 0]
        return {
            **_heading(self.rig, "energy", self.command, self.pose),
            "energy_mj": _number(self.yielding.energy_mj),
            "settles": {**_pose(self.settled.pose), "is_at_rest": self.settled.is_at_rest},
            "escape": _escape(self.out),
            "cage": _cage(self.certificate),
            "fingers_apart_mm": round(self.fingers_apart_mm, 3),
            "yaw_deg": round(math.degrees(float(self.grid.yaw_rad[0])), 3),
            "x_mm": [round(float(x), 3) for x in self.grid.x_mm],
            "y_mm": [round(float(y), 3) for y in self.grid.y_mm],
            "values_mj": [[_number(value) for value in column] for column in values],
        }


@dataclass(frozen=True, eq=False)
class CageLayer:
    """Where the part can go while the fingers stand still, the ring around it, and how hard it is to lose."""

    rig: Rig
    command: MapCommand
    pose: Pose2
    space: FreeSpace
    bridges_mm: Array
    certificate: RingCertificate
    out: Escape
    fingers_apart_mm: float

    @property
    def play_deg(self) -> Array:
        """Angle range [deg] (n, n) that the part can reach at each position; 0 where it cannot be."""
        return 360.0 * self.space.room.mean(axis=2)

    def numbers(self) -> dict[str, Any]:
        """The layer as JSON values."""
        n = self.space.room.shape[0]
        x, y = (centre + (np.arange(n) - n // 2) * self.space.cell[0] for centre in (self.pose.x_mm, self.pose.y_mm))
        return {
            **_heading(self.rig, "cage", self.command, self.pose),
            "verdict": self.space.verdict.value,
            "cage": _cage(self.certificate),
            "escape": _escape(self.out),
            "fingers_apart_mm": round(self.fingers_apart_mm, 3),
            "cell": [round(float(step), 5) for step in self.space.cell],
            "x_mm": [round(float(value), 3) for value in x],
            "y_mm": [round(float(value), 3) for value in y],
            "play_deg": [[round(float(value), 1) for value in column] for column in self.play_deg],
        }


@dataclass(frozen=True, eq=False)
class ReachLayer:
    """Which poses the hand's grasps hold, against all poses at which its fingers can cage the part."""

    rig: Rig
    park: Array
    grid: PoseGrid
    held: Flags  # (n_x, n_y, n_yaw)
    caged: Flags  # the same

    @cached_property
    def held_deg(self) -> Array:
        """Angle range [deg] (n_x, n_y) held at each position."""
        return 360.0 * self.held.mean(axis=2)

    def shares(self) -> dict[str, float]:
        """What is held of the theoretical workspace, as poses and as positions."""
        held, caged = int(self.held.sum()), int(self.caged.sum())
        held_at, positions = int(self.held.any(axis=2).sum()), int(self.caged.any(axis=2).sum())
        return {
            "held_share_of_poses": round(held / max(caged, 1), 4),
            "held_share_of_positions": round(held_at / max(positions, 1), 4),
            "workspace_area_cm2": round(positions * float(np.diff(self.grid.x_mm[:2])[0]) ** 2 / 100.0, 2),
        }

    def numbers(self) -> dict[str, Any]:
        """The layer as JSON values."""
        return {
            "layer": "reach",
            "rig": self.rig.name,
            "part": self.rig.part.name,
            **self.shares(),
            "x_mm": [round(float(x), 3) for x in self.grid.x_mm],
            "y_mm": [round(float(y), 3) for y in self.grid.y_mm],
            "held_deg": self.held_deg.round(1).tolist(),
            "workspace_deg": (360.0 * self.caged.mean(axis=2)).round(1).tolist(),
        }


class Mapper:
    """Answers map questions for one rig; the grasp library is made when first needed."""

    def __init__(self, rig: Rig, library: Library | None = None) -> None:
        self.rig = rig
        self.hand = HandModel(rig.hand) if library is None else library.bench.hand
        self._library = library

    @cached_property
    def library(self) -> Library:
        """The rig's grasps (seconds, the first time)."""
        if self._library is not None:
            return self._library
        return Library.of(self.hand, self.rig.part, self._margin_mm, self.rig.motion.clearance_mm)

    @property
    def _margin_mm(self) -> float:
        return REQUIRED_MARGIN_MM if self.rig.cage == "required" else -math.inf

    @cached_property
    def bench(self) -> Bench:
        """Hand and part with their compiled tests."""
        return Bench.of(self.hand, self.rig.part, self._margin_mm) if self._library is None else self._library.bench

    def command(self, blend: Mapping[str, float], pose: Pose2) -> MapCommand:
        """The posture that a weighted blend of primitives stands for; weights are scaled to sum to 1.

        Raises
        ------
        CommandError
            An unknown primitive, or weights that are negative or all zero; names what is allowed.
        """
        total = sum(blend.values())
        if total <= 0.0 or min(blend.values()) < 0.0:
            raise CommandError(f"blend {dict(blend)}: weights must be at least 0, and one above 0")
        joints = sum(weight / total * self._primitive(name, pose) for name, weight in blend.items())
        shown = " + ".join(f"{weight / total:.2g} {name}" for name, weight in blend.items()) if len(blend) > 1 else next(iter(blend))
        return MapCommand(shown, np.clip(np.asarray(joints), self.hand.low, self.hand.high))

    def primitives(self, pose: Pose2) -> dict[str, Array]:
        """Every posture that has a name with the part at `pose`: park, home, grip, and the primitives of the grasp that holds there."""
        found = {"park": park_posture(self.bench), "home": self.hand.home}
        options = self.library.options(pose)
        if options:
            reach = self.library.reaches[options[0].reach_index]
            cell = reach.cell(options[0].ring)
            near = reach.joints[cell]
            found["grip"], _ = reach.grasp.joints(self.hand, self.bench.shape, options[0].ring, -self.rig.motion.squeeze_mm, near)
            primitives = self.library.primitives(options[0].reach_index, cell)
            found |= {name.replace(" ", "/"): joints for name, joints in zip(primitives.names, primitives.joints, strict=True)}
        return found

    def _primitive(self, name: str, pose: Pose2) -> Array:
        if name == "park":
            return park_posture(self.bench)
        if name == "home":
            return self.hand.home
        known = self.primitives(pose)
        if name not in known:
            near = difflib.get_close_matches(name, known, n=1)
            hint = f"did you mean {near[0]}? " if near else ""
            raise CommandError(f"primitive '{name}' is not one with the part at {_told(pose)}; {hint}allowed: {', '.join(known)}")
        return known[name]

    def energy(self, command: MapCommand, pose: Pose2) -> EnergyLayer:
        """The energy layer at a command with the part at `pose`."""
        settling = Settling.of(self.hand, self.rig.part)
        energy, grid = settling.energy, PoseGrid.square(VIEW_MM, N_CELLS, pose.yaw_rad)
        return EnergyLayer(
            self.rig,
            command,
            pose,
            grid,
            energy.over(command.joints, grid),
            energy.at(command.joints, pose),
            settling.after(pose, command.joints, command.joints),
            escape(energy, command.joints, pose),
            self.bench.ring.certify(command.joints, pose.as_array()),
            self.bench.clearances.between_fingers(command.joints),
        )

    def cage(self, command: MapCommand, pose: Pose2) -> CageLayer:
        """The cage layer at a posture with the part at `pose`; fingers that the part pushes aside stand where it pushes them."""
        energy = Energy(self.hand, self.rig.part)
        stand = energy.at(command.joints, pose).joints
        return CageLayer(
            self.rig,
            MapCommand(command.name, stand),
            pose,
            free_space(self.hand, self.rig.part, stand, pose),
            self.bench.ring.bridges(stand, pose.as_array()),
            self.bench.ring.certify(stand, pose.as_array()),
            escape(energy, command.joints, pose),
            self.bench.clearances.between_fingers(stand),
        )

    def reach(self) -> ReachLayer:
        """The reach layer; some seconds."""
        ticks = np.arange(-REACH_HALF_MM, REACH_HALF_MM + 0.1, REACH_PITCH_MM)
        yaws = np.arange(-math.pi, math.pi - 1e-9, REACH_PITCH_RAD) + REACH_PITCH_RAD / 2.0
        grid = PoseGrid(ticks, ticks, yaws)
        held = _held(self.library, grid)
        period = self.rig.part.n_fold
        one = PoseGrid(ticks, ticks, yaws[: len(yaws) // period] if period else yaws[:1])
        found = theoretical_workspace(self.hand, self.rig.part, one, max(self._margin_mm, 0.0)).margin_mm > max(self._margin_mm, 0.0)
        caged = np.tile(found, (1, 1, len(yaws) // found.shape[2]))
        return ReachLayer(self.rig, park_posture(self.bench), grid, held, caged | held)


def _held(library: Library, grid: PoseGrid) -> Flags:
    """Which poses of a grid some grasp holds, bool (n_x, n_y, n_yaw)."""
    held = np.zeros(grid.shape, dtype=bool)
    for reach in library.reaches:
        cells = reach.held
        i, j = (np.floor((ticks - reach.origin[axis]) / PITCH[axis]).astype(int) for axis, ticks in enumerate((grid.x_mm, grid.y_mm)))
        x_ok, y_ok = (i >= 0) & (i < cells.shape[0]), (j >= 0) & (j < cells.shape[1])
        planes: Flags = cells[i[x_ok]][:, j[y_ok]]
        for k, yaw_rad in enumerate(grid.yaw_rad):
            if library.is_round:
                held[np.ix_(x_ok, y_ok, [k])] |= np.any(planes, axis=2, keepdims=True)
                continue
            at = math.floor((reach.yaw_near(float(yaw_rad)) - reach.origin[2]) / PITCH[2])
            if 0 <= at < cells.shape[2]:
                held[np.ix_(x_ok, y_ok, [k])] |= planes[:, :, at : at + 1]
    return held


def _heading(rig: Rig, layer: str, command: MapCommand, pose: Pose2) -> dict[str, Any]:
    hand = HandModel(rig.hand)
    shown = np.where(hand.is_slide, command.joints, np.degrees(command.joints))
    return {
        "layer": layer,
        "rig": rig.name,
        "part": rig.part.name,
        "command": {"name": command.name, "joints_deg_or_mm": [round(float(value), 3) for value in shown]},
        "pose": _pose(pose),
    }


def _pose(pose: Pose2) -> dict[str, float]:
    return {"x_mm": round(pose.x_mm, 3), "y_mm": round(pose.y_mm, 3), "angle_deg": round(math.degrees(pose.yaw_rad), 3)}


def _told(pose: Pose2) -> str:
    return f"{pose.x_mm:g}, {pose.y_mm:g} mm, {math.degrees(pose.yaw_rad):g}°"


def _number(value: float) -> float | None:
    return round(float(value), 4) if math.isfinite(value) else None


def _escape(out: Escape) -> dict[str, Any]:
    return {
        "pass_mj": _number(out.pass_mj),
        "start_mj": _number(out.start_mj),
        "pass": None if out.pass_pose is None else _pose(out.pass_pose),
        "is_lower_bound": out.is_lower_bound,
        "route": [_pose(Pose2.from_array(pose)) for pose in out.route],
    }


def _cage(certificate: RingCertificate) -> dict[str, Any]:
    return {
        "is_caged": certificate.is_caged,
        "margin_mm": round(certificate.margin_mm, 3),
        "gaps_mm": [round(float(gap), 3) for gap in certificate.gaps_mm],
    }
