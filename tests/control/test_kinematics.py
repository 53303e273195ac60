"""Kinematics: Jacobians against finite differences, inverse against forward, compiled kernel against plain NumPy."""

import math

import numpy as np
import pytest

from control.model.kinematics import HandModel, centre_lines, contact_centres, finger_jacobian, link_yaws, place_contact, place_contacts
from hw_profiles import load

HANDS = load.shipped("hands")


def model(name: str) -> HandModel:
    return HandModel(load.load_hand(name))


def drawn(hand: HandModel, seed: int) -> np.ndarray:
    return np.random.default_rng(seed).uniform(hand.low, hand.high)


def plain_centre_line(hand: HandModel, finger: int, joints: np.ndarray) -> np.ndarray:
    point, yaw = hand.base_mm[finger].copy(), hand.base_yaw_rad[finger]
    line = [point]
    for k in range(hand.first[finger], hand.first[finger + 1]):
        yaw += 0.0 if hand.is_slide[k] else joints[k]
        length = joints[k] if hand.is_slide[k] else hand.link_mm[k]
        point = point + length * np.array([math.cos(yaw), math.sin(yaw)])
        line.append(point)
    return np.array(line + [point] * (4 - len(line)))


@pytest.mark.parametrize("name", HANDS)
def test_kernel_agrees_with_plain_numpy(name: str) -> None:
    hand = model(name)
    for seed in range(20):
        joints = drawn(hand, seed)
        lines = centre_lines(hand, joints)
        for finger in range(hand.n_fingers):
            assert np.allclose(lines[finger], plain_centre_line(hand, finger, joints), atol=1e-9)


@pytest.mark.parametrize("name", HANDS)
def test_jacobian_agrees_with_finite_differences(name: str) -> None:
    hand, step = model(name), 1e-6
    for seed in range(10):
        joints = drawn(hand, seed)
        for finger in range(hand.n_fingers):
            own = hand.joints_of(finger)
            tip = centre_lines(hand, joints)[finger, -1]
            jacobian = finger_jacobian(hand, finger, joints, tip)
            for column, k in enumerate(range(own.start, own.stop)):
                nudge = np.zeros_like(joints)
                nudge[k] = step
                up, down = centre_lines(hand, joints + nudge)[finger, -1], centre_lines(hand, joints - nudge)[finger, -1]
                assert np.allclose(jacobian[:, column], (up - down) / (2.0 * step), atol=1e-4)


@pytest.mark.parametrize("name", HANDS)
def test_inverse_finds_contacts_that_the_forward_made(name: str) -> None:
    hand, n_missed = model(name), 0
    for seed in range(200):
        joints = drawn(hand, seed)
        centres, yaws = contact_centres(hand, joints), link_yaws(hand, joints)[hand.first[1:] - 1]
        for finger in range(hand.n_fingers):
            own = hand.joints_of(finger)
            found, left_mm = place_contact(hand, finger, centres[finger], hand.home[own], yaws[finger] if hand.is_jaw[finger] else None)
            n_missed += left_mm > 0.01
            assert np.all(found >= hand.low[own] - 1e-12)
            assert np.all(found <= hand.high[own] + 1e-12)
    assert n_missed <= 0.03 * 200 * hand.n_fingers  # three-joint jaws near folded postures may need another start


@pytest.mark.parametrize("name", HANDS)
def test_out_of_reach_answers_the_nearest_point(name: str) -> None:
    hand = model(name)
    far = hand.base_mm * 10.0
    joints, left_mm = place_contacts(hand, far, np.full(hand.n_fingers, np.nan), hand.home)
    assert np.all(left_mm > 100.0)
    assert np.all((joints >= hand.low) & (joints <= hand.high))
