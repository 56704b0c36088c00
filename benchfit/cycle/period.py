"""The long-run mean period from instants with white and accumulating timing noise.

Instants y_j = offset(kind) + k_j·T + w_j + B(y_j): white noise w (the record's own, known, and perhaps the
oscillator's) and a random walk B of phase whose variance grows by q per second. Both unknown variances are
averaged over, weighted with their restricted likelihood (D. A. Harville, J. Am. Stat. Assoc. 72 (1977) 320),
so that the interval for T carries what is not known about them: with few cycles that is Student's factor.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Index = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class PeriodFit:
    """Long-run mean period (s).

    ``u`` is its standard uncertainty: a 95 % interval's half-width over 1.96. ``weights`` (n,) is the linear form in
    the instants that gives the period; ``walk`` the random walk's variance per period (s²) and ``white`` the
    oscillator's own white variance (s²) at their most likely; ``known`` the u from the record's noise alone.
    """

    period: float
    u: float
    weights: Array
    walk: float
    white: float
    known: float


def fit_period(instants: Array, number: Index, kind: Index, variance: Array, period: float) -> PeriodFit:
    """Mean period of instants that repeat every cycle.

    Parameters
    ----------
    instants : ndarray, shape (n,)
        Times (s), ascending.
    number : ndarray of int, shape (n,)
        Cycle that an instant belongs to.
    kind : ndarray of int, shape (n,)
        Instants of one kind lie whole periods apart; each kind has an offset of its own.
    variance : ndarray, shape (n,)
        Variance of each instant from the record's noise (s²).
    period : float
        Rough period (s), for scale.
    """
    kinds = np.unique(kind)
    design = np.concatenate([number[:, None] - number.mean(), kind[:, None] == kinds[None, :]], axis=1).astype(float)
    origin = instants[0] + number * period
    y = instants - origin
    base = np.minimum(instants[:, None], instants[None, :]) - instants[0]
    scale = max(float(np.var(np.diff(y))) if y.size > 2 else 0.0, float(variance.mean()), 1e-300)
    ratios = np.concatenate([[0.0], np.logspace(-3, 1.5, 10)])
    results = []
    for a in ratios:
        for b in ratios:
            cov = np.diag(variance + b * scale) + a * scale * base / period
            results.append((a * scale, b * scale, *_gls(design, y, cov)))
    walk, white, estimate, var, loglike = (np.array([r[i] for r in results]) for i in range(5))
    best = int(np.argmax(loglike))
    p = np.exp(loglike - loglike[best])
    p /= p.sum()
    mean = float(np.sum(p * estimate))
    u = _half_width(p, estimate - mean, np.sqrt(var)) / 1.959964
    weights = _weights(design, np.diag(variance + white[best]) + walk[best] * base / period)
    return PeriodFit(
        period + mean, u, weights, float(walk[best]), float(white[best]), float(np.sqrt(np.sum(weights**2 * variance)))
    )


def _gls(design: Array, y: Array, cov: Array) -> tuple[float, float, float]:
    chol = np.linalg.cholesky(cov + np.eye(y.size) * 1e-12 * np.trace(cov) / y.size)
    a, b = np.linalg.solve(chol, design), np.linalg.solve(chol, y)
    normal = a.T @ a
    inverse = np.linalg.inv(normal)
    x = inverse @ (a.T @ b)
    rest = b - a @ x
    loglike = -np.sum(np.log(np.diag(chol))) - 0.5 * np.linalg.slogdet(normal)[1] - 0.5 * rest @ rest
    return float(x[0]), float(inverse[0, 0]), float(loglike)


def _weights(design: Array, cov: Array) -> Array:
    solved = np.linalg.solve(cov + np.eye(len(cov)) * 1e-12 * np.trace(cov) / len(cov), design)
    return np.asarray(np.linalg.solve(design.T @ solved, solved.T)[0])


def _half_width(p: Array, centre: Array, sd: Array) -> float:
    """Half-width about 0 that holds 95 % of a mixture of normal distributions."""
    low, high = 0.0, float(np.max(np.abs(centre) + 6.0 * sd)) or 1e-300
    for _ in range(60):
        mid = 0.5 * (low + high)
        inside = np.sum(p * (_cdf((mid - centre) / sd) - _cdf((-mid - centre) / sd)))
        low, high = (mid, high) if inside < 0.95 else (low, mid)
    return 0.5 * (low + high)


def _cdf(z: Array) -> Array:
    from math import erf

    return 0.5 * (1.0 + np.array([erf(x / np.sqrt(2.0)) for x in z]))
