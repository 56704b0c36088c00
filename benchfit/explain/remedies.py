"""What to change: standard values (IEC 60063) that bring the build onto its target, and what it should then do."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

import numpy as np

from benchfit.explain.model import Array, Model
from benchfit.explain.parts import Averaged
from benchfit.explain.result import Quantity, Remedy
from benchfit.explain.spread import principal_points
from benchfit.quantity import Toleranced
from benchfit.sheet.preferred import ladder, series_for

KINDS = ("resistor", "capacitor")


def _fitted(
    model: Model, averaged: Averaged, changes: Mapping[int, float]
) -> tuple[Quantity, Quantity] | None:
    """Frequency and duty, probe lifted, with some parts replaced by new ones of their nominal tolerance."""
    view = model.views[0].without_probe()
    rows: list[tuple[float, float, float, float, float]] = []
    for q, w in zip(averaged.weights, averaged.live, strict=True):
        mean, covariance = w.mean.copy(), w.covariance.copy()
        for i, x in changes.items():
            covariance[i, :] = covariance[:, i] = 0.0
            mean[i] = x
            covariance[i, i] = model.parameters[i].spread ** 2
        with np.errstate(all="ignore"):
            f, duty = model.frequency_and_duty(principal_points(mean, covariance), view)
        if not np.isfinite(f[0]):
            return None
        rows.append(
            (
                q,
                float(f[0]),
                float(np.sum(np.nan_to_num(f[1:] - f[0]) ** 2)),
                float(duty[0]),
                float(np.sum(np.nan_to_num(duty[1:] - duty[0]) ** 2)),
            )
        )
    table = np.array(rows)
    q = table[:, 0] / table[:, 0].sum()

    def pooled(mean: Array, variance: Array, unit: str) -> Quantity:
        center = float(q @ mean)
        return Quantity(center, math.sqrt(float(q @ ((mean - center) ** 2 + variance))), unit)

    return pooled(table[:, 1], table[:, 2], "Hz"), pooled(table[:, 3], table[:, 4], "1")


def _timing(model: Model, averaged: Averaged) -> list[int]:
    """Resistors and capacitors that move the frequency, those named by the first suspect first."""
    view = model.views[0].without_probe()
    state = averaged.live[0].mean
    found = []
    for i, p in enumerate(model.parameters):
        if p.part is None or p.part.kind not in KINDS or p.follows is not None or p.coordinate != "log":
            continue
        moved = np.vstack([state, state])
        moved[1, i] += 0.01
        with np.errstate(all="ignore"):
            f, _ = model.frequency_and_duty(moved, view)
        slope = abs(math.log(f[1] / f[0])) / 0.01 if np.all(np.isfinite(f)) else 0.0
        if slope > 0.1:
            named = p.name in averaged.live[0].causes
            found.append(((not named, p.part.kind != "resistor", -slope), i))
    return [i for _, i in sorted(found)]


def _nearest(model: Model, i: int, wanted: float) -> tuple[float, str]:
    p = model.parameters[i]
    half = 0.5 * (p.limits[1] - p.limits[0])
    name = series_for(max(half, 0.0))
    choices = ladder(wanted / 1.6, wanted * 1.6, name)
    return min(choices, key=lambda x: abs(math.log(x / wanted))), name


def _solve(model: Model, averaged: Averaged, i: int, goal: float, extra: Mapping[int, float]) -> float | None:
    """ln of the part that brings the mean frequency onto the goal, by a fine scan and linear interpolation."""
    view = model.views[0].without_probe()
    grid = np.linspace(-2.5, 2.5, 201) + averaged.live[0].mean[i]
    mixed = np.zeros(grid.size)
    for q, w in zip(averaged.weights, averaged.live, strict=True):
        states = np.tile(w.mean, (grid.size, 1))
        for k, x in extra.items():
            states[:, k] = x
        states[:, i] = grid
        with np.errstate(all="ignore"):
            mixed += q * np.log(model.frequency_and_duty(states, view)[0])
    away = mixed - math.log(goal)
    ok = np.isfinite(away[:-1]) & np.isfinite(away[1:]) & (np.sign(away[:-1]) != np.sign(away[1:]))
    crossings = np.flatnonzero(ok)
    if crossings.size == 0:
        return None
    k = crossings[np.argmin(np.abs(grid[crossings] - averaged.live[0].mean[i]))]
    return float(grid[k] - away[k] * (grid[k + 1] - grid[k]) / (away[k + 1] - away[k]))


def remedies_of(
    model: Model, averaged: Averaged, frequency: Toleranced | None, duty: Toleranced | None
) -> tuple[Remedy, ...]:
    """One timing part at a time, then pairs where the duty cycle has a target too; best first."""
    if frequency is None:
        return ()
    current = _fitted(model, averaged, {})
    if current is None:
        return ()
    close = abs(current[0].value / frequency.nominal - 1) <= max(
        0.002, (current[0].u or 0.0) / frequency.nominal
    )
    duty_close = duty is None or abs(current[1].value - duty.nominal) <= max(0.005, current[1].u or 0.0)
    if close and duty_close:
        return ()
    found = []
    order = _timing(model, averaged)
    values = model.values(averaged.mean)
    for i in order[:5]:
        wanted = _solve(model, averaged, i, frequency.nominal, {})
        if wanted is None:
            continue
        after, series = _nearest(model, i, math.exp(wanted))
        p = model.parameters[i]
        predicted = _fitted(model, averaged, {i: math.log(after) + p.center - p.nominal})
        if predicted is None:
            continue
        found.append(
            Remedy(
                p.name,
                float(values[p.name]),
                after,
                series,
                {"frequency": predicted[0], "duty": predicted[1]},
            )
        )
    if duty is not None and len(order) > 1:
        found.extend(_pairs(model, averaged, order, frequency, duty, values))

    def badness(r: Remedy) -> float:
        f, d = r.predicts["frequency"], r.predicts["duty"]
        away = abs(math.log(f.value / frequency.nominal)) + (f.u or 0.0) / f.value
        if duty is not None:
            away += 2 * abs(d.value - duty.nominal)
        return away

    found.sort(key=badness)
    return tuple(found[:4])


def _pairs(
    model: Model,
    averaged: Averaged,
    order: Sequence[int],
    frequency: Toleranced,
    duty: Toleranced,
    values: Mapping[str, Array],
) -> list[Remedy]:
    """Two resistors together, for frequency and duty at once: a scan of one, the other solved for."""
    resistors = [i for i in order if (part := model.parameters[i].part) and part.kind == "resistor"]
    best: tuple[float, list[Remedy]] | None = None
    for i in resistors[:2]:
        for j in resistors[:2]:
            if i >= j:
                continue
            p, q = model.parameters[i], model.parameters[j]
            series_p = series_for(0.5 * (p.limits[1] - p.limits[0]))
            here = math.exp(averaged.live[0].mean[i])
            for after in ladder(here / 4, here * 4, series_p)[:60]:
                x = math.log(after) + p.center - p.nominal
                wanted = _solve(model, averaged, j, frequency.nominal, {i: x})
                if wanted is None:
                    continue
                other, series_q = _nearest(model, j, math.exp(wanted))
                predicted = _fitted(model, averaged, {i: x, j: math.log(other) + q.center - q.nominal})
                if predicted is None:
                    continue
                away = abs(math.log(predicted[0].value / frequency.nominal)) + 2 * abs(
                    predicted[1].value - duty.nominal
                )
                if best is None or away < best[0]:
                    predicts = {"frequency": predicted[0], "duty": predicted[1]}
                    best = (
                        away,
                        [
                            Remedy(p.name, float(values[p.name]), after, series_p, predicts),
                            Remedy(q.name, float(values[q.name]), other, series_q, predicts),
                        ],
                    )
    return best[1] if best else []
