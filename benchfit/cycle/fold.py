"""Samples of many phases, averaged into few bins with their exact moments."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from benchfit.cycle.arrays import Array, Index, Mask
from benchfit.cycle.phase import ExponentialFit, PhaseModel, fit_exponentials, fit_levels
from benchfit.cycle.trace import Trace

POINTS = 40_000
PART = 20_000
_CHUNK = 400_000
_FOLDED = 400


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


def fold_phases(
    trace: Trace, first: Index, stop: Index, middle: Array, bins: int, model: PhaseModel
) -> tuple[ExponentialFit, Index]:
    """Fit very many phases: each one's level with ``model`` held, then the shared part from all of them folded.

    A phase's own level enters linearly (its departure from the common level decays as the model says), so the
    fold carries no bias of the noise's square; what the shared part moves by is then taken to every level.
    """
    parts = _chunks(np.minimum(stop - first, bins))
    half = 0.5 * float((stop - first).max()) * trace.interval
    sums = np.zeros((5, _FOLDED))
    levels, information, coupling, seen = [], [], [], []
    rss = points = 0.0
    for part in parts:
        b = gather(trace, first[part], stop[part], middle[part], bins)
        here, cycle = np.unique(b.cycle, return_inverse=True)
        own, see, joint, residual = fit_levels(model, b.t, b.v, cycle, b.n, b.spread)
        levels.append(own)
        information.append(see)
        coupling.append(joint)
        seen.append(here + part.start)
        rss += float(np.sum(b.n * residual**2))
        points += b.t.size
        place = np.clip(((b.t / half + 1.0) * (_FOLDED / 2)).astype(np.int64), 0, _FOLDED - 1)
        for row, x in enumerate((b.n, b.n * b.t, b.n * (b.t**2 + b.spread), b.n * residual, b.n * b.n)):
            sums[row] += np.bincount(place, x, _FOLDED)
    return _from_fold(sums, model, rss, points, levels, information, coupling), np.concatenate(seen)


def _chunks(points: Index) -> list[slice]:
    total = np.cumsum(points)
    cuts = np.searchsorted(total, np.arange(_CHUNK, int(total[-1]), _CHUNK))
    edges = np.unique(np.concatenate([[0], cuts, [points.size]]))
    return [slice(int(a), int(b)) for a, b in pairwise(edges)]


def _from_fold(
    sums: Array,
    model: PhaseModel,
    rss: float,
    points: float,
    levels: list[Array],
    information: list[Array],
    coupling: list[Array],
) -> ExponentialFit:
    held = sums[0] > 0
    n, t = sums[0][held], sums[1][held] / sums[0][held]
    spread = np.maximum(sums[2][held] / n - t * t, 0.0)
    own, see, joint = np.concatenate(levels), np.concatenate(information), np.concatenate(coupling)
    common = float(np.average(own, weights=see))
    v = model.value(t, np.array(common)) + sums[3][held] / n
    # The curve's mean over a bin, not its value at the bin's mean time, is what the residual was taken from.
    curve = model.value(t, np.array(common))
    v = v + 0.5 * spread * model.curvature**2 * (curve - model.asymptote if model.curvature else 0.0 * curve)
    fit = fit_exponentials(t, v, None, n, spread, curvature=model.curvature)
    moved = _difference(fit.model, model)
    return ExponentialFit(
        fit.model, own + joint @ moved, see, fit.shared, joint, rss, int(points) - own.size - 2
    )


def _difference(new: PhaseModel, old: PhaseModel) -> Array:
    """(slope, curvature) of ``new`` less those of ``old``, both about the reference of ``new``."""
    slope = old.slope - old.curvature * (new.reference - old.reference)
    return np.array([new.slope - slope, new.curvature - old.curvature])
