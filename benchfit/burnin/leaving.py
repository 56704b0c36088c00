"""When a quantity will leave its limits: extrapolated only where the law found allows it to be."""

from __future__ import annotations

import math

import numpy as np

from benchfit.burnin.drift import Array, Basis, Drift, fit, narrowed
from benchfit.burnin.result import Leaving

REACH = 3.0
"""How far beyond the run a law is extrapolated, in run lengths."""
SURE = 0.9
"""Probability that the law must have."""
SIGNIFICANT = 5.0
"""Times its u that the change must be."""
WANDER = 0.3
"""Largest share of the change that a random walk over the run may be."""
_DRAWS = 2000


def leaving(base: Basis, y: Array, found: Drift, low: float, high: float) -> Leaving:
    """When the quantity will be outside of ``low`` … ``high``.

    Parameters
    ----------
    base, y : Basis and ndarray
        As the drift was found from.
    found : Drift
    low, high : float
        Limits in the quantity's unit.

    Returns
    -------
    Leaving
        Times in s from the run's start, from draws of the law's posterior (2.5 %, 50 %, 97.5 %).
    """
    now = float(found.curve(np.array([base.span]))[0])
    if not low <= now <= high:
        return Leaving(low, high, why="it is outside of them now")
    if found.law in ("none", "step"):
        return Leaving(low, high, why="it does not drift" if found.law == "none" else "a step tells no rate")
    if found.probability[found.law] < SURE:
        return Leaving(low, high, why="the law of its drift is not certain enough to extrapolate")
    if abs(found.change) < SIGNIFICANT * found.u_change:
        return Leaving(low, high, why="its drift is not known well enough to extrapolate")
    if found.walk > WANDER * abs(found.change):
        return Leaving(low, high, why="it wanders too much to extrapolate")
    limit = high if found.rate_now > 0 else low
    times = base.span * np.linspace(1.0, 1.0 + REACH, 601)
    crossed = _crossings(base, y, found, times, limit)
    at, earliest, latest = (_quantile(crossed, times, p) for p in (0.5, 0.025, 0.975))
    if at is None:
        why = f"not within {REACH:g} times the run so far, and further is not extrapolated"
        return Leaving(low, high, limit, None, earliest, None, why)
    return Leaving(low, high, limit, at, earliest, latest)


def _crossings(base: Basis, y: Array, found: Drift, times: Array, limit: float) -> Array:
    """For each draw of the posterior the index of the first time beyond the limit (``times.size``: never)."""
    base = narrowed(base, fit(base, y), found.law)
    post = fit(base, y)
    own = np.array([s.law == found.law for s in base.shapes])
    weight = np.where(own[:, None], post.weight, 0.0)
    rng = np.random.default_rng(20250101)
    flat = rng.choice(weight.size, _DRAWS, p=(weight / weight.sum()).ravel())
    c, k = np.unravel_index(flat, weight.shape)
    normal = rng.standard_normal((3, _DRAWS))
    amplitude = post.amplitude[c, k] + normal[0] * np.sqrt(post.variance[c, k])
    curves = np.stack([base.shapes[i].at(times) for i in c])
    w = base.weights[:, k].T
    z = base.rotated @ y
    ones = (base.one**2 * w).sum(axis=1)
    constant = ((base.one * w) * (z - amplitude[:, None] * base.columns[c])).sum(axis=1) / ones
    constant = constant + normal[1] * post.sigma[c, k] / np.sqrt(ones)
    # A random walk goes on after the run as it did in it.
    walk = post.sigma[c, k] * np.sqrt(base.walk[k])
    ahead = np.sqrt((times - base.span) / base.span)
    value = constant[:, None] + amplitude[:, None] * curves + (normal[2] * walk)[:, None] * ahead
    beyond = value > limit if found.rate_now > 0 else value < limit
    first = np.argmax(beyond, axis=1)
    return np.where(beyond.any(axis=1), first, times.size)


def _quantile(crossed: Array, times: Array, p: float) -> float | None:
    index = int(np.sort(crossed)[min(crossed.size - 1, math.ceil(p * crossed.size))])
    return float(times[index]) if index < times.size else None
