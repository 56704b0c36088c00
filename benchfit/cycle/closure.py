"""A cycle closes: from the lower turn along the rising phase to the upper, and back along the falling one.

The fitted phases, the turning voltages and the period are seven numbers of a cycle that has six: the two
phases' durations between the turning voltages add up to the period. Of a record the turns at whose ends
do not pair up exactly, this holds only to within the noise; the least change that makes it hold uses what each
of the seven says about the others (generalised least squares with one linear constraint).
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from benchfit.cycle.arrays import Array
from benchfit.cycle.phase import PhaseModel

# The order of the seven: period, upper, lower, then slope and curvature of the rising and of the falling phase.
PERIOD, UPPER, LOWER, RISE, FALL = 0, 1, 2, slice(3, 5), slice(5, 7)


def durations(x: Array, rising: PhaseModel, falling: PhaseModel) -> tuple[float, float]:
    """Times (s) of the two phases between the turning voltages; slopes are about the models' references."""
    up = PhaseModel(rising.reference, *x[RISE]).time_to(x[UPPER], np.array(x[LOWER]))
    down = PhaseModel(falling.reference, *x[FALL]).time_to(x[LOWER], np.array(x[UPPER]))
    return float(up), float(down)


def close_cycle(
    x: Array, covariance: Array, slack: float, rising: PhaseModel, falling: PhaseModel
) -> tuple[Array, Array]:
    """The seven and their covariance with the constraint taken in.

    ``slack`` (s²) is what the period is uncertain by in this besides, because the oscillator's own jitter makes
    the cycles at the record's ends differ from the mean ones.
    """
    covariance = covariance.copy()
    covariance[PERIOD, PERIOD] += slack

    def gap(y: Array) -> float:
        up, down = durations(y, rising, falling)
        return up + down - float(y[PERIOD])

    for _ in range(2):
        row = _gradient(gap, x, covariance)
        miss = gap(x)
        spread = float(row @ covariance @ row)
        if not (np.isfinite(miss) and np.all(np.isfinite(row)) and spread > 0):
            return x, covariance
        gain = covariance @ row / spread
        moved = x - gain * miss
        if not np.isfinite(gap(moved)):
            return x, covariance
        x = moved
    return x, covariance - np.outer(gain, gain) * spread


def constants_of(x: Array, rising: PhaseModel, falling: PhaseModel, covariance: Array) -> tuple[Array, Array]:
    """(period, charge_share, upper, lower, charge_curvature, discharge_curvature) and their Jacobian (6, 7)."""

    def share(y: Array) -> float:
        up, down = durations(y, rising, falling)
        return up / (up + down)

    values = np.array([x[PERIOD], share(x), x[UPPER], x[LOWER], x[4], x[6]])
    jacobian = np.zeros((6, 7))
    for row, column in ((0, 0), (2, 1), (3, 2), (4, 4), (5, 6)):
        jacobian[row, column] = 1.0
    jacobian[1] = _gradient(share, x, covariance)
    return values, jacobian


def _gradient(of: Callable[[Array], float], x: Array, covariance: Array) -> Array:
    """Central differences over a small part of each one's standard error, which is the scale that matters."""
    row = np.zeros(x.size)
    for i in range(x.size):
        step = 1e-3 * float(np.sqrt(covariance[i, i])) + 1e-9 * abs(float(x[i])) + 1e-300
        up, down = x.copy(), x.copy()
        up[i] += step
        down[i] -= step
        row[i] = (of(up) - of(down)) / (up[i] - down[i])
    return row
