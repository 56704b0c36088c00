"""The verdict with its guard band (JCGM 106:2012, 8.3), and what the build does with the probe lifted."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np

from benchfit.explain.model import Model
from benchfit.explain.parts import Averaged
from benchfit.explain.result import Quantity
from benchfit.explain.spread import principal_points
from benchfit.quantity import Toleranced


def without_probe(
    model: Model, averaged: Averaged, built: Mapping[str, Quantity]
) -> Mapping[str, Quantity] | None:
    """Frequency and duty with the probe lifted: as measured, times what the model says that lifting it does.

    The ratio's spread within and between the live hypotheses goes into u.
    """
    view = model.views[0]
    if not view.loads:
        return None
    bare = view.without_probe()
    found = {}
    for name, slot in (("frequency", 0), ("duty", 1)):
        if name not in built:
            continue
        means, variances, weights = [], [], []
        for q, w in zip(averaged.weights, averaged.live, strict=True):
            states = principal_points(w.mean, w.covariance)
            with np.errstate(all="ignore"):
                on = model.frequency_and_duty(states, view)[slot]
                off = model.frequency_and_duty(states, bare)[slot]
                ratio = off / on if name == "frequency" else off - on
            if not np.isfinite(ratio[0]):
                continue
            moves = np.nan_to_num(ratio[1:] - ratio[0])
            means.append(float(ratio[0]))
            variances.append(float(np.sum(moves**2)))
            weights.append(q)
        if not weights:
            return None
        q = np.array(weights) / sum(weights)
        mean = float(q @ means)
        spread = math.sqrt(float(q @ ((np.array(means) - mean) ** 2 + np.array(variances))))
        b = built[name]
        if name == "frequency":
            value = b.value * mean
            u = math.hypot((b.u or 0.0) * mean, b.value * spread)
        else:
            value, u = b.value + mean, math.hypot(b.u or 0.0, spread)
        found[name] = Quantity(value, u, b.unit)
    return found


def judge(value: Quantity, target: Toleranced) -> str | None:
    """ "pass" only if the whole interval value ± U lies within the limits, "fail" only if it lies outside."""
    if not target.stated:
        return None
    spread = 2 * (value.u or 0.0)
    slack = 1e-12 * abs(target.nominal)
    if value.value - spread >= target.low - slack and value.value + spread <= target.high + slack:
        return "pass"
    if value.value + spread < target.low - slack or value.value - spread > target.high + slack:
        return "fail"
    return "conditional"


def worst(verdicts: list[str | None]) -> str | None:
    """One verdict for all targets: fail before conditional before pass."""
    for word in ("fail", "conditional", "pass"):
        if word in verdicts:
            return word
    return None
