"""Blending primitives: weights that come closest to wanted joint values."""

from __future__ import annotations

import numpy as np
from scipy.optimize import nnls

from hw_profiles.geometry import Array

SUM_WEIGHT = 1e3  # of the row that asks the weights to sum to 1, against joint rows of order 1


def blend_weights(primitives: Array, wanted: Array, scale: Array) -> Array:
    """Weights w ≥ 0, Σw = 1, that minimise |(Σ w_i primitive_i − wanted) / scale|².

    Parameters
    ----------
    primitives : (n_primitives, n_joints) joint values [rad or mm]; wanted : (n_joints,); scale : (n_joints,) one unit of each joint.

    Returns
    -------
    (n_primitives,) weights; at most n_joints + 1 of them differ from 0 in general.

    Notes
    -----
    Non-negative least squares (Lawson & Hanson 1974, ch. 23) with the sum as a heavily weighted row, then normalised.
    """
    offsets = ((primitives - wanted) / scale).T  # Σw = 1 makes Σ w (p − wanted) the error itself
    matrix = np.vstack([offsets, np.full(len(primitives), SUM_WEIGHT)])
    wanted_rows = np.zeros(len(matrix))
    wanted_rows[-1] = SUM_WEIGHT
    weights, _ = nnls(matrix, wanted_rows)
    return np.asarray(weights / weights.sum())
