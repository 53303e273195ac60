"""The carrying law against the known stability limits of a loop with delay.

Sources: S. A. Levin and R. M. May, "A note on difference-delay equations", Theor. Popul. Biol. 9 (1976): x[n+1] = x[n] − K x[n−d] is
stable iff K < 2 cos(dπ/(2d+1)) (stated from memory). arXiv 1404.4763: x' = −k x(t−τ) is stable iff kτ < π/2 and does not overshoot iff
kτ ≤ 1/e. Chaumette and Hutchinson, "Visual Servo Control, Part I", IEEE RAM 2006: without delay the error decays as e' = −λe (from memory).

A part that follows the ring d frames late, with a law that does not know of the delay, makes the learnt offset obey exactly Levin and
May's equation with K = 1 − exp(−elapsed / LEARN_S) (derived: offset[n+1] − offset[n] = K (seen − offset) = −K offset[n−d]). With the
delay in its model the law has no limit of that kind: the error decays at its own rate whatever the delay.
"""

import math

import numpy as np
import pytest

from control.servoing.carry import LEARN_S, SERVO_LAG_S, Carry

FRAME_US = 20_000


def offsets(gain: float, delay: int, n: int, is_modelled: bool) -> np.ndarray:
    """x offset learnt over n frames, for a part that truly has offset 0 and starts from an offset of 1 mm."""
    elapsed_s = -LEARN_S * math.log(1.0 - gain)
    part, ring = np.zeros(3), np.array([-1.0, 0.0, 0.0])
    lag_us = round(SERVO_LAG_S * 1e6)
    carry = Carry(0, ring, np.array([1.0, 0.0, 0.0]), np.zeros(3), ((0, ring),))
    rings, seen = [ring] * (delay + 1), []
    for frame in range(n):
        now_us = 10_000_000 + frame * FRAME_US
        part[:2] = rings[-1 - delay][:2]
        # `captured_at_us` decides which ring the law believes the part has followed.
        believed_us = now_us + lag_us - (delay * FRAME_US if is_modelled else 0)
        carry = carry.steer(carry.ring, now_us).learn(part, believed_us, elapsed_s)
        carry = carry.steer(carry.ring_for(np.array([0.0, 0.0, np.nan])), now_us + FRAME_US)
        rings.append(carry.ring)
        seen.append(carry.offset[0])
    return np.array(seen)


@pytest.mark.parametrize("delay", [2, 3, 4, 5, 6])
def test_unmodelled_delay_is_stable_up_to_levin_and_mays_gain(delay: int) -> None:
    limit = 2.0 * math.cos(delay * math.pi / (2 * delay + 1))
    below, above = (np.abs(offsets(limit * factor, delay, 900, is_modelled=False)) for factor in (0.95, 1.05))
    assert below[-50:].max() < 0.05 * below[:50].max()
    # The clip on the offset keeps even an unstable loop bounded; it must swing at full size instead of dying out.
    assert above[-50:].max() > above[:50].max()


@pytest.mark.parametrize("gain", [0.05, 0.2, 0.5])
def test_error_decays_exponentially_without_delay(gain: float) -> None:
    seen = offsets(gain, 0, 40, is_modelled=True)
    assert np.allclose(seen, (1.0 - gain) ** np.arange(1, 41), atol=1e-9)


@pytest.mark.parametrize("delay", [2, 5, 9])
def test_modelled_delay_does_not_destabilise_any_gain(delay: int) -> None:
    seen = offsets(0.9, delay, 200, is_modelled=True)
    assert np.abs(seen[-20:]).max() < 1e-6


def test_shipped_gain_does_not_overshoot_for_an_unmodelled_delay_up_to_its_limit() -> None:
    frame_s = FRAME_US * 1e-6
    delay = math.floor(LEARN_S / math.e / frame_s)  # k·τ ≤ 1/e with k = 1 / LEARN_S
    gain = 1.0 - math.exp(-frame_s / LEARN_S)
    assert offsets(gain, delay, 300, is_modelled=False).min() > -1e-3
