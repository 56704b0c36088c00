"""A cycle closes: from the lower turn along the rising phase to the upper, and back along the falling one.

The fitted phases, the turning voltages and the period are seven numbers of a cycle that has six: the two
phases' durations between the turning voltages add up to the period. Of a record the turns at whose ends
do not pair up exactly, this holds only to within the noise; the least change that makes it hold uses what each
of the seven says about the others (generalised least squares with one linear constraint).
"""

from __future__ import annotations

import numpy as np

from benchfit.cycle.arrays import Array
from benchfit.cycle.phase import PhaseModel
from benchfit.cycle.propagation import jacobian

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

    def gap(y: Array) -> Array:
        up, down = durations(y, rising, falling)
        return np.array([up + down - y[PERIOD]])

    for _ in range(2):
        row = jacobian(gap, x, covariance)[0]
        miss = float(gap(x)[0])
        spread = float(row @ covariance @ row)
        if not (np.isfinite(miss) and np.all(np.isfinite(row)) and spread > 0):
            return x, covariance
        gain = covariance @ row / spread
        moved = x - gain * miss
        if not np.isfinite(gap(moved)[0]):
            return x, covariance
        x = moved
    return x, covariance - np.outer(gain, gain) * spread


def constants_of(x: Array, rising: PhaseModel, falling: PhaseModel, covariance: Array) -> tuple[Array, Array]:
    """(period, charge_share, upper, lower, charge_curvature, discharge_curvature) and their Jacobian (6, 7)."""

    def six(y: Array) -> Array:
        up, down = durations(y, rising, falling)
        return np.array([y[PERIOD], up / (up + down), y[UPPER], y[LOWER], y[4], y[6]])

    return six(x), jacobian(six, x, covariance)
