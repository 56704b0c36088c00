"""Many records → few block means with known weights, so that the drift analysis costs the same for 10²
and 10⁶."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

WHOLE = 320
"""Up to so many records each is a block of its own."""
_EVEN = 256
_EARLY = 48
_OUTLIER = 6.0
_ENOUGH = 20_000


@dataclass(frozen=True, eq=False)
class Blocks:
    """Block means of one quantity.

    Attributes
    ----------
    time : ndarray, shape (n,)
        Mean time of each block's records (s from the run's start).
    width : ndarray, shape (n,)
        How long each block is (s).
    count : ndarray, shape (n,)
        Records in each block.
    mean : ndarray, shape (n,)
    scatter : float
        Scatter of single records within blocks or between neighbours; 0 where they are all alike.
    left_out : int
        Records far off their neighbours (more than 6 robust standard deviations), left out of the means.
    place : ndarray of int, shape (n,)
        Between which borders each block lies; blocks of two quantities at one place are of one time.
    """

    time: Array
    width: Array
    count: Array
    mean: Array
    scatter: float
    left_out: int
    place: NDArray[np.int64]

    def at(self, places: NDArray[np.int64]) -> Blocks:
        """The blocks at those places alone, which it must have."""
        i = np.searchsorted(self.place, places)
        time, width, count, mean = self.time[i], self.width[i], self.count[i], self.mean[i]
        return Blocks(time, width, count, mean, self.scatter, self.left_out, places)


def edges(time: Array) -> Array:
    """Block edges (s): even over the run, and finer at its start, where things settle fastest.

    ``time``: shape (n,), ascending from 0.
    """
    if time.size <= WHOLE:
        inner = 0.5 * (time[1:] + time[:-1])
        return np.concatenate([[-np.inf], inner, [np.inf]])
    span = float(time[-1])
    first = float(np.median(np.diff(time[:50])))
    even = np.linspace(0, span, _EVEN + 1)[1:-1]
    early = np.geomspace(2 * max(first, span / time.size, span * 1e-7), span / _EVEN, _EARLY)
    return np.concatenate([[-np.inf], np.unique(np.concatenate([early[:-1], even])), [np.inf]])


def block(time: Array, values: Array, borders: Array) -> Blocks:
    """Means of ``values`` (NaN where unknown) between ``borders``; empty blocks are left out."""
    known = np.isfinite(values)
    if not known.all():
        time, values = time[known], values[known]
    cut = np.searchsorted(time, borders[1:-1])
    starts = np.concatenate([[0], cut])
    ends = np.concatenate([cut, [time.size]])
    if time.size <= 2 * (borders.size - 1):
        keep = _near_neighbours(values)
    else:
        keep = _near_median(values, starts, ends)
    left_out = int(values.size - np.count_nonzero(keep))
    filled = np.flatnonzero(ends > starts)
    starts, ends = starts[filled], ends[filled]
    if not filled.size:
        none = np.empty(0)
        return Blocks(none, none, none, none, 0.0, 0, filled)
    kept = np.add.reduceat(keep.astype(float), starts) if left_out else (ends - starts).astype(float)
    total = np.add.reduceat(np.where(keep, values, 0.0) if left_out else values, starts)
    full = kept > 0.5
    # Weights and times are those of all records: a few stray ones more or less do not make another analysis.
    count = (ends - starts)[full].astype(float)
    when = np.add.reduceat(time, starts)[full] / count
    scatter = _scatter(values[keep] if left_out else values)
    width, mean = _widths(time, starts, ends)[full], total[full] / kept[full]
    return Blocks(when, width, count, mean, scatter, left_out, filled[full])


def _widths(time: Array, starts: NDArray[np.int64], ends: NDArray[np.int64]) -> Array:
    return np.asarray(time[ends - 1] - time[starts])


def _near_neighbours(values: Array, reach: int = 3) -> NDArray[np.bool_]:
    """Whether each value is near the median of itself and its neighbours; the window shrinks at both ends."""
    n = values.size
    if n < 2 * reach + 1:
        return np.ones(n, bool)
    window = np.lib.stride_tricks.sliding_window_view(values, 2 * reach + 1)
    away = np.zeros(n)
    away[reach : n - reach] = values[reach : n - reach] - np.median(window, axis=1)
    for i in range(1, reach):
        away[i] = values[i] - np.median(values[: 2 * i + 1])
        away[n - 1 - i] = values[n - 1 - i] - np.median(values[n - 1 - 2 * i :])
    scale = max(1.4826 * float(np.median(np.abs(away))), _scatter(values))
    return np.abs(away) <= _OUTLIER * scale if scale > 0 else np.ones(n, bool)


def _near_median(values: Array, starts: NDArray[np.int64], ends: NDArray[np.int64]) -> NDArray[np.bool_]:
    """Whether each value is near the median of its block."""
    keep = np.ones(values.size, bool)
    floor = _scatter(values)
    for a, b in zip(starts, ends, strict=True):
        if b - a < 5:
            continue
        away = np.abs(values[a:b] - _median(values[a:b]))
        scale = max(1.4826 * _median(away), floor)
        if scale > 0:
            keep[a:b] = away <= _OUTLIER * scale
    return keep


def _median(x: Array) -> float:
    """The upper median, without numpy's own checks: there are thousands of blocks."""
    middle = x.size // 2
    return float(np.partition(x, middle)[middle])


def _scatter(values: Array) -> float:
    """Scatter of single values from the median step between neighbours (0.954·σ for Gaussian noise)."""
    if values.size < 2:
        return 0.0
    some = 1 + values.size // _ENOUGH
    return _median(np.abs(values[1::some] - values[:-1:some])) / 0.954
