"""The grasps of a hand on a part: searched over contacts, finger assignments and part angles, and checked on the hand model."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from control.grasping import contacts
from control.grasping.contacts import Outline
from control.grasping.grasp import Grasp, base_bearings
from control.model.caging import Ring
from control.model.contact import Clearances
from control.model.kinematics import HandModel
from hw_profiles.geometry import Array, Pose2
from hw_profiles.part import Disc, Part

PHASES_RAD = np.radians(np.arange(-90.0, 91.0, 15.0))
N_NEAREST = {2: 6, 3: 4, 4: 3}  # contacts tried per finger and phase; 2 for hands with more fingers
MIN_CLOSURE = 0.05
LEFT_MM = 0.3  # greatest distance that inverse kinematics may leave
TOUCH_MM = -0.6  # a link other than the contact may graze the part by this much: the fingers are compliant
FINGERS_APART_MM = 1.0


@dataclass(frozen=True, eq=False)
class Bench:
    """The hand and part under question, with the compiled tests on them."""

    hand: HandModel
    part: Part
    ring: Ring
    clearances: Clearances
    margin_mm: float  # what the cage certificate must show; −inf where no cage is required

    @classmethod
    def of(cls, hand: HandModel, part: Part, margin_mm: float) -> Bench:
        return cls(hand, part, Ring(hand, part), Clearances(hand, part), margin_mm)

    @property
    def lever_mm(self) -> float:
        """What turns a moment into a force of like size: the part's circumradius."""
        return self.part.circumradius_mm

    def margin_at(self, joints: Array, pose: Pose2) -> float:
        """Cage margin [mm] of a posture about the part; −inf when a link runs into the part or fingers touch."""
        if self.clearances.to_part(joints, pose).min() < TOUCH_MM or self.clearances.between_fingers(joints) < FINGERS_APART_MM:
            return -math.inf
        return self.ring.certify(joints, pose.as_array()).margin_mm


def candidates(bench: Bench, part_yaw_rad: float) -> list[Grasp]:
    """Force-closure grasps for the part at an angle near the palm centre, the best closure first."""
    if bench.hand.is_jaw.all() and bench.hand.n_fingers == 2:
        return _jaw_candidates(bench)
    outline = contacts.tip_contacts(bench.part, float(bench.hand.tip_radius_mm.max()))
    sets = _contact_sets(bench, outline, part_yaw_rad)
    if not len(sets):
        return []
    quality = contacts.closures(outline.points_mm, outline.normals, sets, bench.part.friction, bench.lever_mm)
    free_yaw = np.full(bench.hand.n_fingers, math.nan)
    order = [k for k in np.argsort(-quality) if quality[k] > MIN_CLOSURE]
    return [Grasp(outline.points_mm[sets[k]], outline.normals[sets[k]], free_yaw, float(quality[k])) for k in order]


def _contact_sets(bench: Bench, outline: Outline, part_yaw_rad: float) -> NDArray[np.int64]:
    """Contact indices (k, n_fingers): for each phase, each finger tries the contacts nearest to its bearing."""
    wanted = base_bearings(bench.hand, np.zeros(2)) - part_yaw_rad
    n_nearest = N_NEAREST.get(bench.hand.n_fingers, 2)
    found = set()
    for phase in PHASES_RAD:
        turn = np.abs(np.angle(np.exp(1j * (outline.bearings_rad[None, :] - wanted[:, None] - phase))))
        nearest = np.argsort(turn, axis=1)[:, :n_nearest]
        found.update(itertools.product(*nearest.tolist()))
    sets = np.array(sorted(found), dtype=np.int64)
    centres = outline.points_mm + outline.normals * float(bench.hand.tip_radius_mm.max())
    apart = np.full(len(sets), np.inf)
    for i, j in itertools.combinations(range(sets.shape[1]), 2):
        apart = np.minimum(apart, np.linalg.norm(centres[sets[:, i]] - centres[sets[:, j]], axis=1))
    return sets[apart > 2.0 * float(bench.hand.tip_radius_mm.max()) + FINGERS_APART_MM]


def _jaw_candidates(bench: Bench) -> list[Grasp]:
    """Two flat jaws, either way round, each lying to either side of its contact."""
    grasps = []
    for pair in contacts.jaw_pairs(bench.part):
        for order in ([0, 1], [1, 0]):
            for turns in itertools.product((-math.pi / 2.0, math.pi / 2.0), repeat=2):
                # A flat contact takes moments too; the half length of a jaw's contact stands for its lever.
                grasps.append(Grasp(pair.points_mm[order], pair.normals[order], np.array(turns), 1.0))
    return grasps


def best_at(bench: Bench, part_yaw_rad: float, n_tried: int = 60) -> tuple[Grasp, float] | None:
    """The grasp for the part at the palm centre turned by `part_yaw_rad` that promises most, and its cage margin [mm]."""
    pose = Pose2(0.0, 0.0, part_yaw_rad)
    best: tuple[Grasp, float] | None = None
    best_score = 0.0
    for grasp in _spread(candidates(bench, part_yaw_rad), n_tried):
        joints, left_mm = grasp.joints(bench.hand, pose, 0.0, bench.hand.home)
        if left_mm > LEFT_MM:
            continue
        margin_mm = bench.margin_at(joints, pose)
        if margin_mm < bench.margin_mm:
            continue
        score = grasp.closure * (1.0 + min(max(margin_mm, 0.0), 8.0)) * _joint_room(bench.hand, joints)
        if score > best_score:
            best, best_score = (grasp, margin_mm), score
    return best


def _spread(grasps: list[Grasp], n: int) -> list[Grasp]:
    """At most n of the list, evenly over its ranks."""
    if len(grasps) <= n:
        return grasps
    return [grasps[k] for k in np.linspace(0, len(grasps) - 1, n).astype(int)]


def _joint_room(hand: HandModel, joints: Array) -> float:
    """How far the joints are from their limits: 1 in the middle, 0 on a limit; the worst joint counts, saturating at a quarter."""
    room = np.minimum(joints - hand.low, hand.high - joints) / (0.25 * (hand.high - hand.low))
    return float(np.clip(room, 0.0, 1.0).min())


def needs_one_angle(part: Part) -> bool:
    """A disc looks the same at every angle: one angle stands for all."""
    return isinstance(part.shape, Disc)
