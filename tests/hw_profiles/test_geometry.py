"""SE(2) is a group; the polygon functions agree with closed forms."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from hw_profiles import geometry
from hw_profiles.geometry import IDENTITY, Pose2

LENGTH = st.floats(-500.0, 500.0)
POSES = st.builds(Pose2, LENGTH, LENGTH, st.floats(-3.1, 3.1))


def same(a: Pose2, b: Pose2) -> bool:
    turn = abs(geometry.wrap_angle(a.yaw_rad - b.yaw_rad))
    return turn < 1e-9 and bool(np.allclose(a.xy_mm, b.xy_mm, atol=1e-9 * 1e3))


@given(POSES, POSES, POSES)
def test_composition_is_associative(a: Pose2, b: Pose2, c: Pose2) -> None:
    assert same((a @ b) @ c, a @ (b @ c))


@given(POSES)
def test_inverse_undoes(a: Pose2) -> None:
    assert same(a @ a.inverse(), IDENTITY)
    assert same(a.inverse() @ a, IDENTITY)


@given(POSES, POSES)
def test_composition_acts_like_apply_twice(a: Pose2, b: Pose2) -> None:
    point = np.array([[3.0, -7.0], [11.0, 5.0]])
    assert np.allclose((a @ b).apply(point), a.apply(b.apply(point)))


def test_gyration_of_a_square_is_its_handbook_value() -> None:
    square = [[-1, -1], [1, -1], [1, 1], [-1, 1]]
    assert geometry.gyration_radius_sq(square) == pytest.approx(4.0 / 6.0)  # a²/6 for side a (mechanics handbooks)


def test_inscribed_radius_of_triangle_is_area_over_half_perimeter() -> None:
    triangle = [[0.0, 0.0], [4.0, 0.0], [0.0, 3.0]]
    assert geometry.inscribed_radius(triangle) == pytest.approx(1.0, abs=0.01)


def test_hull_drops_the_notch() -> None:
    notched = [[0, 0], [4, 0], [2, 1], [4, 4], [0, 4]]
    assert len(geometry.convex_hull(notched)) == 4
    assert not geometry.is_convex(notched)
    assert geometry.is_convex(geometry.convex_hull(notched))


def test_crossing_outline_is_not_simple() -> None:
    assert not geometry.is_simple([[0, 0], [2, 2], [2, 0], [0, 2]])
    assert geometry.is_simple([[0, 0], [2, 0], [2, 2], [0, 2]])


@given(st.floats(-50.0, 50.0))
def test_wrap_keeps_the_direction(angle: float) -> None:
    wrapped = geometry.wrap_angle(angle)
    assert -math.pi < wrapped <= math.pi
    assert math.isclose(math.cos(wrapped), math.cos(angle), abs_tol=1e-9)
