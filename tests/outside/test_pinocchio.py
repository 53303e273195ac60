"""Kinematics of every shipped hand against Pinocchio (PyPI `pin`), an independent rigid-body library."""

import math

import numpy as np
import pinocchio
import pytest

from control.model.kinematics import HandModel, centre_lines, finger_jacobian
from hw_profiles import load


def finger_in_pinocchio(hand: HandModel, finger: int) -> tuple[pinocchio.Model, int]:
    """The finger as Pinocchio joints: revolute about z, prismatic along x, link lengths as fixed offsets."""
    twin = pinocchio.Model()
    base = np.array([*hand.base_mm[finger], 0.0])
    placement = pinocchio.SE3(pinocchio.utils.rotate("z", float(hand.base_yaw_rad[finger])), base)
    parent = 0
    own = hand.joints_of(finger)
    for k in range(own.start, own.stop):
        joint = pinocchio.JointModelPX() if hand.is_slide[k] else pinocchio.JointModelRZ()
        parent = twin.addJoint(parent, joint, placement, f"joint{k}")
        length = 0.0 if hand.is_slide[k] else float(hand.link_mm[k])
        placement = pinocchio.SE3(np.eye(3), np.array([length, 0.0, 0.0]))
    frame = twin.addFrame(pinocchio.Frame("tip", parent, 0, placement, pinocchio.FrameType.OP_FRAME))
    return twin, frame


@pytest.mark.parametrize("name", load.shipped("hands"))
def test_tips_and_jacobians_agree(name: str) -> None:
    hand = HandModel(load.load_hand(name))
    rng = np.random.default_rng(7)
    for _ in range(25):
        joints = rng.uniform(hand.low, hand.high)
        for finger in range(hand.n_fingers):
            twin, frame = finger_in_pinocchio(hand, finger)
            data = twin.createData()
            own = joints[hand.joints_of(finger)]
            pinocchio.computeJointJacobians(twin, data, own)
            pinocchio.updateFramePlacements(twin, data)
            tip = centre_lines(hand, joints)[finger, -1]
            assert np.allclose(tip, data.oMf[frame].translation[:2], atol=1e-9)
            theirs = pinocchio.getFrameJacobian(twin, data, frame, pinocchio.ReferenceFrame.LOCAL_WORLD_ALIGNED)[:2]
            assert np.allclose(finger_jacobian(hand, finger, joints, tip), theirs, atol=1e-9)
            assert math.isclose(float(data.oMf[frame].translation[2]), 0.0, abs_tol=1e-12)
