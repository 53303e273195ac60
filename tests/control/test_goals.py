"""Goals outside what makes sense are refused by name, value and what is allowed."""

import math

import pytest

from control.servoing.goals import Goal, Kind
from hw_profiles.errors import CommandError
from hw_profiles.geometry import Pose2


@pytest.mark.parametrize(
    ("key", "value", "words"),
    [
        ("tolerance_mm", -1.0, "tolerance_mm -1: allowed 0.01 … 50"),
        ("tolerance_mm", math.nan, "tolerance_mm nan"),
        ("hold_s", -0.1, "hold_s -0.1"),
        ("timeout_s", math.inf, "timeout_s inf"),
        ("pose", Pose2(math.nan, 0.0, 0.0), "x_mm nan"),
        ("pose", Pose2(0.0, 5000.0, 0.0), "y_mm 5000"),
    ],
)
def test_bad_goal_is_refused(key: str, value: object, words: str) -> None:
    fields = {"id": "g", "kind": Kind.POSE, "pose": Pose2(0.0, 0.0, 0.0)} | {key: value}
    with pytest.raises(CommandError) as caught:
        Goal(**fields)
    assert words in str(caught.value)
