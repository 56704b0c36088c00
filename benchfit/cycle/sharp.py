"""Edges that fall between two samples: the share of the period that all of their bounds together leave.

Each edge lies somewhere in its own sample interval. If the oscillator is steady, the edges of one direction lie on a
line k·P + O, and all intervals together bound the two offsets and the period; within the bounds every value is
as likely as any other. Where the sampling runs in step with the cycle the bounds stay a whole sample wide, however
many cycles there are: an average that took the errors for independent would not know.
"""

from __future__ import annotations

import numpy as np

from benchfit.cycle.arrays import Array, Index, Mask

_EDGES = 600
_GRID = 801


def steady_share(before: Index, rising: Mask, number: Index, period: float, u: float) -> tuple[float, float] | None:
    """High share of the period and its variance, from edges between samples ``before`` and ``before`` + 1.

    Parameters
    ----------
    before, rising, number : ndarray
        Last sample before each edge, its direction, the number of its cycle.
    period, u : float
        Period and its uncertainty (samples).

    Returns None where no steady cycle fits all the bounds: the oscillator's own jitter is more than they allow.
    """
    if before.size > _EDGES:
        # The outermost cycles bound the period, the rest the offsets.
        pick = np.unique(np.linspace(0, before.size - 1, _EDGES).astype(int))
        before, rising, number = before[pick], rising[pick], number[pick]
    cycles = max(int(number[-1] - number[0]), 1)
    reach = max(6.0 * u, 1.5 / cycles)
    periods = period + np.linspace(-reach, reach, _GRID)
    middle, width = {}, {}
    for kind in (True, False):
        mine = rising == kind
        if not mine.any():
            return None
        offsets = before[mine][:, None] - (number[mine] - number[0])[:, None] * periods
        low, high = offsets.max(axis=0), offsets.min(axis=0) + 1.0
        middle[kind], width[kind] = 0.5 * (low + high), np.maximum(high - low, 0.0)
    weight: Array = width[True] * width[False]
    total = float(weight.sum())
    if total == 0.0:
        return None
    p = weight / total
    share = np.mod((middle[False] - middle[True]) / periods, 1.0)
    inner = (width[True] ** 2 + width[False] ** 2) / 12.0 / periods**2
    mean = float(p @ share)
    return mean, float(p @ (inner + (share - mean) ** 2))
