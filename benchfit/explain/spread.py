"""A Gaussian as a few points: what a nonlinear function of the state makes of its spread."""

from __future__ import annotations

import numpy as np

from benchfit.explain.model import Array


def principal_points(mean: Array, covariance: Array) -> Array:
    """The mean, then the mean moved along each principal axis by its standard deviation: shape (1 + axes, n).

    For a function f, the sum of (f(point) − f(mean))² over the axes is the first-order variance of f (JCGM 100, 5.2).
    """
    values, vectors = np.linalg.eigh(0.5 * (covariance + covariance.T))
    axes = (vectors * np.sqrt(np.maximum(values, 0.0)))[:, values > 0]
    return np.vstack([mean, mean + axes.T])
