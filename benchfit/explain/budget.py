"""Why it misses: the miss split into shares that add up to it.

From the nominal parts to the effective ones on a straight line in the state, each coordinate's partial derivative of
f/target is integrated along it (Aumann & Shapley 1974): the shares add up to the whole change, whatever its size, and
depend on no order. The probe goes the same way, from lifted to as given.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from benchfit.explain.model import Array, Model, View
from benchfit.explain.parts import Averaged
from benchfit.explain.result import Miss, Share
from benchfit.quantity import Toleranced

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(24)


def _loaded(view: View, share: Array | float) -> View:
    loads = {node: (g * share, c * share) for node, (g, c) in view.loads.items()}
    return replace(view, loads=loads)


def _function(model: Model, view: View, which: str, states: Array, load: Array | float) -> Array:
    f, duty = model.frequency_and_duty(states, _loaded(view, load))
    return f if which == "frequency" else duty


def path_shares(model: Model, view: View, which: str, effective: Array) -> tuple[Array, float, float]:
    """Shares (n parameters, then the probe) of F(effective, probe) − F(nominal, no probe), and both ends.

    NaN where either end, or the way between them, does not oscillate.
    """
    start = model.nominal
    move = effective - start
    active = np.flatnonzero(np.abs(move) > 0)
    parts = [i for i in active if model.parameters[i].part is not None or ":" in model.parameters[i].name]
    parts = [i for i in parts if not model.parameters[i].name.startswith(("gain", "offset"))]
    s = 0.5 * (_NODES + 1)
    base = start + s[:, None] * move
    count = len(parts) + 1
    up = np.repeat(base[:, None, :], count, axis=1)
    down = up.copy()
    h = 1e-4
    for k, i in enumerate(parts):
        up[:, k, i] += h * move[i]
        down[:, k, i] -= h * move[i]
    load_up = np.repeat(s[:, None], count, axis=1)
    load_down = load_up.copy()
    load_up[:, -1] += h
    load_down[:, -1] -= h
    with np.errstate(all="ignore"):
        slope = (
            _function(model, view, which, up, load_up) - _function(model, view, which, down, load_down)
        ) / (2 * h)
        ends = np.stack([start, effective])
        first = float(_function(model, view, which, ends[:1], 0.0)[0])
        last = float(_function(model, view, which, ends[1:], 1.0)[0])
    shares = 0.5 * _WEIGHTS @ slope
    out = np.zeros(len(model.parameters) + 1)
    out[parts] = shares[:-1]
    out[-1] = shares[-1]
    # What quadrature and differences leave (parts in 1e8) goes to the shares in proportion, so that they add
    # up.
    total, whole = float(np.sum(out)), last - first
    weight = float(np.sum(np.abs(out)))
    if weight > 0 and np.isfinite(total):
        out += (whole - total) * np.abs(out) / weight
    return out, first, last


def miss_of(model: Model, averaged: Averaged, which: str, target: Toleranced, built: float | None) -> Miss:
    """The miss budget of frequency or duty, averaged over the live hypotheses with the spread between them."""
    goal = target.nominal
    limits = (target.low / goal - 1, target.high / goal - 1) if target.stated else None
    with np.errstate(all="ignore"):
        paper = float(_function(model, model.views[0].without_probe(), which, model.nominal[None, :], 0.0)[0])
    on_paper = paper / goal - 1 if np.isfinite(paper) else None
    if built is None:
        return Miss(goal, None, None, on_paper, limits=limits)
    miss = built / goal - 1
    rows, kept, fitted = [], [], []
    for q, w in zip(averaged.weights, averaged.live, strict=True):
        shares, _, last = path_shares(model, model.views[0], which, w.mean)
        if np.all(np.isfinite(shares)) and np.isfinite(last):
            rows.append(shares)
            kept.append(q)
            fitted.append(_within(model, w.covariance, w.mean, shares))
    if not rows or on_paper is None:
        return Miss(goal, built, miss, on_paper, (), None if on_paper is None else miss - on_paper, limits)
    q = np.array(kept) / sum(kept)
    table = np.array(rows) / goal
    mean = q @ table
    spread = np.sqrt(q @ ((table - mean) ** 2 + np.array(fitted) / goal**2))
    names = [p.name for p in model.parameters] + ["probe"]
    found = [
        Share(n, float(x), float(u))
        for n, x, u in zip(names, mean, spread, strict=True)
        if abs(x) > 0 or (n == "probe" and model.views[0].loads)
    ]
    found.sort(key=lambda s: -abs(s.share))
    unexplained = miss - on_paper - sum(s.share for s in found)
    return Miss(goal, built, miss, on_paper, tuple(found), float(unexplained), limits)


def _within(model: Model, covariance: Array, mean: Array, shares: Array) -> Array:
    """Variance of each share within one hypothesis: the share per unit of its own coordinate, times that u."""
    move = mean - model.nominal
    u = np.sqrt(np.maximum(np.diag(covariance), 0.0))
    with np.errstate(all="ignore"):
        per_unit = np.where(np.abs(move) > 0, shares[:-1] / move, 0.0)
    return np.append((per_unit * u) ** 2, 0.0)


def largest(misses: Sequence[Share]) -> Share | None:
    """The share that moves the most."""
    return max(misses, key=lambda s: abs(s.share), default=None)
