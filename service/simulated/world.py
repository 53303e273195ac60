"""The simulated world: a hand of hobby servos and a part on a plate.

Not modelled: tipping and lifting (the world is planar), heat, supply sag, play in the joints, wear.
"""

from __future__ import annotations

import math
from typing import Any

import mujoco
import numpy as np

from control.model.kinematics import HandModel
from control.wire.pulses import PulseMap
from hw_profiles.geometry import Array, Pose2
from hw_profiles.hand import Hand
from hw_profiles.rig import Rig
from service.simulated.mjcf import HORN_INERTIA, MM, world_xml
from service.simulated.variation import Variation

STEP_US = 2000
GRAVITY = 9.80665  # m/s², standard
STICK_SPEED = 1e-3  # m/s, below which plate friction holds rather than slides


class World:
    """One rig's world. Time goes on only in `advance`.

    Parameters
    ----------
    joints : (n_joints,) where the fingers stand at first. part_pose : hand_from_part at first.
    rng : draws what the variation leaves to chance (horn offsets, the weak servo, link factors), once.
    """

    def __init__(self, rig: Rig, joints: Array, part_pose: Pose2, variation: Variation, rng: np.random.Generator) -> None:
        self.rig, self.variation = rig, variation
        self.nominal = HandModel(rig.hand)
        self.hand = HandModel(_varied_hand(rig.hand, variation, rng))
        n = self.hand.n_joints
        self._pulses = PulseMap.of(rig)
        offset_rad = np.radians(variation.servo_offset_deg) * rng.uniform(-1.0, 1.0, size=n)
        self._per_horn = np.abs(1.0 / (self._pulses.us_per_joint * _rad_per_us(rig)))
        self._offset = offset_rad * self._per_horn
        strength = np.ones(n)
        strength[rng.integers(n)] = variation.servo_weak
        softness = variation.softness
        xml = world_xml(self.hand, rig.part, STEP_US * 1e-6, rig.part.friction * variation.friction, softness)
        self._model: Any = mujoco.MjModel.from_xml_string(xml)
        self._data: Any = mujoco.MjData(self._model)
        self._unit = np.where(self.hand.is_slide, MM, 1.0)  # m or rad per joint unit
        self._set_joints(strength)
        self._dead_band_us = _dead_band_us(rig, variation)
        self.now_us = 0
        self.place(joints, part_pose)

    def _set_joints(self, strength: Array) -> None:
        """Servo constants in MuJoCo's units: stiffness and torque limit at the joint, damping, gear friction, inertia."""
        hand, n = self.hand, self.hand.n_joints
        per_horn = np.where(hand.is_slide, self._per_horn * MM, 1.0)  # m per rad of the horn, or 1
        servos = _servos(self.rig.hand)
        self._stiffness = strength * np.array([s.stiffness_nmm_per_rad for s in servos]) * MM / per_horn**2
        self._torque = strength * np.array([s.stall_torque_nmm for s in servos]) * MM / per_horn
        self._speed = np.array([math.radians(s.speed_deg_per_s) for s in servos]) * per_horn
        self._model.dof_damping[:n] = np.array([s.damping_nmm_s_per_rad for s in servos]) * MM / per_horn**2
        self._model.dof_frictionloss[:n] = np.array([s.gear_friction_nmm for s in servos]) * MM / per_horn
        self._model.dof_armature[:n] = HORN_INERTIA / per_horn**2
        # Friction of the part with its plate: a limit-surface ellipsoid of force and moment (Howe & Cutkosky 1996). The moment that
        # alone turns it is μ m g times the mean distance of its face from the centre, 2/3 of the radius for a disc.
        self._plate_n = self.rig.part.plate_friction * self.variation.plate_friction * self.rig.part.mass_g * 1e-3 * GRAVITY
        self._lever_m = 2.0 / 3.0 * self.rig.part.circumradius_mm * MM

    def place(self, joints: Array, part_pose: Pose2) -> None:
        """Put fingers and part at rest where they are wanted, as a person does between two runs."""
        n = self.hand.n_joints
        self._data.qvel[:] = 0.0
        self._data.qpos[:n] = (joints + self._offset) * self._unit
        self._data.qpos[n:] = [part_pose.x_mm * MM, part_pose.y_mm * MM, part_pose.yaw_rad]
        self._target = self._data.qpos[:n].copy()  # where each servo's electronics want it, in m or rad
        self._wanted = self._target.copy()
        self._taken_us = np.full(n, np.nan)
        self._is_driven = np.zeros(n, dtype=bool)

    def set_pulses(self, pulses_us: Array) -> None:
        """Pulse widths (n_joints,) [µs] that arrive now; nan for none. A change within the dead band is not answered."""
        has_pulse = ~np.isnan(pulses_us)
        is_answered = has_pulse & ~(np.abs(pulses_us - self._taken_us) < self._dead_band_us)
        self._taken_us = np.where(is_answered, pulses_us, np.where(has_pulse, self._taken_us, np.nan))
        asked = (self._pulses.joints(np.where(is_answered, pulses_us, 1500.0)) + self._offset) * self._unit
        self._wanted = np.where(is_answered, asked, self._wanted)
        n = self.hand.n_joints
        started = has_pulse & ~self._is_driven
        self._target = np.where(started, self._data.qpos[:n], self._target)
        self._is_driven = has_pulse

    def advance(self, duration_us: int) -> None:
        """Let time go on, in whole steps of 2 ms."""
        for _ in range(round(duration_us / STEP_US)):
            self._step()

    def _step(self) -> None:
        data, n, step_s = self._data, self.hand.n_joints, STEP_US * 1e-6
        reach = self._speed * step_s
        self._target += np.clip(self._wanted - self._target, -reach, reach)
        torque = np.clip(self._stiffness * (self._target - data.qpos[:n]), -self._torque, self._torque)
        data.qfrc_applied[:n] = np.where(self._is_driven, torque, 0.0)
        self._model.dof_frictionloss[n:] = self._plate_friction(data.qvel[n:])
        data.qfrc_applied[n:] = self._shaken_force()
        mujoco.mj_step(self._model, data)
        self.now_us += STEP_US

    def _plate_friction(self, speed: Array) -> Array:
        """Friction bounds (3,) of part_x, part_y [N] and part_yaw [N·m] that make the joint-wise box act as one ellipsoid.

        While the part slides the bounds are shared out along its velocity, so that force and moment together stay on the limit surface;
        at rest each bound holds on its own.
        """
        scaled = np.array([speed[0], speed[1], speed[2] * self._lever_m])
        total = float(np.sqrt(scaled @ scaled))
        share = np.abs(scaled) / total if total > STICK_SPEED else np.ones(3)
        blend = min(total / STICK_SPEED, 1.0)
        share = (1.0 - blend) + blend * share
        return self._plate_n * np.array([share[0], share[1], share[2] * self._lever_m])

    def _shaken_force(self) -> Array:
        """Inertia force (3,) of the part in the frame of a bench that is shaken along x; the fingers are held by their servos."""
        variation = self.variation
        if variation.shake_mm == 0.0:
            return np.zeros(3)
        rate = 2.0 * math.pi * variation.shake_hz
        acceleration = variation.shake_mm * MM * rate**2 * math.sin(rate * self.now_us * 1e-6)
        return np.array([self.rig.part.mass_g * 1e-3 * acceleration, 0.0, 0.0])

    def push(self, impulse_x_ns: float, impulse_y_ns: float) -> None:
        """Kick the part by an impulse [N·s]."""
        mass_kg = self.rig.part.mass_g * 1e-3
        n = self.hand.n_joints
        self._data.qvel[n : n + 2] += np.array([impulse_x_ns, impulse_y_ns]) / mass_kg

    @property
    def joints(self) -> Array:
        """True joint values (n_joints,), as the links stand; the profile's horn is turned from these by the hidden offset."""
        return np.asarray(self._data.qpos[: self.hand.n_joints] / self._unit)

    @property
    def part_pose(self) -> Pose2:
        """True hand_from_part."""
        x_m, y_m, yaw = self._data.qpos[self.hand.n_joints :]
        return Pose2(float(x_m) / MM, float(y_m) / MM, math.remainder(float(yaw), 2.0 * math.pi))

    @property
    def has_escaped(self) -> bool:
        """Whether the part's centre lies beyond the fingers' bases."""
        limit = float(np.linalg.norm(self.hand.base_mm, axis=1).max())
        return float(np.hypot(*self.part_pose.xy_mm)) > limit


def _servos(hand: Hand) -> list[Any]:
    return [hand.servos[joint.servo] for finger in hand.fingers for joint in hand.chain_of(finger).joints]


def _rad_per_us(rig: Rig) -> Array:
    return np.array([servo.rad_per_us for servo in _servos(rig.hand)])


def _dead_band_us(rig: Rig, variation: Variation) -> Array:
    if variation.dead_band_us is not None:
        return np.full(len(_servos(rig.hand)), variation.dead_band_us)
    return np.array([servo.dead_band_us for servo in _servos(rig.hand)])


def _varied_hand(hand: Hand, variation: Variation, rng: np.random.Generator) -> Hand:
    """The hand as it was really built: every revolute link its own length; a chain a finger, for each differs."""
    if variation.link_scale == 1.0 and variation.link_spread == 0.0:
        return hand
    chains, fingers = {}, []
    for finger in hand.fingers:
        chain = hand.chain_of(finger)
        joints = []
        for joint in chain.joints:
            factor = variation.link_scale * (1.0 + variation.link_spread * rng.uniform(-1.0, 1.0))
            joints.append(joint.model_copy(update={"link_mm": joint.link_mm * factor}) if joint.kind == "revolute" else joint)
        chains[finger.name] = chain.model_copy(update={"joints": tuple(joints)})
        fingers.append(finger.model_copy(update={"chain": finger.name}))
    return hand.model_copy(update={"chains": chains, "fingers": tuple(fingers)})
