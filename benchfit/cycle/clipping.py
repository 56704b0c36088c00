"""Samples that ran into the end of the range."""

from __future__ import annotations

import numpy as np

from benchfit.cycle.arrays import Array

_CROWD = 3.0
_RUN = 3


def clipped_ends(values: Array) -> tuple[float | None, float | None]:
    """The lowest and the highest value where samples pile up at it, None where they do not.

    The last code before the end of the range holds all that lies beyond: far more samples than the codes next to
    it, in runs. A waveform that merely turns there spends no longer in its last code than in the one before, and
    one that rests at a level (a square output) is not judged by this.
    """
    low, high = float(values.min()), float(values.max())
    return _piled(values, low, 1.0), _piled(values, high, -1.0)


def _piled(values: Array, end: float, inward: float) -> float | None:
    at = np.flatnonzero(values == end)
    if at.size < 2 * _RUN or at.size > 0.6 * values.size:
        return None
    runs = int(np.sum(np.diff(at) > 1)) + 1
    if at.size < _RUN * runs and at.size / runs < _RUN:
        return None
    # Count the neighbours: as many as half of the pile, and see how far inward they reach.
    beyond = (values - end) * inward
    near = (
        np.partition(beyond[beyond > 0], min(at.size, int((beyond > 0).sum()) - 1))[: at.size]
        if (beyond > 0).any()
        else np.empty(0)
    )
    if near.size < at.size:
        return None
    step = float(near.min())
    first = int(np.sum(near <= 1.5 * step))
    return end if at.size > _CROWD * max(first, 1) else None
