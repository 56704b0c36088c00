"""Samples of many phases, averaged into few bins with their exact moments."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchfit.cycle.trace import Trace

Array = NDArray[np.float64]
Index = NDArray[np.int64]

_POINTS = 400_000


@dataclass(frozen=True, eq=False)
class Bins:
    """Means over runs of neighbouring samples.

    Attributes
    ----------
    t : ndarray
        Mean time from the middle of the cycle's phase (s).
    v : ndarray
        Mean voltage (V).
    n : ndarray
        Samples in the bin.
    spread : ndarray
        Variance of the samples' times within the bin (s²).
    cycle : ndarray of int
        Which phase, ascending from 0.
    """

    t: Array
    v: Array
    n: Array
    spread: Array
    cycle: Index


def bins_per_phase(phases: int) -> int:
    """Bins for each of so many phases: 200 for few, never under 40."""
    return int(np.clip(_POINTS // max(phases, 1), 40, 200))


def gather(trace: Trace, first: Index, stop: Index, middle: Array, bins: int) -> Bins:
    """Samples first[k] to stop[k] − 1 of every phase k, averaged into at most ``bins`` equal runs.

    Bins with an unusable sample are dropped. ``middle`` is the index, fractions allowed, from which a
    phase's time is counted. No phase may be empty, and they must be in order without overlap.
    """
    length = stop - first
    count = np.minimum(length, bins)
    cycle = np.repeat(np.arange(first.size), count)
    within = np.arange(cycle.size) - np.repeat(np.cumsum(count) - count, count)
    begin = first[cycle] + within * length[cycle] // count[cycle]
    end = first[cycle] + (within + 1) * length[cycle] // count[cycle]
    n = end - begin
    v = _sums(trace.values, begin, end) / n
    t = ((begin + end - 1) / 2.0 - middle[cycle]) * trace.interval
    spread = (n * n - 1.0) / 12.0 * trace.interval**2
    result = Bins(t, v, n.astype(float), spread, cycle)
    if trace.valid is not None:
        result = _keep(result, _sums(trace.valid.astype(np.int32), begin, end) == n)
    return result


def _sums(values: NDArray[np.generic], begin: Index, end: Index) -> Array:
    """Sums over [begin, end) of runs in order without overlap."""
    if np.all(end - begin == 1):
        return np.asarray(values[begin], dtype=float)
    bounds = np.stack([begin, end], axis=1).ravel()
    # reduceat cannot be given an index at the very end; it sums up to there by itself.
    if bounds[-1] == values.size:
        bounds = bounds[:-1]
    return np.asarray(np.add.reduceat(values, bounds)[::2], dtype=float)


def _keep(bins: Bins, keep: NDArray[np.bool_]) -> Bins:
    return Bins(bins.t[keep], bins.v[keep], bins.n[keep], bins.spread[keep], bins.cycle[keep])
