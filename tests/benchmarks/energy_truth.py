"""Ground truth for the elastic energy: the best of six SLSQP starts on each finger, with distances in plain NumPy. For tests only."""

from __future__ import annotations

import math

import numpy as np
from scipy.optimize import minimize

from control.model.kinematics import HandModel
from hw_profiles.geometry import Array, Pose2, boundary_distance, contains
from hw_profiles.part import Disc, Part

N_STARTS = 6
FEASIBLE_MM = 1e-4


def spring_energy(shift: Array, stiffness: Array, stall: Array) -> Array:
    """H(d) of eq. (2), in NumPy."""
    size = np.abs(shift)
    return np.where(size <= stall / stiffness, 0.5 * stiffness * shift**2, stall * (size - 0.5 * stall / stiffness))


class FingerTruth:
    """One finger, its command and the part at a pose."""

    def __init__(self, hand: HandModel, part: Part, finger: int, command: Array, pose: Pose2) -> None:
        own = hand.joints_of(finger)
        self.slides, self.link, self.radius = hand.is_slide[own], hand.link_mm[own], hand.link_radius_mm[own]
        self.low, self.high = hand.low[own], hand.high[own]
        self.stiffness, self.stall, self.command = hand.stiffness[own], hand.stall[own], command[own]
        self.tip = float(hand.tip_radius_mm[finger])
        here = pose.inverse() @ Pose2(*hand.base_mm[finger], float(hand.base_yaw_rad[finger]))
        self.base, self.yaw = here.xy_mm, here.yaw_rad
        self.outline = np.array(part.outline_mm)
        self.disc = part.circumradius_mm if isinstance(part.shape, Disc) else 0.0

    def energy(self, q: Array) -> float:
        return float(spring_energy(q - self.command, self.stiffness, self.stall).sum())

    def slope(self, q: Array) -> Array:
        return np.clip(self.stiffness * (q - self.command), -self.stall, self.stall)

    def line(self, q: Array) -> Array:
        points, yaw = [self.base], self.yaw
        for value, slides, link in zip(q, self.slides, self.link, strict=True):
            yaw = yaw if slides else yaw + value
            points.append(points[-1] + (value if slides else link) * np.array([math.cos(yaw), math.sin(yaw)]))
        return np.array(points)

    def clearances(self, q: Array) -> Array:
        """Signed clearance of every link and of the tip [mm]."""
        line = self.line(q)
        links = [self._segment(a, b) - r for a, b, r in zip(line[:-1], line[1:], self.radius, strict=True)]
        return np.array([*links, self._segment(line[-1], line[-1]) - self.tip])

    def _segment(self, a: Array, b: Array) -> float:
        if self.disc:
            return _distance(np.zeros(2), a, b) - self.disc
        ends = self.outline, np.roll(self.outline, -1, axis=0)
        along = np.linspace(0.0, 1.0, 33)[:, None]
        on_link = a + along * (b - a)
        inside = contains(self.outline, on_link)
        if inside.any():
            return -float(boundary_distance(self.outline, on_link[inside]).max())
        from_link = boundary_distance(self.outline, np.array([a, b])).min()
        return float(min(from_link, min(_distance(corner, a, b) for corner in ends[0])))

    def least(self, rng: np.random.Generator) -> float:
        """Least energy over six starts: the command, and points drawn around it; inf when none ends clear of the part."""
        if self.clearances(self.command).min() >= 0.0:
            return 0.0
        starts = [self.command]
        for spread in (0.1, 0.25, 0.5, 0.8, 1.0)[: N_STARTS - 1]:
            starts.append(
                np.clip(self.command + spread * rng.uniform(-1.0, 1.0, len(self.command)) * (self.high - self.low), self.low, self.high)
            )
        return min(self.descend(start) for start in starts)

    def descend(self, start: Array) -> float:
        """One SLSQP start."""
        found = minimize(
            self.energy,
            start,
            jac=self.slope,
            method="SLSQP",
            bounds=list(zip(self.low, self.high, strict=True)),
            constraints=[{"type": "ineq", "fun": self.clearances}],
            options={"maxiter": 100, "ftol": 1e-9},
        )
        q = np.clip(found.x, self.low, self.high)
        return self.energy(q) if self.clearances(q).min() > -FEASIBLE_MM else math.inf


def _distance(point: Array, a: Array, b: Array) -> float:
    square = float((b - a) @ (b - a))
    share = min(max(float((point - a) @ (b - a)) / square, 0.0), 1.0) if square > 0.0 else 0.0
    return float(np.linalg.norm(point - a - share * (b - a)))


def true_energy(hand: HandModel, part: Part, command: Array, pose: Pose2, rng: np.random.Generator) -> float:
    """Σ over fingers of the best of six SLSQP starts [mJ]."""
    return sum(FingerTruth(hand, part, f, command, pose).least(rng) for f in range(hand.n_fingers))
