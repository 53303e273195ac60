"""The grasps of a hand on a part: searched over contacts, finger assignments and part angles, and checked on the hand model."""

from __future__ import annotations

import itertools
import math

import numpy as np
from numpy.typing import NDArray

from control.grasping import contacts
from control.grasping.contacts import Outline
from control.grasping.grasp import Grasp, base_bearings
from control.grasping.hold import FINGERS_APART_MM, MIN_CLOSURE, Bench, Hold
from control.model.kinematics import HandModel
from hw_profiles.geometry import Array

PHASES_RAD = np.radians(np.arange(-90.0, 91.0, 15.0))
N_NEAREST = {2: 6, 3: 4, 4: 3}  # contacts tried per finger and phase; 2 for hands with more fingers
PLENTY_MM = 6.0  # a cage margin beyond this is worth no more
N_PROBED = 40
PROBES = np.array(
    [
        *[(dx, dy, 0.0) for dx, dy in ((18, 0), (-18, 0), (0, 18), (0, -18), (35, 0), (-35, 0), (0, 35), (0, -35))],
        *[(0.0, 0.0, math.radians(turn)) for turn in (-60, -45, -30, -15, 15, 30, 45, 60)],
    ]
)


def candidates(bench: Bench, part_yaw_rad: float) -> list[Grasp]:
    """Force-closure grasps for the part at an angle near the palm centre, the best closure first."""
    if bench.hand.is_jaw.all() and bench.hand.n_fingers == 2:
        return _jaw_candidates(bench)
    outline = contacts.tip_contacts(bench.part, float(bench.hand.tip_radius_mm.max()))
    sets = _contact_sets(bench, outline, part_yaw_rad)
    if not len(sets):
        return []
    quality = contacts.closures(outline.points_mm, outline.normals, sets, bench.part.friction, bench.demands.lever_mm)
    free_yaw = np.full(bench.hand.n_fingers, math.nan)
    order = [k for k in np.argsort(-quality) if quality[k] > MIN_CLOSURE]
    return [Grasp(outline.points_mm[sets[k]], outline.normals[sets[k]], free_yaw, float(quality[k])) for k in order]


def _contact_sets(bench: Bench, outline: Outline, part_yaw_rad: float) -> NDArray[np.int64]:
    """Contact indices (k, n_fingers): for each phase, each finger tries the contacts nearest to its bearing."""
    wanted = base_bearings(bench.hand, np.zeros(2)) - part_yaw_rad
    n_nearest = N_NEAREST.get(bench.hand.n_fingers, 2)
    found: set[tuple[int, ...]] = set()
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


def ranked_at(bench: Bench, part_yaw_rad: float) -> list[Grasp]:
    """Grasps for the part near the palm centre, turned by `part_yaw_rad`, the one that promises the widest reach first.

    Those that hold best at the centre are probed around it: moved a little and turned a little each way.
    """
    centre = np.array([0.0, 0.0, part_yaw_rad])
    held = []
    for grasp in candidates(bench, part_yaw_rad):
        hold = bench.hold(grasp, centre, bench.hand.home)
        if hold is not None:
            held.append((_worth(bench, hold), grasp, hold))
    held.sort(key=lambda entry: -entry[0])
    ranked = []
    for _, grasp, hold in held[:: max(1, len(held) // (4 * N_PROBED))][:N_PROBED]:
        probes = [bench.hold(grasp, centre + probe, hold.joints) for probe in PROBES]
        ranked.append((sum(1.0 + _worth(bench, probe) for probe in probes if probe is not None), grasp))
    ranked.sort(key=lambda entry: -entry[0])
    return [grasp for _, grasp in ranked]


def _worth(bench: Bench, hold: Hold) -> float:
    """How good a hold is: closure, cage margin up to what is plenty, and room in the joints."""
    margin = min(max(hold.margin_mm, 0.0), PLENTY_MM) / PLENTY_MM
    if bench.demands.margin_mm == -math.inf:  # preferred, not required
        margin = 0.3 + 0.7 * margin
    return hold.closure * margin * (0.2 + _joint_room(bench.hand, hold.joints))


def _joint_room(hand: HandModel, joints: Array) -> float:
    """How far the joints are from their limits: 1 in the middle, 0 on a limit; the worst joint counts, saturating at a quarter."""
    room = np.minimum(joints - hand.low, hand.high - joints) / (0.25 * (hand.high - hand.low))
    return float(np.clip(room, 0.0, 1.0).min())
