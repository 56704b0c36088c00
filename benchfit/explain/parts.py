"""The parts as the build turns out to have them: refined by lmfit, averaged over the live suspects."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from benchfit.explain.infer import whitener
from benchfit.explain.model import Array, Model, Parameter
from benchfit.explain.result import PartFound
from benchfit.explain.weigh import Weighed

LIVE = 0.01


@dataclass(frozen=True, eq=False)
class Averaged:
    """The build averaged over what is not settled: weights, states and covariances of the live hypotheses."""

    weights: Array
    live: tuple[Weighed, ...]

    @property
    def mean(self) -> Array:
        """Mean state, shape (n,)."""
        mean: Array = self.weights @ np.array([w.mean for w in self.live])
        return mean

    @property
    def covariance(self) -> Array:
        """Covariance of the state: within the hypotheses and between them, shape (n, n)."""
        mean = self.mean
        out = np.zeros((mean.size, mean.size))
        for q, w in zip(self.weights, self.live, strict=True):
            away = w.mean - mean
            out += q * (w.covariance + np.outer(away, away))
        return out


def average(weighed: Sequence[Weighed]) -> Averaged:
    """Keep what is alive and normalise."""
    live = [w for w in weighed if w.probability >= LIVE and np.all(np.isfinite(w.mean))] or list(weighed[:1])
    p = np.array([max(w.probability, 1e-12) for w in live])
    return Averaged(p / p.sum(), tuple(live))


def parts_found(model: Model, averaged: Averaged, readings: Sequence[str]) -> tuple[PartFound, ...]:
    """Value, u and provenance of every part, in SI."""
    mean, covariance = averaged.mean, averaged.covariance
    nominal = model.values(model.nominal)
    values = model.values(mean)
    found = []
    slopes = _slopes(model, mean)
    off = {c for w in averaged.live for c in w.causes}
    for i, p in enumerate(model.parameters):
        if p.part is None:
            continue
        value = float(values[p.name])
        u = math.sqrt(max(float(slopes[p.name] @ covariance @ slopes[p.name]), 0.0))
        parasitic = p.part.kind == "parasitic" and p.spread == 0
        if parasitic and p.name not in off:
            continue
        base = float(nominal[p.name])
        limits = None if parasitic else _limits(model, i)
        if not math.isfinite(value):
            found.append(PartFound(p.name, None, None, p.part.unit, None, None, None, None, "capture"))
            continue
        deviation = None if parasitic or base == 0 or not math.isfinite(base) else value / base - 1
        within = (
            None
            if limits is None
            else limits[0] - 1e-12 * abs(limits[0]) <= value <= limits[1] + 1e-12 * abs(limits[1])
        )
        found.append(
            PartFound(
                p.name,
                value,
                u,
                p.part.unit,
                None if parasitic or not math.isfinite(base) else base,
                limits,
                deviation,
                within,
                _source(model, i, covariance, readings),
            )
        )
    return tuple(found)


def _slopes(model: Model, mean: Array) -> dict[str, Array]:
    """d(part)/d(state) for every part: followers move with their base."""
    n = mean.size
    shifted = np.tile(mean, (n, 1))
    spread = np.maximum(model.spread, 1e-6 * np.maximum(np.abs(mean), 1e-12))
    step = 1e-4 * spread
    shifted[np.arange(n), np.arange(n)] += step
    with np.errstate(all="ignore"):
        here, there = model.values(mean), model.values(shifted)
        return {name: np.nan_to_num((there[name] - here[name]) / step) for name in here}


def _limits(model: Model, i: int) -> tuple[float, float] | None:
    p = model.parameters[i]
    state = np.tile(model.nominal, (2, 1))
    state[:, i] = p.limits
    values = model.values(state)[p.name]
    low, high = sorted(float(v) for v in values)
    return (low, high) if math.isfinite(low) and math.isfinite(high) else None


def _source(model: Model, i: int, covariance: Array, readings: Sequence[str]) -> str:
    """Which source carries most of the information (1/u²) on a part: the capture, its reading, or the sheet."""
    p: Parameter = model.parameters[i]
    sheet = 0.0 if p.spread == 0 else 1 / p.spread**2
    total = 1 / covariance[i, i] if covariance[i, i] > 0 else math.inf
    reading = 0.0
    if p.name in readings:
        for j, o in enumerate(model.observations):
            if o.kind == "reading" and o.name == p.name:
                reading = 1 / model.covariance[j, j]
    capture = max(total - sheet - reading, 0.0)
    if p.part is not None and p.part.kind == "parasitic" and p.spread == 0:
        return "capture"
    if reading >= max(capture, sheet) and reading > 0:
        return "reading"
    return "capture" if capture > sheet and math.isfinite(capture) else "build sheet"


def unseparated(model: Model, state: Array) -> tuple[tuple[str, ...], ...]:
    """Parts that the captures fix only together, priors left out: columns of the whitened Jacobian that are
    collinear.

    Unit columns; two of them are collinear where the smaller singular value is under 1e-2 of the larger, that is
    where tan(angle/2) is. The scope's nuisances are projected out first: they belong to the instrument.
    """
    rows = [j for j, o in enumerate(model.observations) if o.kind != "reading"]
    if not rows:
        return ()
    n = len(model.parameters)
    spread = model.spread
    step = np.where(spread > 0, 1e-3 * spread, 0.0)
    shifted = np.tile(state, (n, 1))
    shifted[np.arange(n), np.arange(n)] += step
    with np.errstate(all="ignore"):
        raw = (model.predict(shifted) - model.predict(state))[:, rows].T / np.where(step > 0, 1e-3, 1.0)
    if not np.all(np.isfinite(raw)):
        return ()
    nuisance = [i for i, p in enumerate(model.parameters) if p.part is None and spread[i] > 0]
    covariance = model.covariance[np.ix_(rows, rows)] + raw[:, nuisance] @ raw[:, nuisance].T
    columns = whitener(covariance) @ raw
    wanted = [
        i
        for i, p in enumerate(model.parameters)
        if p.part is not None and spread[i] > 0 and p.part.kind not in ("parasitic", "device")
    ]
    length = np.linalg.norm(columns, axis=0)
    wanted = [i for i in wanted if length[i] > 0.3]
    groups: list[set[int]] = []
    for a, i in enumerate(wanted):
        for j in wanted[a + 1 :]:
            cosine = abs(float(columns[:, i] @ columns[:, j]) / (length[i] * length[j]))
            if math.sqrt(max(1 - cosine, 0.0) / (1 + cosine)) < 1e-2:
                mine = [g for g in groups if i in g or j in g]
                merged = {i, j}.union(*mine)
                groups = [g for g in groups if g not in mine] + [merged]
    return tuple(tuple(model.parameters[i].name for i in sorted(g)) for g in groups)
