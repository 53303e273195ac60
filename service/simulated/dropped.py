"""Where a part comes to lie that somebody drops into the hand."""

from __future__ import annotations

import numpy as np

from control.servoing.controller import Controller
from hw_profiles.geometry import Pose2


def drawn_start(controller: Controller, rng: np.random.Generator) -> Pose2:
    """A pose inside the loose cage that no finger touches: as if somebody had dropped the part in."""
    bench, park = controller.library.bench, controller.library.park
    for spread_mm in np.linspace(8.0, 0.0, 200):
        x_mm, y_mm = rng.uniform(-spread_mm, spread_mm, size=2)
        pose = Pose2(float(x_mm), float(y_mm), float(rng.uniform(-np.pi, np.pi)))
        if bench.clearances.to_part(park, pose).min() > 0.5:
            return pose
    return Pose2(0.0, 0.0, 0.0)
