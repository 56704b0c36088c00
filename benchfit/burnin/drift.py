"""Does a quantity drift, and by which law: none, linear, logarithmic, settling exponential, or a step.

Block means y with times t are taken for a constant plus at most one law's shape, x(t) times an amplitude,
plus white noise σ²/count and a random walk of variance q·σ²·t/T, both unknown. Whatever can be is integrated
out in closed form (σ, constant, amplitude with unit information: Schwarz's criterion), the rest on a grid
(the walk's strength q; a law's time constant, age or moment), so that a law is rewarded only for what it
explains beyond a wandering constant, and pays for its freedom.

Sources: Schwarz, Ann. Statist. 6 (1978) 461; Kass & Raftery, J. Am. Stat. Assoc. 90 (1995) 773; generalised
least squares with a local-level covariance: Harvey, Forecasting, Structural Time Series Models (1989).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from benchfit.burnin.blocks import Blocks

Array = NDArray[np.float64]
Law = Literal["none", "linear", "logarithmic", "settling", "step"]
LAWS: tuple[Law, ...] = ("none", "linear", "logarithmic", "settling", "step")

PRIOR = {"none": 0.5, "linear": 0.125, "logarithmic": 0.125, "settling": 0.125, "step": 0.125}
DOUBT = 0.03
"""A drift is reported only where the probability of none is below this."""
STILL = 0.1
"""Prior probability that there is no random walk at all."""
LEAST = 5
"""Fewer blocks than this tell no law."""
_SIDE = 3
_FINE = 81


@dataclass(frozen=True)
class Shape:
    """A law's shape x(t), t in s from the start of a run of ``span`` s.

    ``parameter`` is the settling's time constant, the ageing's age at the start, or the moment of the step
    (s).
    """

    law: Law
    parameter: float
    span: float

    def at(self, t: Array) -> Array:
        """x(t): t/T, ln(1 + t/t_a) (ageing: C = C_0·[1 − k·log10(t/t_0)]), 1 − e^(−t/τ), or a step."""
        if self.law == "logarithmic":
            return np.log1p(np.maximum(t, 0) / self.parameter)
        if self.law == "settling":
            return -np.expm1(-t / self.parameter)
        if self.law == "step":
            return (t >= self.parameter).astype(float)
        return np.asarray(t / self.span)

    def over(self, t: Array, width: Array) -> Array:
        """x as the mean of a block of that width about t; a step may fall inside one."""
        if self.law != "step":
            return self.at(t)
        with np.errstate(divide="ignore", invalid="ignore"):
            inside = (t + width / 2 - self.parameter) / width
        return np.where(width > 0, np.clip(np.nan_to_num(inside), 0, 1), self.at(t))

    def slope(self, t: float) -> float:
        """dx/dt (1/s)."""
        if self.law == "logarithmic":
            return 1 / (self.parameter + max(t, 0.0))
        if self.law == "settling":
            return math.exp(-t / self.parameter) / self.parameter
        return 0.0 if self.law == "step" else 1 / self.span


@dataclass(frozen=True, eq=False)
class Basis:
    """Everything that depends on the blocks' times and counts alone, shared by the quantities of a run.

    ``rotated`` turns block means into independent coordinates whose variance is 1 + q·``power`` under every
    q; ``columns`` (c, n) are the shapes in them, ``one`` (n,) the constant; ``share`` (c,) each shape's part
    of its law's prior.
    """

    blocks: Blocks
    span: float
    shapes: tuple[Shape, ...]
    share: Array
    rotated: Array
    power: Array
    columns: Array
    one: Array
    walk: Array
    walk_prior: Array

    @property
    def weights(self) -> Array:
        """1/variance of every coordinate under every q, shape (n, walks)."""
        return 1 / (1 + np.outer(self.power, self.walk))


@dataclass(frozen=True, eq=False)
class Fitted:
    """Posterior of one quantity over shapes and walks.

    ``weight`` (c, walks) sums to 1 over all shapes and walks of all laws but none, times their laws'
    probability; ``amplitude``, ``variance`` (c, walks) are the shapes' amplitudes; ``null`` (walks,) the
    weights under none.
    """

    probability: dict[Law, float]
    weight: Array
    null: Array
    amplitude: Array
    variance: Array
    sigma: Array


@dataclass(frozen=True, eq=False)
class Drift:
    """What a quantity does over the run; rates are per second, all in the quantity's unit.

    Attributes
    ----------
    law : Law
    probability : dict
        Of every law.
    change, u_change : float
        By how much it moved over the run by its law (none: the slope that noise leaves, times the run).
    rate, u_rate : float
        Mean rate over the run; beside a step: the slope that is left.
    rate_now : float
        Rate at the run's end by its law.
    shape : Shape
        The best one of its law; its parameter has ``u_parameter``.
    constant, amplitude : float
        value(t) = constant + amplitude·shape.at(t).
    walk : float
        Random walk's standard deviation over the whole run.
    sigma : float
        White scatter of a single record.
    """

    law: Law
    probability: dict[Law, float]
    change: float
    u_change: float
    rate: float
    u_rate: float
    rate_now: float
    shape: Shape
    u_parameter: float
    constant: float
    amplitude: float
    u_amplitude: float
    walk: float
    sigma: float

    def curve(self, t: Array) -> Array:
        """The law's value at times t (s from the start)."""
        if self.law == "none":
            return np.full(np.shape(t), self.constant)
        return self.constant + self.amplitude * self.shape.at(t)


def basis(blocks: Blocks, span: float) -> Basis:
    """Prepare the analysis for blocks at these times over a run of ``span`` s."""
    n, t = blocks.time.size, blocks.time
    walk = np.minimum.outer(t, t) - np.diag(blocks.width / 6)
    scaled = np.sqrt(blocks.count)
    matrix = walk / span * np.outer(scaled, scaled)
    power, vectors = np.linalg.eigh(matrix)
    rotated = vectors.T * scaled
    shapes, share = _shapes(blocks, span)
    columns = np.stack([s.over(t, blocks.width) for s in shapes]) @ rotated.T
    # From where a walk moves a slope as much as white noise does, to where it rules every block.
    weakest = 3 / float(blocks.count.sum())
    strongest = 30 * n / max(float(np.median(blocks.count)), 1.0)
    walks = np.geomspace(weakest, max(strongest, 10 * weakest), 20)
    prior = np.concatenate([[STILL], np.full(walks.size, (1 - STILL) / walks.size)])
    return Basis(
        blocks, span, shapes, share, rotated, np.maximum(power, 0.0), columns, rotated @ np.ones(n),
        np.concatenate([[0.0], walks]), prior,
    )  # fmt: skip


def _shapes(blocks: Blocks, span: float) -> tuple[tuple[Shape, ...], Array]:
    """Candidate shapes with each one's share of its law's prior."""
    t = blocks.time
    first = max(float(np.median(np.diff(t[:8]))) if t.size > 1 else span, span * 1e-6)
    found: list[tuple[Shape, float]] = [(Shape("linear", 0.0, span), 1.0)]
    ages = np.geomspace(0.5 * first, 0.3 * span, 16 if first < 0.3 * span else 0)
    found += [(Shape("logarithmic", float(a), span), 1 / len(ages)) for a in ages]
    times = np.geomspace(2 * first, 0.7 * span, 24 if 2 * first < 0.7 * span else 0)
    found += [(Shape("settling", float(tau), span), 1 / len(times)) for tau in times]
    moments = _moments(blocks)
    found += [(Shape("step", m, span), 1 / len(moments)) for m in moments]
    return tuple(s for s, _ in found), np.array([w for _, w in found])


def _moments(blocks: Blocks) -> list[float]:
    """Where a step may be: between blocks, and inside a block of many records."""
    t, before = blocks.time, np.cumsum(blocks.count)
    moments: list[float] = []
    for i in range(t.size - 1):
        # A step needs records on both sides to be told from a stray one.
        if before[i] < _SIDE or before[-1] - before[i] < _SIDE or min(i + 1, t.size - 1 - i) < 2:
            continue
        if blocks.count[i] > 1 and i >= 2:
            moments += [float(t[i] + f * blocks.width[i]) for f in (-0.4, -0.2, 0.0, 0.2, 0.4)]
        moments.append(float(0.5 * (t[i] + t[i + 1])))
    return moments


def fit(base: Basis, y: Array) -> Fitted:
    """Evidence and amplitudes of every shape under every walk; y: block means, shape (n,)."""
    n = y.size
    w = base.weights
    z = base.rotated @ (y - y.mean())
    oo, oy, yy = base.one**2 @ w, (base.one * z) @ w, z**2 @ w
    left = np.maximum(yy - oy**2 / oo, 1e-300)
    xo, xy = (base.columns * base.one) @ w, (base.columns * z) @ w
    xx = base.columns**2 @ w - xo**2 / oo
    xy = xy - xo * oy / oo
    with np.errstate(divide="ignore", invalid="ignore"):
        explained = np.where(xx > 0, xy**2 / (xx * left), 0.0)
        amplitude = np.where(xx > 0, xy / xx, 0.0)
    rest = np.clip(1 - explained, 1e-14, 1.0)
    null = -0.5 * np.log1p(np.outer(base.power, base.walk)).sum(axis=0) - 0.5 * np.log(oo)
    null = null - 0.5 * (n - 1) * np.log(left) + np.log(base.walk_prior)
    law = np.array([math.log(PRIOR[s.law]) for s in base.shapes])
    gain = -0.5 * math.log(n) - 0.5 * (n - 2) * np.log(rest)
    joint = null + gain + (law + np.log(base.share))[:, None]
    none = null + math.log(PRIOR["none"])
    peak = max(float(joint.max(initial=-np.inf)), float(none.max()))
    joint, none = np.exp(joint - peak), np.exp(none - peak)
    total = joint.sum() + none.sum()
    laws = np.array([s.law for s in base.shapes])
    probability = {k: float(joint[laws == k].sum() / total) for k in LAWS[1:]}
    variance = left * rest / (n - 2) / np.where(xx > 0, xx, np.inf)
    sigma = np.sqrt(left * rest / (n - 2))
    return Fitted(
        {"none": float(none.sum() / total), **probability},
        joint / total,
        none / total,
        amplitude,
        variance,
        sigma,
    )


def analyse(base: Basis, y: Array) -> Drift:
    """The drift of one quantity; y: block means, shape (n,) with n ≥ LEAST."""
    found = fit(base, y)
    law = max(LAWS[1:], key=lambda k: found.probability[k])
    if found.probability["none"] >= DOUBT:
        law = "none"
    fine = narrowed(base, found, law)
    post = found if fine is base else replace(fit(fine, y), probability=found.probability)
    return _summed(fine, y, post, law)


def narrowed(base: Basis, found: Fitted, law: Law) -> Basis:
    """The basis with a finer grid about the best time constant, age or moment; the same for other laws.

    What is well measured needs it: between two points of the first grid a law may be off by many u.
    """
    own = [i for i, s in enumerate(base.shapes) if s.law == law]
    if law not in ("settling", "logarithmic", "step") or len(own) < 2:
        return base
    at = int(np.argmax(found.weight[own].sum(axis=1)))
    parameters = [base.shapes[i].parameter for i in own]
    best = parameters[at]
    if law == "step":
        low, high = parameters[max(at - 2, 0)], parameters[min(at + 2, len(own) - 1)]
        grid = np.linspace(low, high, _FINE)
    else:
        grid = best * (parameters[1] / parameters[0]) ** np.linspace(-2.5, 2.5, _FINE)
    shapes = tuple(Shape(law, float(p), base.span) for p in grid)
    columns = np.stack([s.over(base.blocks.time, base.blocks.width) for s in shapes]) @ base.rotated.T
    linear = next(i for i, s in enumerate(base.shapes) if s.law == "linear")
    return replace(
        base,
        shapes=(base.shapes[linear], *shapes),
        share=np.concatenate([[1.0], np.full(_FINE, 1 / _FINE)]),
        columns=np.vstack([base.columns[linear], columns]),
    )


def _summed(base: Basis, y: Array, found: Fitted, law: Law) -> Drift:
    own = np.array([s.law == ("linear" if law == "none" else law) for s in base.shapes])
    weight = np.where(own[:, None], found.weight, 0.0)
    if law == "none":
        weight = own[:, None] * found.null[None, :]
    weight = weight / weight.sum()
    ends = np.array([s.at(np.array([0.0, base.span])) for s in base.shapes])
    reach = (ends[:, 1] - ends[:, 0])[:, None]
    change, u_change = _moment(weight, found.amplitude * reach, found.variance * reach**2, y.size)
    slopes = np.array([s.slope(base.span) for s in base.shapes])[:, None]
    rate_now, _ = _moment(weight, found.amplitude * slopes, found.variance * slopes**2, y.size)
    c, k = np.unravel_index(int(np.argmax(weight)), weight.shape)
    _, u_amplitude = _moment(weight, found.amplitude, found.variance, y.size)
    shape, amplitude = base.shapes[c], float(found.amplitude[c, k])
    parameter = np.array([s.parameter for s in base.shapes])[:, None]
    _, u_parameter = _moment(weight, parameter + 0 * weight, 0 * weight, y.size)
    rate, u_rate = change / base.span, u_change / base.span
    if law == "step":
        rate, u_rate = _beside(base, y, int(c), int(k))
    w = base.weights[:, k]
    column = base.columns[c] if law != "none" else 0 * base.columns[c]
    z = base.rotated @ y
    constant = float((base.one * w) @ (z - amplitude * column) / (base.one**2 @ w))
    sigma = float(found.sigma[c, k])
    walk = float((weight * found.sigma * np.sqrt(base.walk)).sum())
    return Drift(
        law, found.probability, change, u_change, rate, u_rate, rate_now, shape, u_parameter, constant,
        amplitude, u_amplitude, walk, sigma,
    )  # fmt: skip


def _moment(weight: Array, mean: Array, variance: Array, n: int) -> tuple[float, float]:
    """Mean and standard deviation of a mixture, Student's factor for n blocks and two parameters included."""
    nu = max(n - 2, 1)
    factor = nu / (nu - 2) if nu > 2 else 3.0
    center = float((weight * mean).sum())
    spread = float((weight * (factor * np.where(np.isfinite(variance), variance, 0.0) + (mean - center) ** 2)).sum())
    return center, math.sqrt(max(spread, 0.0))


def _beside(base: Basis, y: Array, c: int, k: int) -> tuple[float, float]:
    """The slope that is left beside a step (1/s), by least squares with both."""
    w = np.sqrt(base.weights[:, k])
    design = np.stack([base.one, base.columns[c], base.columns[0]], axis=1) * w[:, None]
    z = (base.rotated @ y) * w
    solution, *_ = np.linalg.lstsq(design, z, rcond=None)
    rest = z - design @ solution
    inverse = np.linalg.pinv(design.T @ design)
    s2 = float(rest @ rest) / max(y.size - 3, 1)
    return float(solution[2]) / base.span, math.sqrt(max(s2 * inverse[2, 2], 0.0)) / base.span
