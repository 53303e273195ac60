"""The pose filter's gain settles where the discrete Riccati equation says (scipy.linalg.solve_discrete_are)."""

import numpy as np
import pytest
from scipy.linalg import solve_discrete_are

from hw_profiles.geometry import Pose2
from vision import pose_filter


@pytest.mark.parametrize("period_us", [10_000, 20_000, 33_333])
@pytest.mark.parametrize("sd_mm", [0.002, 0.05])
def test_gain_settles_at_the_solution_of_the_riccati_equation(period_us: int, sd_mm: float) -> None:
    noise = np.diag([sd_mm**2, sd_mm**2, (sd_mm / 10) ** 2])
    belief = pose_filter.begin(0, Pose2(0.0, 0.0, 0.0), noise)
    for index in range(1, 200):
        ahead = pose_filter.predict(belief, index * period_us)
        belief = pose_filter.update(ahead, Pose2(0.0, 0.0, 0.0), noise)
    step, process = pose_filter.transition(period_us * 1e-6)
    sees = np.eye(3, 6)
    settled = solve_discrete_are(step.T, sees.T, process, noise)
    np.testing.assert_allclose(ahead.covariance, settled, rtol=1e-6, atol=1e-12)
    gain = settled @ sees.T @ np.linalg.inv(sees @ settled @ sees.T + noise)
    ours = pose_filter.update(ahead, Pose2(1.0, 0.0, 0.0), noise).mean - ahead.mean
    np.testing.assert_allclose(ours, gain[:, 0], rtol=1e-6, atol=1e-12)
