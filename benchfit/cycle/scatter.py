"""What cycles differ by beyond the record's noise, and what that does to their means."""

from __future__ import annotations

import numpy as np

from benchfit.cycle.arrays import Array
from benchfit.cycle.period import half_width

# As in the period's fit: prior weight of an e-fold of a variance against that of its absence.
_SLAB = 0.04
_SLAB_FEW = 0.25
_FEW = 8


def mean_scatter(values: Array, known: float) -> float:
    """Variance to add to that of a mean because its cycles scatter more than the noise (variance ``known``) says.

    The scatter's own variance is averaged over, with its restricted likelihood: Student's factor where the
    scatter is all there is, next to nothing where the noise explains it.
    """
    n = values.size
    if n < 2:
        return 0.0
    squares = float(np.sum((values - values.mean()) ** 2))
    top = max(squares / (n - 1), known)
    if top == 0.0:
        return 0.0
    low = np.log(max(1e-3 * known / n, 1e-6 * top))
    more = np.exp(np.linspace(low, np.log(top) + (8.0 if n < 12 else 3.0), 60))
    slab = (_SLAB_FEW if n < _FEW else _SLAB) * np.log(more[1] / more[0])
    extra = np.concatenate([[0.0], more])
    total = known + extra + 1e-12 * top
    log = -0.5 * (n - 1) * np.log(total) - 0.5 * squares / total
    p = np.exp(log - log.max()) * np.where(extra > 0, slab, 1.0)
    p /= p.sum()
    u = half_width(p, np.zeros(p.size), np.sqrt(total / n)) / 1.959964
    return max(u**2 - known / n, 0.0)


def correlation(samples: Array, noise: Array) -> Array:
    """Correlation matrix of what ``samples`` (n, m) scatter by beyond the covariance ``noise`` (m, m).

    Zero off the diagonal for quantities that scatter no more than the noise, or where there are too few.
    """
    n, m = samples.shape
    result = np.eye(m)
    if n < 8:
        return result
    excess = np.cov(samples, rowvar=False) - noise
    size = np.diag(excess)
    clear = size > 3.0 * np.sqrt(2.0 / n) * (np.diag(noise) + 1e-300)
    for i in range(m):
        for j in range(i):
            if clear[i] and clear[j]:
                result[i, j] = result[j, i] = np.clip(excess[i, j] / np.sqrt(size[i] * size[j]), -1.0, 1.0)
    values, vectors = np.linalg.eigh(result)
    if values[0] < 0:
        result = (vectors * np.maximum(values, 0.0)) @ vectors.T
        scale = np.sqrt(np.diag(result))
        result = result / np.outer(scale, scale)
    return np.asarray(result)


def student(freedom: float) -> float:
    """What 95 % intervals are wider by, over 1.96, when a variance has so many degrees of freedom."""
    if freedom > 300:
        return 1.0
    from scipy.special import stdtrit

    return float(stdtrit(max(freedom, 1.0), 0.975) / 1.959964)
