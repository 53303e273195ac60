"""The ring certificate: is the part caged by a closed ring of fingers, told in microseconds.

Walk once round the fingers in the order of their bases. From each finger to the next leads the shortest bridge between their surfaces; on
each finger the walk follows its centre line from where it arrives to where it leaves. A part that lies inside this closed curve can leave
only through a bridge, for the fingers are solid. A convex part passes a gate between two bodies iff the gate is at least as wide as its
minimum width ("Throwing a Sofa Through the Window", arXiv 2102.04262; in the plane); no part passes a gate narrower than the largest
circle inside it. So with every bridge shorter than that, the part is caged: its pose lies in a bounded component of free space
(Rodriguez, Mason, Ferry, "From caging to grasping", IJRR 2012). docs/model.md has the argument and its conditions.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from control.model.contact import finger_gap
from control.model.kinematics import HandArrays, HandModel, centre_lines_kernel
from hw_profiles.geometry import Array
from hw_profiles.part import Part


@dataclass(frozen=True, slots=True, eq=False)
class RingCertificate:
    """What the ring of fingers says about the part.

    is_caged : the certificate holds. False means "not shown", not "escapes".
    margin_mm : how much wider the widest gap could become; negative without a certificate, and at most 0 with the part outside.
    gaps_mm : (n_fingers,) from each finger to the next, in the order of their bases round the palm.
    """

    is_caged: bool
    margin_mm: float
    gaps_mm: Array


class Ring:
    """The certificate for one hand and one part, ready to be asked every tick (about 5 µs)."""

    def __init__(self, hand: HandModel, part: Part) -> None:
        self.hand = hand
        self.passes_mm = part.cage_gap_mm
        bearings = np.arctan2(hand.base_mm[:, 1], hand.base_mm[:, 0])
        self.order: NDArray[np.int64] = np.argsort(bearings, kind="stable")

    def certify(self, joints: Array, pose: Array) -> RingCertificate:
        """The certificate of a posture (n_joints,) about a part at `pose` (3,): mm, mm, rad."""
        hand = self.hand.arrays
        gaps = np.empty(self.hand.n_fingers)
        margin_mm = ring_margin(hand, centre_lines_kernel(hand, joints), self.order, self.passes_mm, pose, gaps)
        return RingCertificate(margin_mm > 0.0, margin_mm, gaps)


@njit(cache=True)
def ring_margin(hand: HandArrays, lines_mm: Array, order: NDArray[np.int64], passes_mm: float, pose: Array, gaps_mm: Array) -> float:
    """Kernel of `Ring.certify`: fills `gaps_mm` and returns the margin."""
    n = order.shape[0]
    arrives, leaves, spot = np.empty((n, 2)), np.empty((n, 2)), np.empty(4)
    for k in range(n):
        following = (k + 1) % n
        gaps_mm[k] = finger_gap(hand, lines_mm, order[k], order[following], spot)
        leaves[k, 0], leaves[k, 1] = spot[0], spot[1]
        arrives[following, 0], arrives[following, 1] = spot[2], spot[3]
    turned = 0.0
    previous = _on_line(lines_mm[order[n - 1]], leaves[n - 1])
    for k in range(n):
        line = lines_mm[order[k]]
        here = _on_line(line, arrives[k])
        turned += _seen_angle(previous, here, pose)
        previous = here
        link, last = int(arrives[k, 0]), int(leaves[k, 0])
        while link < last:
            link += 1
            turned += _seen_angle(previous, line[link], pose)
            previous = line[link]
        while link > last:
            turned += _seen_angle(previous, line[link], pose)
            previous = line[link]
            link -= 1
        here = _on_line(line, leaves[k])
        turned += _seen_angle(previous, here, pose)
        previous = here
    margin_mm = passes_mm - gaps_mm.max()
    is_around = abs(turned) > math.pi  # the curve winds once round the part's centre, or not at all
    return margin_mm if is_around else min(margin_mm, 0.0) - 1e-9


@njit(cache=True)
def _on_line(line_mm: Array, place: Array) -> Array:
    """Point at a link and a share along it."""
    link = int(place[0])
    return line_mm[link] + place[1] * (line_mm[link + 1] - line_mm[link])


@njit(cache=True)
def _seen_angle(a: Array, b: Array, eye: Array) -> float:
    """Signed angle under which the step from a to b is seen."""
    ax, ay, bx, by = a[0] - eye[0], a[1] - eye[1], b[0] - eye[0], b[1] - eye[1]
    return math.atan2(ax * by - ay * bx, ax * bx + ay * by)
