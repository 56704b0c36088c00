"""The long-run mean period from instants with white and accumulating timing noise.

Instants y_j = offset(kind) + k_j·T + w_j + B(t_j): white noise w (the record's own, known, and perhaps the
oscillator's) and a random walk B of phase whose variance grows by q a cycle. Both unknown variances are averaged
over, each with a prior flat in its logarithm and weighted with its restricted likelihood (D. A. Harville, J. Am.
Stat. Assoc. 72 (1977) 320), so that the interval for T carries what is not known about them: for a walk alone
that is Student's factor.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from benchfit.cycle.arrays import Array, Index
from benchfit.cycle.spectrum import differences

Evaluate = Callable[[Array, Array], tuple[Array, Array, Array]]

_DENSE = 48
_FEW = 8
_POINTS = 14

# Prior weight of an e-fold of a variance against that of its absence. A record of many cycles shows whether there
# is jitter, and where it shows none the interval must not be widened for it; few cycles cannot show it.
_SLAB = 0.1
_SLAB_FEW = 0.5
_SLAB_MEAN = 0.015


@dataclass(frozen=True, eq=False)
class PeriodFit:
    """Long-run mean period (s).

    ``u`` is its standard uncertainty: a 95 % interval's half-width over 1.96. ``weights`` (n,) is the linear form
    in the instants that gives the period; ``walk`` the random walk's variance per cycle (s²) and ``white`` the
    oscillator's own white variance (s²), posterior means; ``jitter`` the rms of single periods about their mean
    with its u (s).
    """

    period: float
    u: float
    weights: Array
    walk: float
    white: float
    jitter: tuple[float, float]


@dataclass(frozen=True, eq=False)
class _Posterior:
    """Over pairs of (walk, white): probability, period's mean and variance given the pair."""

    walk: Array
    white: Array
    p: Array
    mean: Array
    variance: Array


def fit_period(
    instants: Array,
    number: Index,
    kind: Index,
    variance: Array,
    common: Array | None = None,
) -> PeriodFit:
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
    common : ndarray, shape (n, n), optional
        Covariance (s²) that the instants share besides.
    """
    period = _rough(instants, number, kind)
    dense = instants.size <= _DENSE
    if dense:
        evaluate, weigh = _dense(instants, number, kind, variance, common, period)
    else:
        evaluate, weigh = _spectral(instants, number, kind, variance, period)
    scale = _scale(instants, number, kind, variance, period)
    cycles = int(number[-1] - number[0])
    found = _average(evaluate, scale, float(variance.mean()), cycles, 2 if dense else 6)
    p = found.p / found.p.sum()
    # The estimate itself need not be as cautious as its interval.
    slab = _SLAB_FEW if cycles < _FEW else _SLAB
    doubted = np.where(found.walk + found.white > 0, found.p * (_SLAB_MEAN / slab), found.p)
    mean = float(np.average(found.mean, weights=doubted))
    u = _u(found, mean, cycles)
    walk, white = float(p @ found.walk), float(p @ found.white)
    single = np.sqrt(found.walk + 2.0 * found.white)
    jitter = float(p @ single)
    spread = float(np.sqrt(max(p @ single**2 - jitter**2, 0.0)))
    return PeriodFit(period + mean, u, weigh(walk, white), walk, white, (jitter, spread))


def _rough(instants: Array, number: Index, kind: Index) -> float:
    values, counts = [], []
    for k in np.unique(kind):
        mine = np.flatnonzero(kind == k)
        if mine.size > 1:
            values.append((instants[mine[-1]] - instants[mine[0]]) / (number[mine[-1]] - number[mine[0]]))
            counts.append(mine.size)
    return float(np.average(values, weights=counts))


def _scale(instants: Array, number: Index, kind: Index, variance: Array, period: float) -> float:
    """Mean square of what single periods differ by from their mean (s²), never quite 0."""
    squares = [float(variance.mean()), (1e-12 * period) ** 2]
    for k in np.unique(kind):
        mine = kind == k
        steps = np.diff(instants[mine]) - period * np.diff(number[mine])
        if steps.size > 1:
            squares.append(float(steps.var(ddof=1)))
    return max(squares)


def _average(evaluate: Evaluate, scale: float, known: float, cycles: int, rounds: int) -> _Posterior:
    """Likelihood-weighted grid over both variances, narrowed to where the likelihood is."""
    low, high = np.log(max(1e-3 * known, 1e-7 * scale)), np.log(scale) + (7.0 if cycles < 12 else 3.0)
    axis_a = axis_b = np.linspace(low, high, _POINTS)
    slab = _SLAB_FEW if cycles < _FEW else _SLAB
    with_zero_a = with_zero_b = True
    for _ in range(rounds):
        a = np.concatenate([[0.0], np.exp(axis_a)]) if with_zero_a else np.exp(axis_a)
        b = np.concatenate([[0.0], np.exp(axis_b)]) if with_zero_b else np.exp(axis_b)
        prior_a = np.where(a > 0, slab * (axis_a[1] - axis_a[0]), 1.0)
        prior_b = np.where(b > 0, slab * (axis_b[1] - axis_b[0]), 1.0)
        if cycles < _FEW:
            walk = np.concatenate([a, np.zeros(b.size)])
            white = np.concatenate([np.zeros(a.size), b])
            prior = np.concatenate([prior_a, prior_b])
        else:
            walk, white = (x.ravel() for x in np.meshgrid(a, b, indexing="ij"))
            prior = np.outer(prior_a, prior_b).ravel()
        mean, variance, log = evaluate(walk, white)
        p = np.exp(log - log.max()) * prior
        if cycles < _FEW:
            break
        grid = p.reshape(a.size, b.size) / p.sum()
        narrow_a, zero_a = _narrow(axis_a, grid.sum(axis=1), with_zero_a)
        narrow_b, zero_b = _narrow(axis_b, grid.sum(axis=0), with_zero_b)
        if narrow_a is axis_a and narrow_b is axis_b:
            break
        axis_a, axis_b, with_zero_a, with_zero_b = narrow_a, narrow_b, zero_a, zero_b
    return _Posterior(walk, white, p, mean, variance)


def _narrow(axis: Array, p: Array, with_zero: bool) -> tuple[Array, bool]:
    """A finer axis where all but a millionth of the probability lies in a few cells of the old one."""
    inner = p[1:] if with_zero else p
    keep = np.flatnonzero(inner > 1e-4)
    if keep.size == 0 or keep[-1] - keep[0] > 6:
        return axis, with_zero
    step = axis[1] - axis[0]
    still_zero = with_zero and p[0] > 1e-4
    if still_zero and keep[0] == 0:
        return axis, with_zero
    finer = np.linspace(axis[keep[0]] - step, axis[keep[-1]] + step, axis.size)
    return (finer, still_zero) if finer[1] - finer[0] < 0.9 * step else (axis, with_zero)


def _u(found: _Posterior, mean: float, cycles: int) -> float:
    """Half-width of the 95 % interval over 1.96; of few cycles that of the worse of the two noise models."""
    groups = [np.ones(found.p.size, dtype=bool)]
    if cycles < _FEW:
        groups = [found.white == 0.0, found.walk == 0.0]
    widths = []
    for g in groups:
        p = found.p[g] / max(found.p[g].sum(), 1e-300)
        if found.p[g].sum() > 0:
            widths.append(half_width(p, found.mean[g] - mean, np.sqrt(found.variance[g])))
    return max(widths) / 1.959964


def half_width(p: Array, centre: Array, sd: Array) -> float:
    """Half-width about 0 that holds 95 % of a mixture of normal distributions."""
    from scipy.special import ndtr

    sd = np.maximum(sd, 1e-300)
    low, high = 0.0, float(np.max(np.abs(centre) + 6.0 * sd))
    for _ in range(50):
        mid = 0.5 * (low + high)
        inside = p @ (ndtr((mid - centre) / sd) - ndtr((-mid - centre) / sd))
        low, high = (mid, high) if inside < 0.95 else (low, mid)
    return 0.5 * (low + high)


def _dense(
    instants: Array, number: Index, kind: Index, variance: Array, common: Array | None, period: float
) -> tuple[Evaluate, Callable[[float, float], Array]]:
    """Generalised least squares with the full covariance, for few instants."""
    kinds = np.unique(kind)
    offset = number - number.mean()
    design = np.concatenate([offset[:, None], kind[:, None] == kinds[None, :]], axis=1).astype(float)
    y = instants - instants[0] - (number - number[0]) * period
    elapsed = np.minimum(instants[:, None], instants[None, :]) - instants[0]
    base = np.diag(variance) + (common if common is not None else 0.0)
    base = base + np.eye(y.size) * (1e-9 * variance.mean() + (1e-13 * period) ** 2)

    def covariances(walk: Array, white: Array) -> Array:
        more = white[:, None, None] * np.eye(y.size) + walk[:, None, None] * elapsed / period
        return np.asarray(base + more)

    def evaluate(walk: Array, white: Array) -> tuple[Array, Array, Array]:
        chol = np.linalg.cholesky(covariances(walk, white))
        a = np.linalg.solve(chol, np.broadcast_to(design, (walk.size, *design.shape)))
        b = np.linalg.solve(chol, np.broadcast_to(y[:, None], (walk.size, y.size, 1)))
        normal = a.transpose(0, 2, 1) @ a
        inverse = np.linalg.inv(normal)
        x = inverse @ (a.transpose(0, 2, 1) @ b)
        rest = ((b - a @ x) ** 2).sum(axis=(1, 2))
        log = (
            -np.log(np.diagonal(chol, axis1=1, axis2=2)).sum(axis=1)
            - 0.5 * np.linalg.slogdet(normal)[1]
            - 0.5 * rest
        )
        return x[:, 0, 0], inverse[:, 0, 0], log

    def weigh(walk: float, white: float) -> Array:
        solved = np.linalg.solve(covariances(np.array([walk]), np.array([white]))[0], design)
        return np.asarray(np.linalg.solve(design.T @ solved, solved.T)[0])

    return evaluate, weigh


def _spectral(
    instants: Array, number: Index, kind: Index, variance: Array, period: float
) -> tuple[Evaluate, Callable[[float, float], Array]]:
    """The same by the sine spectrum of one series of instants per cycle, for many instants."""
    owner, share, total, same = _per_cycle(number, kind, variance)
    apart = _apart(instants, number, kind, period)
    cycle = np.unique(owner)
    y = np.bincount(owner, share * (instants - number * period))[cycle]
    y = y - y[0]
    steps = np.diff(y)
    steps = np.where(np.diff(cycle) > 1, 0.0, steps)
    found = differences(steps, total, same, apart * (1.0 - same) / 2.0)
    weights_of = found.weights

    def evaluate(walk: Array, white: Array) -> tuple[Array, Array, Array]:
        return found.evaluate(walk, white)

    def weigh(walk: float, white: float) -> Array:
        per_step = weights_of(walk, white)
        per_cycle = np.concatenate([[0.0], per_step]) - np.concatenate([per_step, [0.0]])
        lookup = np.zeros(int(cycle[-1]) + 1)
        lookup[cycle] = per_cycle
        return np.asarray(lookup[owner] * share)

    return evaluate, weigh


def _per_cycle(number: Index, kind: Index, variance: Array) -> tuple[Index, Array, float, float]:
    """Owner cycle of each instant, its weight in the cycle's mean, that mean's variance (s²), Σ weight².

    Cycles that lack one of the kinds (the ends) are left out: their weight is 0.
    """
    owner = number - number.min()
    kinds = np.unique(kind)
    mean = np.array([np.median(variance[kind == k]) for k in kinds])
    inverse = 1.0 / np.maximum(mean, 1e-300)
    weight = inverse / inverse.sum()
    share = weight[np.searchsorted(kinds, kind)]
    full = np.bincount(owner, minlength=int(owner.max()) + 1) == kinds.size
    share = np.where(full[owner], share, 0.0)
    keep = np.flatnonzero(full)
    first = int(keep[0]) if keep.size else 0
    owner = np.where(full[owner], owner, first)
    return owner, share, float(1.0 / inverse.sum()), float(np.sum(weight**2))


def _apart(instants: Array, number: Index, kind: Index, period: float) -> float:
    """How far apart the instants of a cycle lie, as a share of the period."""
    kinds = np.unique(kind)
    if kinds.size < 2:
        return 0.0
    first, second = (instants[kind == k] - period * number[kind == k] for k in kinds[:2])
    return float(min(abs(np.median(second) - np.median(first)) / period, 1.0))
