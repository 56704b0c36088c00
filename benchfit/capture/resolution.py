"""The smallest step between different values of a channel."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

_MOST = 200_000
# Values that differ by less than this share of the largest are one value, written with a float's noise.
_NOISE = 1e-6


def resolution(values: NDArray[np.float64]) -> float:
    """The smallest step between different values, in their unit; 0 where there is only one value.

    Exports carry noise of single-precision arithmetic in the last digits, and one cell may be damaged, so
    that the smallest difference of all need be no step of the converter: near-equal values count as one, and
    the step is the mean of those differences that are about as small as the smallest few. Of a long record a
    part at its begin, middle and end is looked at.
    """
    if values.size > _MOST:
        part = _MOST // 4
        starts = np.linspace(0, values.size - part, 4).astype(int)
        values = np.concatenate([values[start : start + part] for start in starts])
    levels = np.unique(values[np.isfinite(values)])
    if levels.size < 2:
        return 0.0
    steps = np.diff(levels)
    apart = steps > _NOISE * float(max(abs(levels[0]), abs(levels[-1])))
    if not apart.any():
        return float(np.max(steps))
    # Middle of each cluster of near-equal values.
    bounds = np.concatenate([[0], np.flatnonzero(apart) + 1, [levels.size]])
    middles = (
        np.array([levels[a:b].mean() for a, b in pairwise(bounds)])
        if levels.size < 20_000
        else levels
    )
    steps = np.diff(middles)
    steps = steps[steps > 0]
    few = 0 if steps.size < 8 else max(1, steps.size // 200)
    small = float(np.partition(steps, few)[few])
    return float(np.mean(steps[(steps <= 1.25 * small) & (steps >= 0.75 * small)]))
