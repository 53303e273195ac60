"""The blend against the optimality (KKT) conditions of its problem, and against scipy.optimize.minimize on the same problem.

min |A w − b|² subject to w ≥ 0, Σw = 1: w is optimal iff there is μ with gradient_i = μ where w_i > 0 and gradient_i ≥ μ elsewhere
(Boyd & Vandenberghe, Convex Optimization, 5.5.3; stated from memory).
"""

import numpy as np
import pytest
from scipy.optimize import minimize

from control.servoing.blend import blend_weights


@pytest.mark.parametrize("seed", range(40))
def test_weights_satisfy_kkt(seed: int) -> None:
    rng = np.random.default_rng(seed)
    primitives, scale = rng.normal(size=(16, 6)), rng.uniform(0.05, 0.2, size=6)
    wanted = rng.dirichlet(np.ones(16)) @ primitives + 0.3 * rng.normal(size=6)
    weights = blend_weights(primitives, wanted, scale)
    assert weights.min() >= 0.0
    assert weights.sum() == pytest.approx(1.0, abs=1e-9)
    gradient = (primitives / scale) @ ((weights @ primitives - wanted) / scale)
    used = weights > 1e-6
    multiplier = float(gradient[used].mean())
    slack = 1e-3 * (1.0 + np.abs(gradient).max())
    assert np.abs(gradient[used] - multiplier).max() < slack
    assert (gradient[~used] > multiplier - slack).all()


@pytest.mark.parametrize("seed", range(8))
def test_no_better_weights_are_found_by_a_general_solver(seed: int) -> None:
    rng = np.random.default_rng(100 + seed)
    primitives, scale = rng.normal(size=(16, 6)), np.ones(6)
    wanted = rng.normal(size=6)

    def cost(weights: np.ndarray) -> float:
        return float((((weights @ primitives - wanted) / scale) ** 2).sum())

    whole = {"type": "eq", "fun": lambda weights: weights.sum() - 1.0}
    theirs = minimize(cost, np.full(16, 1 / 16), bounds=[(0, 1)] * 16, constraints=[whole], method="SLSQP", options={"maxiter": 500})
    assert cost(blend_weights(primitives, wanted, scale)) <= theirs.fun + 1e-5


def test_a_point_inside_is_hit_exactly() -> None:
    rng = np.random.default_rng(5)
    primitives = rng.normal(size=(16, 6))
    wanted = rng.dirichlet(np.ones(16)) @ primitives
    assert np.allclose(blend_weights(primitives, wanted, np.ones(6)) @ primitives, wanted, atol=1e-6)
