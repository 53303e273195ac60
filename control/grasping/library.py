"""Everything a hand can do with a part: its grasps with their reaches, the loose cage to start from, and what that covers."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import lru_cache
from itertools import product

import numpy as np

from control.grasping.grasp import Grasp, base_bearings
from control.grasping.hold import FINGERS_APART_MM, LEFT_MM, Bench
from control.grasping.primitives import Primitives, primitives_of
from control.grasping.reach import PITCH, Node, Reach, flood
from control.grasping.roadmap import Roadmap
from control.grasping.templates import ranked_at
from control.grasping.transfer import WAYS, Speeds, transfer
from control.model.contact import PartShape
from control.model.kinematics import HandModel
from hw_profiles.geometry import Array, Pose2
from hw_profiles.part import Part

ANGLE_STEP_RAD = math.radians(15.0)
N_GRASPS = 2  # kept for one part angle
N_TRIED = 12
NEW_SHARE = 0.15  # of the poses held so far that a further grasp must add
PARK_PHASES_RAD = np.radians(np.arange(-90.0, 95.0, 5.0))
PARK_OPENINGS_MM = (16.0, 14.0, 12.0, 10.0, 8.0, 6.0, 4.0, 3.0, 2.0)
PARK_MARGIN_MM = 2.0
WRAP_PER_MM = 4.0  # degrees of wrapping that a mm of opening is worth


@dataclass(frozen=True, slots=True, eq=False)
class Option:
    """A grasp that can hold the part at some pose: index of its reach, and the ring pose (3,) there, yaw unwrapped."""

    reach_index: int
    ring: Array
    margin_mm: float


@dataclass(frozen=True, eq=False)
class Library:
    """The grasps of one hand on one part.

    Attributes
    ----------
    reaches : one for each part angle of a 15° grid that has a grasp; one alone for a disc.
    roadmap : how to get from one pose to another over all reaches; None without any.
    park : joints (n_joints,) of the loose cage that a run starts from; the part may lie anywhere inside.
    is_round : the part looks the same at every angle, so a grasp may take it up at any.
    """

    bench: Bench
    reaches: tuple[Reach, ...]
    roadmap: Roadmap | None
    park: Array
    is_round: bool
    loose_mm: float

    @classmethod
    def of(cls, hand: HandModel, part: Part, margin_mm: float, loose_mm: float) -> Library:
        """Search, check and flood; takes about a second. `margin_mm` is what the cage certificate must show, −inf for none."""
        bench = Bench.of(hand, part, margin_mm)
        park = park_posture(bench)
        reaches = _reaches_over(bench, park, 2.0 * math.pi / part.n_fold) if part.n_fold else _reaches_at(bench, park, 0.0, 1)
        if not reaches:
            return cls(bench, (), None, park, part.n_fold == 0, loose_mm)
        kept = Roadmap(tuple(reaches), bench).connected()
        connected = tuple(replace(reach, held=held) for reach, held in zip(reaches, kept, strict=True))
        return cls(bench, connected, Roadmap(connected, bench), park, part.n_fold == 0, loose_mm)

    def options(self, pose: Pose2) -> list[Option]:
        """Every way to take the part up at a pose, best cage margin first."""
        found = []
        for index, reach in enumerate(self.reaches):
            for ring in self._rings(reach, pose):
                margin_mm = reach.cell_margin_mm(ring)
                if margin_mm > -math.inf:
                    found.append(Option(index, ring, margin_mm))
        return sorted(found, key=lambda option: -option.margin_mm)

    def _rings(self, reach: Reach, pose: Pose2) -> list[Array]:
        if not self.is_round:
            return [np.array([pose.x_mm, pose.y_mm, reach.yaw_near(pose.yaw_rad)])]
        yaws = reach.origin[2] + PITCH[2] * (np.arange(reach.margin_mm.shape[2] - 1) + 0.5)
        return [np.array([pose.x_mm, pose.y_mm, yaw]) for yaw in yaws]

    def can_hold(self, pose: Pose2) -> bool:
        """Whether any grasp can hold the part at a pose."""
        return bool(self.options(pose))

    def can_hold_at(self, x_mm: float, y_mm: float) -> bool:
        """Whether any grasp can hold the part at a position, at whatever angle."""
        for reach in self.reaches:
            i, j, _ = reach.cell(np.array([x_mm, y_mm, reach.origin[2]]))
            n_x, n_y, _ = reach.held.shape
            if 0 <= i < n_x and 0 <= j < n_y and reach.held[i, j].any():
                return True
        return False

    def nearest(self, pose: Pose2, angle_matters: bool) -> Pose2 | None:
        """The nearest pose that can be held; an angle counts as its arc at the part's circumradius."""
        best, best_cost = None, math.inf
        for reach in self.reaches:
            held = _cells(reach)
            if not len(held):
                continue
            turn = np.angle(np.exp(1j * (held[:, 2] - pose.yaw_rad)))
            if self.is_round or not angle_matters:
                turn = np.zeros(len(held))
            offset = np.clip(np.abs(held[:, :2] - pose.xy_mm) - PITCH[:2] / 2.0 + 1e-3, 0.0, None)
            turned = np.clip(np.abs(turn) - PITCH[2] / 2.0 + 1e-3, 0.0, None)
            cost = (offset**2).sum(axis=1) + (turned * self.bench.part.circumradius_mm) ** 2
            k = int(np.argmin(cost))
            if cost[k] < best_cost:
                xy = held[k, :2] + np.sign(pose.xy_mm - held[k, :2]) * (np.abs(pose.xy_mm - held[k, :2]) - offset[k])
                yaw = pose.yaw_rad if not angle_matters or self.is_round else pose.yaw_rad + math.copysign(turned[k], turn[k])
                best, best_cost = Pose2(float(xy[0]), float(xy[1]), math.remainder(yaw, 2.0 * math.pi)), float(cost[k])
        return best

    def primitives(self, reach_index: int, cell: Node) -> Primitives:
        """The primitives of a cell of one of the reaches."""
        return _cached_primitives(self, reach_index, cell)


def _reaches_over(bench: Bench, park: Array, period_rad: float) -> list[Reach]:
    """Reaches for each part angle of the grid; a symmetric part is searched over one period only, and that is turned on."""
    n_steps = max(1, round(period_rad / ANGLE_STEP_RAD))
    first = [reach for step in range(n_steps) for reach in _reaches_at(bench, park, -math.pi + step * period_rad / n_steps, N_GRASPS)]
    reaches: list[Reach] = []
    for k in range(round(2.0 * math.pi / period_rad)):
        turn = np.array([0.0, 0.0, k * period_rad])
        reaches.extend(
            Reach(r.grasp.turned(-k * period_rad), r.origin + turn, r.margin_mm, r.open_margin_mm, r.joints, r.held) for r in first
        )
    return reaches


def _reaches_at(bench: Bench, park: Array, yaw_rad: float, n: int) -> list[Reach]:
    """Up to n grasps for the part at the palm centre that the fingers get into from the park posture, each with its reach.

    A grasp after the first is kept if it adds poses that those before it cannot hold.
    """
    centre = np.array([0.0, 0.0, yaw_rad])
    found: list[Reach] = []
    covered = None
    for grasp in ranked_at(bench, yaw_rad)[:N_TRIED]:
        pose = Pose2(0.0, 0.0, yaw_rad)
        if not any(transfer(bench, park, None, (grasp, centre), pose, 1.0, Speeds(), way) for way in WAYS):
            continue
        reach = flood(bench, grasp, centre)
        held = reach.held
        if covered is not None and np.count_nonzero(held & ~covered) < NEW_SHARE * np.count_nonzero(covered):
            continue
        covered = held if covered is None else covered | held
        found.append(reach)
        if len(found) == n:
            break
    return found


@lru_cache(maxsize=512)
def _cached_primitives(library: Library, reach_index: int, cell: Node) -> Primitives:
    return primitives_of(library.bench, library.reaches[reach_index], cell, library.loose_mm)


def _cells(reach: Reach) -> Array:
    """Centres (k, 3) of the cells that can be held."""
    return np.asarray(reach.origin + PITCH * (np.argwhere(reach.held) + 0.5))


def park_posture(bench: Bench) -> Array:
    """A wide ring of fingers about the palm centre whose gaps still hold the part in, wherever inside it lies.

    Wide, and wrapping the part no more than it must, so that the way into every grasp is short. Where no ring holds the part in (no
    cage required), the one with the narrowest gaps among the widest.
    """
    best, best_cost = bench.hand.home, math.inf
    for opening_mm, phase in product(PARK_OPENINGS_MM, PARK_PHASES_RAD):
        joints, left_mm = ring_posture(bench, float(phase), opening_mm)
        if left_mm > LEFT_MM or bench.clearances.between_fingers(joints) < FINGERS_APART_MM:
            continue
        lack_mm = max(PARK_MARGIN_MM - bench.ring.certify(joints, np.zeros(3)).margin_mm, 0.0)
        cost = abs(math.degrees(phase)) + WRAP_PER_MM * (PARK_OPENINGS_MM[0] - opening_mm) + 1000.0 * lack_mm
        if cost < best_cost:
            best, best_cost = joints, cost
    return best


def ring_posture(bench: Bench, phase_rad: float, opening_mm: float) -> tuple[Array, float]:
    """Fingers about the palm centre at `opening_mm` from the part's circumcircle, their tips turned by a phase from their bases."""
    bearings = base_bearings(bench.hand, np.zeros(2)) + phase_rad
    rays = np.stack([np.cos(bearings), np.sin(bearings)], axis=1)
    radius_mm = bench.part.circumradius_mm
    circle = PartShape.circle(radius_mm)
    best = (bench.hand.home, math.inf)
    for jaw_turn in (-math.pi / 2.0, math.pi / 2.0) if bench.hand.is_jaw.any() else (math.nan,):
        ring = Grasp(radius_mm * rays, rays, np.where(bench.hand.is_jaw, jaw_turn, math.nan), 0.0)
        found = ring.joints(bench.hand, circle, np.zeros(3), opening_mm, bench.hand.home)
        best = min(best, found, key=lambda pair: pair[1])
    return best
