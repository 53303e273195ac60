"""Joint values and pulse widths: there and back, clamped to limits, reversed channels."""

import numpy as np
import pytest

from control.model.kinematics import HandModel
from control.wire.pulses import PulseMap
from hw_profiles import load


@pytest.mark.parametrize("name", load.shipped("rigs"))
def test_there_and_back_within_half_a_pulse_step(name: str) -> None:
    rig = load.load_rig(name)
    hand, pulses = HandModel(rig.hand), PulseMap.of(rig)
    rng = np.random.default_rng(3)
    for _ in range(50):
        joints = rng.uniform(hand.low, hand.high)
        back = pulses.joints(pulses.pulses_us(joints))
        assert np.all(np.abs(back - joints) <= 0.5 * pulses.step_us / np.abs(pulses.us_per_joint) + 1e-12)


@pytest.mark.parametrize("name", load.shipped("rigs"))
def test_pulse_is_clamped_to_profile_limits(name: str) -> None:
    rig = load.load_rig(name)
    hand, pulses = HandModel(rig.hand), PulseMap.of(rig)
    for wild in (hand.high + 100.0, hand.low - 100.0):
        clamped = pulses.joints(pulses.pulses_us(wild))
        assert np.all(clamped <= hand.high + 1e-9)
        assert np.all(clamped >= hand.low - 1e-9)


def test_reversed_wire_mirrors_the_pulse() -> None:
    rig = load.load_rig("trefoil")
    wires = (rig.wiring[0].model_copy(update={"reversed": True}), *rig.wiring[1:])
    mirrored = PulseMap.of(rig.model_copy(update={"wiring": wires}))
    straight = PulseMap.of(rig)
    joints = HandModel(rig.hand).home + 0.2
    assert mirrored.pulses_us(joints)[0] - 1500.0 == pytest.approx(1500.0 - straight.pulses_us(joints)[0])
