"""The simulated world against closed forms of mechanics, and its determinism. MuJoCo does the contact; what we add is checked here."""

import math

import numpy as np
import pytest

from control.model.kinematics import HandModel, centre_lines
from control.wire.pulses import PulseMap
from hw_profiles import geometry, load
from hw_profiles.geometry import Pose2
from service.simulated.mjcf import convex_pieces
from service.simulated.variation import Variation
from service.simulated.world import GRAVITY, World

FAR = Pose2(200.0, 200.0, 0.0)


def world(rig_name: str = "trefoil", part: str = "roller-40", pose: Pose2 = FAR, **variation: float) -> World:
    rig = load.load_rig(rig_name, part)
    return World(rig, HandModel(rig.hand).home, pose, Variation(**variation), np.random.default_rng(1))


@pytest.mark.parametrize("name", load.shipped("rigs"))
def test_servos_go_where_their_pulses_say(name: str) -> None:
    made = world(name)
    hand, pulses = made.nominal, PulseMap.of(made.rig)
    wanted = hand.home - 0.2 * (hand.home - hand.low)  # fingers clear of each other
    for _ in range(60):
        made.set_pulses(pulses.pulses_us(wanted))
        made.advance(20_000)
    # Gear friction over stiffness is the most a servo stays away: 30/7000 rad; a slide's pinion turns that into mm.
    left = np.abs(made.joints - wanted) * np.abs(pulses.us_per_joint) * 0.09
    assert left.max() < math.degrees(30.0 / 7000.0) + 0.1


def test_no_pulse_is_no_torque() -> None:
    made = world()
    pulses = PulseMap.of(made.rig)
    made.set_pulses(pulses.pulses_us(made.nominal.high))
    made.advance(40_000)
    made.set_pulses(np.full(made.nominal.n_joints, np.nan))
    made.advance(400_000)
    stopped = made.joints
    made.advance(400_000)
    assert np.allclose(made.joints, stopped, atol=1e-6)
    assert np.abs(made.joints - made.nominal.high).max() > 0.1


def test_a_change_within_the_dead_band_is_not_answered() -> None:
    made = world(dead_band_us=10.0)
    pulses = PulseMap.of(made.rig).pulses_us(made.nominal.home)
    made.set_pulses(pulses)
    made.advance(200_000)
    before = made._wanted.copy()
    made.set_pulses(pulses + 9.0)
    assert np.array_equal(made._wanted, before)
    made.set_pulses(pulses + 11.0)
    assert not np.any(made._wanted == before)


@pytest.mark.parametrize("direction", [0.0, 0.6, math.pi / 4, 2.0])
def test_sliding_part_slows_by_mu_g_in_every_direction(direction: float) -> None:
    """v² = 2 μ g s: friction acts as a circle, not as a box along x and y."""
    made = world()
    speed, part = 0.5, made.rig.part
    impulse = speed * part.mass_g * 1e-3
    made.push(impulse * math.cos(direction), impulse * math.sin(direction))
    made.advance(600_000)
    slid_m = math.dist(made.part_pose.xy_mm, FAR.xy_mm) * 1e-3
    assert slid_m == pytest.approx(speed**2 / (2.0 * part.plate_friction * GRAVITY), rel=0.03)
    offset = made.part_pose.xy_mm - FAR.xy_mm
    assert math.atan2(offset[1], offset[0]) == pytest.approx(direction, abs=0.03)


def test_fingertip_pushes_no_harder_than_its_servos_stall() -> None:
    """A stalled base servo of torque τ holds a tip at lever arm r with τ / r."""
    made = world()
    stiffness, limit = made._stiffness, made._torque
    assert limit[0] == pytest.approx(0.6)
    assert stiffness[0] == pytest.approx(7.0)
    polar = world("polar")
    assert polar._torque[1] == pytest.approx(0.6 / 0.025)  # N, through a pinion of 25 mm


def test_links_of_a_varied_hand_differ_from_the_profile() -> None:
    made = world(link_scale=1.1)
    tips = [centre_lines(hand, made.nominal.home)[:, -1] for hand in (made.nominal, made.hand)]
    assert np.linalg.norm(tips[0] - tips[1], axis=1).min() > 3.0


def test_same_seed_same_world_bit_for_bit() -> None:
    def run() -> np.ndarray:
        made = world(pose=Pose2(3.0, 2.0, 0.4), servo_offset_deg=2.0, shake_mm=3.0, shake_hz=2.0)
        pulses = PulseMap.of(made.rig)
        for k in range(20):
            made.set_pulses(pulses.pulses_us(made.nominal.home + 0.02 * k))
            made.advance(20_000)
        return np.concatenate([made.joints, made.part_pose.as_array()])

    assert np.array_equal(run(), run())


def test_non_convex_outline_is_cut_into_convex_pieces_of_the_same_area() -> None:
    outline = np.array(load.load_part("bracket-l").outline_mm)
    pieces = convex_pieces(outline)
    assert len(pieces) == 2
    assert all(geometry.is_convex(piece) for piece in pieces)
    assert sum(geometry.signed_area(piece) for piece in pieces) == pytest.approx(geometry.signed_area(outline))
