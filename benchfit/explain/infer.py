"""Gaussian inference on many hypotheses at once: relax to the best state, and weigh it.

Each row of a batch is one hypothesis (or one grid point of one): a prior mean and spread for every parameter,
and perhaps one parameter of its own that is free over a wide range. Gauss–Newton with an analytic prior and a
finite-difference Jacobian, all rows in one array; evidence by Laplace's method in the parameters that are
held by their tolerances (MacKay 2003, chapter 27), never in the free one.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from benchfit.explain.model import Array, Model

IDENTITY, PLUS, MINUS, INVERSE = 0, 1, 2, 3
_STEP = 1e-4
# How soon a tolerance ends beyond its limits, in its own standard deviations. Judgement.
BEYOND = 0.3
# A slope beyond this is a state at the edge of oscillation, no information.
_STEEP = 1e9


@dataclass(frozen=True, eq=False)
class Batch:
    """Rows of hypotheses.

    Attributes
    ----------
    center, spread : ndarray, shape (rows, n)
        Prior of every parameter in its coordinate; spread 0 holds it.
    own : ndarray of int, shape (rows, owns)
        Parameters that the row frees itself; −1: none.
    gauge : ndarray of int, shape (rows, owns)
        How an own parameter is measured: t itself, ±e^t, or e^(−t) (for parasitics, on a log scale).
    t, low, high : ndarray, shape (rows, owns)
        Its value and range in that gauge.
    moves : bool
        Own parameters are relaxed too (flat prior within the range); else they stay at ``t``.
    spare : ndarray, shape (n,), or None
        Where to begin, in prior standard deviations, for rows that do not oscillate at their prior means.
    """

    center: Array
    spread: Array
    own: NDArray[np.int64]
    gauge: NDArray[np.int64]
    t: Array
    low: Array
    high: Array
    moves: bool = True
    spare: Array | None = None

    def __len__(self) -> int:
        return int(self.center.shape[0])

    def take(self, rows: NDArray[np.int64]) -> Batch:
        """The same hypotheses, some rows of them."""
        return replace(
            self,
            center=self.center[rows],
            spread=self.spread[rows],
            own=self.own[rows],
            gauge=self.gauge[rows],
            t=self.t[rows],
            low=self.low[rows],
            high=self.high[rows],
        )


@dataclass(frozen=True, eq=False)
class Relaxed:
    """Best states of a batch.

    Attributes
    ----------
    state : ndarray, shape (rows, n)
    t : ndarray, shape (rows, owns)
    cost : ndarray, shape (rows,)
        −2 ln of the unnormalised posterior: whitened residuals and prior pulls squared and summed, what lies beyond
        its limits added; inf where the state does not oscillate.
    log_weight : ndarray, shape (rows,)
        ln of ∫ likelihood × prior over the held parameters, up to one common constant.
    misfit : ndarray, shape (rows,)
        The residuals' part of the cost.
    own_u : ndarray, shape (rows, owns)
        Standard deviation of the own parameters in their gauge (others free within their spreads).
    covariance : ndarray, shape (rows, n, n)
        Posterior covariance of the state.
    """

    state: Array
    t: Array
    cost: Array
    log_weight: Array
    misfit: Array
    own_u: Array
    covariance: Array


def whitener(covariance: Array) -> Array:
    """W such that W·residual has unit, independent noise: shape (m, m).

    Eigenvalues of the correlation below 1e-8 (rounding, or two names for one number) are lifted to that.
    """
    scale = np.sqrt(np.maximum(np.diag(covariance), 1e-300))
    correlation = covariance / np.outer(scale, scale)
    values, vectors = np.linalg.eigh(0.5 * (correlation + correlation.T))
    found: Array = (vectors / np.sqrt(np.maximum(values, 1e-8))).T / scale
    return found


def _to_state(batch: Batch, z: Array, free: NDArray[np.int64], t: Array) -> Array:
    state = batch.center.copy()
    state[:, free] += batch.spread[:, free] * z
    rows = np.arange(len(batch))
    for k in range(batch.own.shape[1]):
        has = batch.own[:, k] >= 0
        state[rows[has], batch.own[has, k]] = _ungauge(t[has, k], batch.gauge[has, k])
    return state


def _ungauge(t: Array, gauge: NDArray[np.int64]) -> Array:
    with np.errstate(over="ignore"):
        grown = np.exp(np.where(gauge == INVERSE, -t, np.where(gauge == IDENTITY, 0.0, t)))
    return np.where(gauge == IDENTITY, t, np.where(gauge == MINUS, -grown, grown))


def relax(model: Model, batch: Batch, steps: int = 5, white: Array | None = None) -> Relaxed:
    """Move every row to its best state by damped Gauss–Newton."""
    white = whitener(model.covariance) if white is None else white
    observed = model.observed
    free = np.flatnonzero(np.any(batch.spread > 0, axis=0))
    owns = batch.own.shape[1] if batch.moves else 0
    z = np.zeros((len(batch), free.size))
    t = batch.t.copy()
    cost, residual, state = _cost(model, batch, white, observed, z, free, t)
    if batch.spare is not None and not np.all(np.isfinite(cost)):
        z = np.where(np.isfinite(cost)[:, None], z, batch.spare[free])
        cost, residual, state = _cost(model, batch, white, observed, z, free, t)
    jacobian = np.zeros((len(batch), observed.size, free.size + owns))
    for _ in range(steps):
        jacobian = _jacobian(model, batch, white, state, residual, observed, free, t, owns)
        normal, gradient = _normal(jacobian, residual, z, owns)
        step = np.linalg.solve(normal, gradient[..., None])[..., 0]
        step = np.nan_to_num(step)
        limit = np.ones((len(batch), free.size + owns)) * 6.0
        if owns:
            # An own parameter moves by at most a unit of ln, or a third of its range, a step.
            width = np.where(batch.gauge == IDENTITY, (batch.high - batch.low) / 3, 1.2)
            limit[:, free.size :] = width
        step = np.clip(step, -limit, limit)
        factor = np.ones(len(batch))
        for _halving in range(4):
            z_new = z + factor[:, None] * step[:, : free.size]
            t_new = t
            if owns:
                t_new = np.clip(t + factor[:, None] * step[:, free.size :], batch.low, batch.high)
            cost_new, residual_new, state_new = _cost(model, batch, white, observed, z_new, free, t_new)
            worse = ~(cost_new <= cost + 1e-9)
            if not np.any(worse):
                break
            factor = np.where(worse, factor * 0.3, factor)
        better = cost_new <= cost
        with np.errstate(invalid="ignore"):
            gain = np.max(np.nan_to_num(np.where(better, cost - cost_new, 0.0), posinf=1.0), initial=0.0)
        z = np.where(better[:, None], z_new, z)
        t = np.where(better[:, None], t_new, t)
        state = np.where(better[:, None], state_new, state)
        residual = np.where(better[:, None], residual_new, residual)
        cost = np.where(better, cost_new, cost)
        if gain < 1e-3:
            break
    jacobian = _jacobian(model, batch, white, state, residual, observed, free, t, owns)
    return _weigh(model, batch, jacobian, state, t, cost, residual, free, owns)


def _cost(
    model: Model, batch: Batch, white: Array, observed: Array, z: Array, free: NDArray[np.int64], t: Array
) -> tuple[Array, Array, Array]:
    state = _to_state(batch, z, free, t)
    with np.errstate(all="ignore"):
        residual = (observed - model.predict(state)) @ white.T
    cost = np.sum(residual**2, axis=1) + np.sum(z**2, axis=1)
    return np.where(np.isfinite(cost), cost, np.inf), residual, state


def _jacobian(
    model: Model,
    batch: Batch,
    white: Array,
    state: Array,
    residual: Array,
    observed: Array,
    free: NDArray[np.int64],
    t: Array,
    owns: int,
) -> Array:
    """d(prediction)/d(z, t), whitened: shape (rows, m, free + owns). Forward differences, one call for all."""
    rows = state.shape[0]
    shifted = np.repeat(state[:, None, :], free.size + owns, axis=1)
    column = np.arange(free.size)
    step = np.full((rows, free.size + owns), 1e-3)
    shifted[:, column, free] += 1e-3 * batch.spread[:, free]
    for k in range(owns):
        has = np.flatnonzero(batch.own[:, k] >= 0)
        width = np.where(
            batch.gauge[has, k] == IDENTITY, _STEP * np.maximum(batch.high - batch.low, 1e-12)[has, k], _STEP
        )
        moved = np.where(t[has, k] + width > batch.high[has, k], t[has, k] - width, t[has, k] + width)
        shifted[has, free.size + k, batch.own[has, k]] = _ungauge(moved, batch.gauge[has, k])
        step[has, free.size + k] = moved - t[has, k]
    with np.errstate(all="ignore"):
        moved_to = (observed - model.predict(shifted)) @ white.T
        slope = -(moved_to - residual[:, None, :]) / step[..., None]
    found: Array = np.clip(np.nan_to_num(np.swapaxes(slope, 1, 2), posinf=0.0, neginf=0.0), -_STEEP, _STEEP)
    return found


def _prior(held: int, owns: int) -> Array:
    """Precision of each column's own prior: 1 for what is held, next to nothing for what is free."""
    return np.concatenate([np.ones(held), np.full(owns, 1e-9)])


def begin(model: Model, white: Array) -> Array | None:
    """A place to begin, shape (n,) in prior standard deviations, where the prior means do not oscillate: the best of
    many draws from the prior (seeded). None where the means do, or where no draw does either."""
    with np.errstate(all="ignore"):
        if np.all(np.isfinite(model.predict(model.center))):
            return None
        z = np.random.default_rng(11).standard_normal((600, len(model.parameters)))
        residual = (model.observed - model.predict(model.center + z * model.spread)) @ white.T
    cost = np.sum(residual**2, axis=1) + np.sum(z**2, axis=1)
    if not np.any(np.isfinite(cost)):
        return None
    best: Array = z[np.nanargmin(np.where(np.isfinite(cost), cost, np.inf))]
    return best


def _ridge(normal: Array) -> Array:
    """A trace of the identity, so that rounding never makes a normal matrix singular."""
    size = normal.shape[-1]
    trace = np.trace(normal, axis1=-2, axis2=-1)
    found: Array = 1e-13 * trace[..., None, None] * np.eye(size)
    return found


def _normal(jacobian: Array, residual: Array, z: Array, owns: int) -> tuple[Array, Array]:
    k = jacobian.shape[2]
    held = k - owns
    transposed = np.swapaxes(jacobian, 1, 2)
    normal = transposed @ jacobian
    normal = normal + np.diag(_prior(held, owns)) + _ridge(normal)
    gradient = (transposed @ np.nan_to_num(residual, posinf=0.0, neginf=0.0)[..., None])[..., 0]
    gradient[:, :held] -= z
    return normal, gradient


def _beyond(batch: Batch, state: Array, free: NDArray[np.int64]) -> Array:
    """ln of what a held parameter loses where it lies beyond its limits: a tolerance is a pair of limits.

    The prior that carries the fit is a Gaussian of the rectangle's mean and standard deviation, whose limits lie at
    √3; a state that needs a part well beyond them is hardly "within tolerance", though limits are not walls.
    """
    spread = batch.spread[:, free]
    z = np.where(spread > 0, (state - batch.center)[:, free] / np.where(spread > 0, spread, 1.0), 0.0)
    over = np.maximum(np.abs(z) - np.sqrt(3.0), 0.0) / BEYOND
    lost: Array = -0.5 * np.sum(np.minimum(over, 20.0) ** 2, axis=1)
    return lost


def _weigh(
    model: Model,
    batch: Batch,
    jacobian: Array,
    state: Array,
    t: Array,
    cost: Array,
    residual: Array,
    free: NDArray[np.int64],
    owns: int,
) -> Relaxed:
    rows, n = state.shape
    held = free.size
    spread = batch.spread[:, free]
    part = jacobian[:, :, :held]
    normal = np.swapaxes(part, 1, 2) @ part
    normal = normal + np.eye(held) + _ridge(normal)
    _, logdet = np.linalg.slogdet(normal)
    covariance = np.zeros((rows, n, n))
    own_u = np.full((rows, batch.own.shape[1]), np.nan)
    if owns:
        full = np.swapaxes(jacobian, 1, 2) @ jacobian
        full = full + np.diag(_prior(held, owns)) + _ridge(full)
        inverse = np.linalg.inv(full)
        own_u = np.sqrt(np.abs(np.diagonal(inverse, axis1=1, axis2=2)[:, held:]))
    inner = np.linalg.inv(normal)
    covariance[:, free[:, None], free[None, :]] = inner * spread[:, :, None] * spread[:, None, :]
    beyond = _beyond(batch, state, free)
    edges = model.unexplained_edges(state) + beyond
    return Relaxed(
        state,
        t,
        cost - 2 * beyond,
        np.where(np.isfinite(cost), -0.5 * cost - 0.5 * logdet + edges, -np.inf),
        np.sum(np.nan_to_num(residual, posinf=1e6, neginf=1e6) ** 2, axis=1),
        own_u,
        covariance,
    )
