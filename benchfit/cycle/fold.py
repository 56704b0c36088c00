"""Samples of many phases, averaged into few bins with their exact moments."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from benchfit.cycle.arrays import Array, Index, Mask
from benchfit.cycle.phase import ExponentialFit, PhaseModel, fit_levels
from benchfit.cycle.trace import Trace

POINTS = 40_000
PART = 20_000
_CHUNK = 400_000
_STEPS = 3


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
    return int(np.clip(400_000 // max(phases, 1), 40, 200))


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


def _keep(bins: Bins, keep: Mask) -> Bins:
    return Bins(bins.t[keep], bins.v[keep], bins.n[keep], bins.spread[keep], bins.cycle[keep])


def fit_many(
    trace: Trace, first: Index, stop: Index, middle: Array, bins: int, model: PhaseModel
) -> tuple[ExponentialFit, Index]:
    """Fit very many phases by Gauss-Newton steps from ``model``, their samples passed through in chunks.

    Each phase's own level is projected out of its samples as in ``fit_exponentials``; only the sums go on.
    """
    for _ in range(_STEPS):
        fit, seen, step = _pass(trace, first, stop, middle, bins, model)
        moved = float(step @ np.linalg.solve(fit.shared, step)) / max(fit.variance, 1e-300)
        model = fit.model
        if moved < 1.0:
            break
    return fit, seen


def _pass(
    trace: Trace, first: Index, stop: Index, middle: Array, bins: int, model: PhaseModel
) -> tuple[ExponentialFit, Index, Array]:
    levels, information, coupling, seen = [], [], [], []
    rss = points = 0.0
    normal, gradient = np.zeros((2, 2)), np.zeros(2)
    for part in chunks(np.minimum(stop - first, bins)):
        b = gather(trace, first[part], stop[part], middle[part], bins)
        here, cycle = np.unique(b.cycle, return_inverse=True)
        fitted = fit_levels(model, b.t, b.v, cycle, b.n, b.spread)
        levels.append(fitted.levels)
        information.append(fitted.information)
        coupling.append(fitted.coupling)
        seen.append(here + part.start)
        rss += float(np.sum(b.n * fitted.residual**2))
        points += b.t.size
        weighted = fitted.bare * b.n
        normal += weighted @ fitted.bare.T
        gradient += weighted @ fitted.residual
    shared = np.linalg.inv(normal)
    step = shared @ gradient
    own, see, joint = np.concatenate(levels), np.concatenate(information), np.concatenate(coupling)
    moved = PhaseModel(model.reference, model.slope + float(step[0]), model.curvature + float(step[1]))
    rss = max(rss - float(gradient @ step), 0.0)
    fit = ExponentialFit(moved, own + joint @ step, see, shared, joint, rss, int(points) - own.size - 2)
    return fit, np.concatenate(seen), step


def chunks(points: Index) -> list[slice]:
    """Slices of phases that hold a bounded number of points each."""
    total = np.cumsum(points)
    cuts = np.searchsorted(total, np.arange(_CHUNK, int(total[-1]), _CHUNK))
    edges = np.unique(np.concatenate([[0], cuts, [points.size]]))
    return [slice(int(a), int(b)) for a, b in pairwise(edges)]
