"""Pose filter: it follows constant velocity, takes angles around the circle, and its gate knows chance from change."""

import math

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import chi2

from hw_profiles.geometry import Pose2
from vision import pose_filter

NOISE = np.diag([0.01**2, 0.01**2, 0.001**2])


def followed(n: int, velocity: np.ndarray, rng: np.random.Generator) -> tuple[pose_filter.Belief, np.ndarray]:
    truth = np.array([1.0, 2.0, 3.0])
    belief = pose_filter.begin(0, Pose2.from_array(truth), NOISE)
    for index in range(1, n):
        truth = truth + velocity * 0.02
        measured = truth + rng.normal(0, np.sqrt(np.diag(NOISE)))
        belief = pose_filter.update(pose_filter.predict(belief, index * 20_000), Pose2.from_array(measured), NOISE)
    return belief, truth


def test_constant_velocity_is_learned_and_predicted_through_the_half_turn() -> None:
    velocity = np.array([30.0, -20.0, 1.5])
    belief, truth = followed(60, velocity, np.random.default_rng(1))
    np.testing.assert_allclose(belief.twist, velocity, atol=2.0)
    later = pose_filter.predict(belief, belief.at_us + 60_000).pose
    ahead = truth + velocity * 0.06
    assert math.hypot(later.x_mm - ahead[0], later.y_mm - ahead[1]) < 0.15
    assert -math.pi < later.yaw_rad <= math.pi
    assert math.cos(later.yaw_rad - ahead[2]) > 0.9999


def test_gate_passes_chance_and_stops_a_jump() -> None:
    belief, truth = followed(30, np.array([10.0, 0.0, 0.0]), np.random.default_rng(2))
    ahead = pose_filter.predict(belief, belief.at_us + 20_000)
    assert pose_filter.surprise(ahead, Pose2.from_array(np.add(truth, [0.2, 0.0, 0.0])), NOISE) < pose_filter.GATE
    assert pose_filter.surprise(ahead, Pose2.from_array(np.add(truth, [8.0, 0.0, 0.0])), NOISE) > pose_filter.GATE
    assert chi2.sf(pose_filter.GATE, 3) == pytest.approx(1e-4, rel=0.01)


def test_process_noise_is_the_integral_of_white_acceleration() -> None:
    dt = 0.037
    _, noise = pose_filter.transition(dt)
    q = pose_filter.MOVE_NOISE
    for (i, j), weight in (((0, 0), lambda t: t * t), ((0, 3), lambda t: t), ((3, 3), lambda t: 1.0)):
        assert noise[i, j] == pytest.approx(q * quad(weight, 0, dt)[0])


def test_covariance_stays_symmetric_and_positive() -> None:
    belief, _ = followed(200, np.zeros(3), np.random.default_rng(3))
    np.testing.assert_allclose(belief.covariance, belief.covariance.T, atol=1e-12)
    assert np.linalg.eigvalsh(belief.covariance).min() > 0


def test_irregular_frames_are_no_trouble() -> None:
    belief = pose_filter.begin(0, Pose2(0.0, 0.0, 0.0), NOISE)
    for at_us in (20_000, 60_000, 65_000, 200_000, 220_000):
        belief = pose_filter.update(pose_filter.predict(belief, at_us), Pose2(at_us * 2e-5, 0.0, 0.0), NOISE)
    assert belief.twist[0] == pytest.approx(20.0, abs=0.5)


def test_an_old_belief_or_one_of_the_future_is_not_recalled() -> None:
    belief = pose_filter.begin(1_000_000, Pose2(0.0, 0.0, 0.0), NOISE)
    assert pose_filter.recall(None, 0) is None
    assert pose_filter.recall(belief, 999_999) is None
    assert pose_filter.recall(belief, 1_000_000 + pose_filter.COAST_US + 1) is None
    assert pose_filter.recall(belief, 1_020_000) is not None


def test_an_unexpected_pose_that_is_sure_starts_a_new_belief() -> None:
    belief, truth = followed(30, np.array([10.0, 0.0, 0.0]), np.random.default_rng(4))
    ahead = pose_filter.predict(belief, belief.at_us + 20_000)
    near = pose_filter.join(ahead, ahead.at_us, Pose2.from_array(truth), NOISE)
    assert near.covariance[0, 0] < ahead.covariance[0, 0]
    assert near.covariance[3, 3] < ahead.covariance[3, 3]
    far = pose_filter.join(ahead, ahead.at_us, Pose2(90.0, 0.0, 0.0), NOISE)
    np.testing.assert_array_equal(far.mean, [90.0, 0.0, 0.0, 0.0, 0.0, 0.0])
    np.testing.assert_array_equal(far.covariance[:3, :3], NOISE)
