"""Nodes of one capture joined: one period, one jitter, one covariance."""

from __future__ import annotations

import numpy as np

from benchfit.cycle.arrays import Array
from benchfit.cycle.observed import Observed


def join(parts: list[Observed]) -> tuple[tuple[str, ...], Array, Array]:
    """Names, values and covariance of several nodes' constants.

    Each node has a period of its own; the better known one stands for both. What a node's share of the period
    owes to the oscillator's own jitter, the other node shows just as well: that part is common to both.
    """
    if not parts:
        return (), np.empty(0), np.empty((0, 0))
    names, values, covariance = parts[0].names, parts[0].values, parts[0].covariance
    for part in parts[1:]:
        if "period" in names and "period" in part.names:
            values, covariance = _better_period(names, values, covariance, part)
        keep = [i for i, n in enumerate(part.names) if n not in names]
        size = len(names)
        names = names + tuple(part.names[i] for i in keep)
        values = np.concatenate([values, part.values[keep]])
        wider = np.zeros((len(names), len(names)))
        wider[:size, :size] = covariance
        wider[size:, size:] = part.covariance[np.ix_(keep, keep)]
        covariance = _common_jitter(names, wider, parts[0], part)
    return names, values, covariance


def _better_period(
    names: tuple[str, ...], values: Array, covariance: Array, other: Observed
) -> tuple[Array, Array]:
    i = names.index("period")
    here, there = covariance[i, i], other.u("period") ** 2
    if not there < 0.64 * here:
        return values, covariance
    values, covariance = values.copy(), covariance.copy()
    values[i] = other.value("period")
    ratio = there / here
    covariance[i, :] *= ratio
    covariance[:, i] *= ratio
    covariance[i, i] = there
    return values, covariance


def _common_jitter(names: tuple[str, ...], covariance: Array, a: Observed, b: Observed) -> Array:
    if not ("charge_share" in names and "high_share" in names):
        return covariance
    i, j = names.index("charge_share"), names.index("high_share")
    # A circuit may be high while it discharges: the sign is not known here, and shares that are far apart have none.
    common = float(np.sqrt(a.share_jitter * b.share_jitter))
    if common > 0:
        near = abs(a.value("charge_share") - b.value("high_share")) < 0.1
        covariance = covariance.copy()
        covariance[i, j] = covariance[j, i] = common if near else -common
    return covariance


# Corner frequency of a scope's a.c. coupling (Hz) and its standard uncertainty: common practice, 2 Hz to 10 Hz.
_CORNER, _CORNER_U = 5.0, 2.5


def without_droop(names: tuple[str, ...], values: Array, covariance: Array) -> tuple[Array, Array]:
    """Curvatures of an a.c.-coupled node as they are before the coupling, and their covariance.

    A high-pass of corner frequency f adds −2πf·v to dv/dt: every curvature is larger by 2πf, as if by a leak. The
    corner is known only as scopes usually have it, and that is what the curvatures are uncertain by, all together.
    """
    values, covariance = values.copy(), covariance.copy()
    mine = [i for i, n in enumerate(names) if n.endswith("_curvature")]
    values[mine] -= 2.0 * np.pi * _CORNER
    covariance[np.ix_(mine, mine)] += (2.0 * np.pi * _CORNER_U) ** 2
    return values, covariance
