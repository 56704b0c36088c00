"""Propagation of uncertainty to functions of correlated quantities (JCGM 100:2008, 5.2 and H.2)."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from benchfit.cycle.arrays import Array


def jacobian(of: Callable[[Array], Array], x: Array, covariance: Array) -> Array:
    """d of / d x, shape (m, n), by central differences over a small part of each one's standard uncertainty.

    That uncertainty is the scale on which the function has to be straight for the propagation to hold.
    """
    columns = []
    for i in range(x.size):
        step = 1e-3 * float(np.sqrt(covariance[i, i])) + 1e-9 * abs(float(x[i])) + 1e-300
        up, down = x.copy(), x.copy()
        up[i] += step
        down[i] -= step
        columns.append((np.atleast_1d(of(up)) - np.atleast_1d(of(down))) / (up[i] - down[i]))
    return np.stack(columns, axis=1)


def propagate(of: Callable[[Array], Array], x: Array, covariance: Array) -> tuple[Array, Array]:
    """Values (m,) and covariance (m, m) of functions of quantities x (n,) with covariance (n, n)."""
    j = jacobian(of, x, covariance)
    return np.atleast_1d(of(x)), j @ covariance @ j.T
