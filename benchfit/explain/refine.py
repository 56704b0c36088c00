"""Least squares in lmfit: the likeliest hypothesis' parts, with every tolerance, reading and nuisance as a prior."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from benchfit.explain.infer import whitener
from benchfit.explain.model import Array, Model
from benchfit.explain.weigh import Weighed

_STEP = 1e-4


@dataclass(frozen=True, eq=False)
class _Problem:
    """Residuals of one hypothesis in scaled offsets from its best state (lmfit likes numbers near 1).

    ``moving`` are the parameters that move, ``scale`` their units; those with a ``spread`` are held by it.
    """

    model: Model
    start: Array
    spread: Array
    moving: list[int]
    scale: Array
    white: Array

    def state(self, p: Any) -> Array:
        out = self.start.copy()
        out[self.moving] += self.scale * np.array([p[f"p{k}"].value for k in range(len(self.moving))])
        return out

    @property
    def held(self) -> list[int]:
        return [k for k, i in enumerate(self.moving) if self.spread[i] > 0]

    def residual(self, p: Any) -> Array:
        """Whitened observations, then each held parameter against its prior in units of its spread."""
        x = self.state(p)
        with np.errstate(all="ignore"):
            data = self.white @ (self.model.observed - self.model.predict(x))
        rows = [self.moving[k] for k in self.held]
        pulls = (x[rows] - self.model.center[rows]) / self.spread[rows]
        found: Array = np.nan_to_num(np.concatenate([data, pulls]), nan=1e6, posinf=1e6, neginf=-1e6)
        return found

    def slope(self, p: Any) -> Array:
        """Transposed Jacobian of :meth:`residual`: one call of the model for all columns."""
        x = self.state(p)
        count = len(self.moving)
        shifted = np.tile(x, (count, 1))
        shifted[np.arange(count), self.moving] += _STEP * self.scale
        with np.errstate(all="ignore"):
            data = ((self.model.predict(x) - self.model.predict(shifted)) / _STEP) @ self.white.T
        prior = np.zeros((count, len(self.held)))
        for column, k in enumerate(self.held):
            prior[k, column] = self.scale[k] / self.spread[self.moving[k]]
        found: Array = np.nan_to_num(np.concatenate([data, prior], axis=1))
        return found


def refine(model: Model, first: Weighed) -> Weighed:
    """Mode and covariance of a hypothesis by least squares, its freed parts without a prior.

    The posterior from the grid is kept where the two disagree (a one-sided parasitic has no Gaussian mode), and where
    lmfit gives no covariance.
    """
    import lmfit

    own = [model.index[c] for c in first.causes]
    spread = model.spread
    spread[own] = 0.0
    moving = [i for i in range(spread.size) if spread[i] > 0 or i in own]
    if not moving or not np.all(np.isfinite(first.mode[moving])):
        return first
    scale = np.array([spread[i] if spread[i] > 0 else _unit(first, i) for i in moving])
    problem = _Problem(model, first.mode, spread, moving, scale, whitener(model.covariance))
    params = lmfit.Parameters()
    for k in range(len(moving)):
        params.add(f"p{k}", value=0.0)
    fit = lmfit.minimize(
        problem.residual, params, Dfun=problem.slope, col_deriv=1, scale_covar=False, max_nfev=60
    )
    if not fit.success or getattr(fit, "covar", None) is None:
        return first
    mode = problem.state(fit.params)
    u = np.sqrt(np.diag(first.covariance))
    if not np.all(np.abs(mode - first.mean)[moving] <= 0.5 * u[moving] + 1e-12):
        return first
    covariance = np.zeros_like(first.covariance)
    covariance[np.ix_(moving, moving)] = fit.covar * np.outer(scale, scale)
    return replace(first, mean=mode, mode=mode, covariance=covariance)


def _unit(w: Weighed, i: int) -> float:
    """A freed parameter's unit of length: its own u, or a thousandth of it."""
    return max(math.sqrt(max(w.covariance[i, i], 0.0)), 1e-3 * abs(float(w.mode[i])), 1e-300)
