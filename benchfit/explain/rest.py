"""A build that does not oscillate: which cause parks the node where it was seen, and what would make it run.

Here a hypothesis predicts a resting voltage, not a cycle, and half of its prior may oscillate after all. So evidence
is an average over draws from the prior (simple Monte Carlo), with the freed part on a grid.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import logsumexp

from benchfit.circuits.model import Condition
from benchfit.cycle.constants import CycleConstants
from benchfit.explain.hypotheses import Hypothesis, singles
from benchfit.explain.infer import _ungauge
from benchfit.explain.model import Array, Model
from benchfit.explain.weigh import Weighed

DRAWS = 96
GRID = 41


@dataclass(frozen=True)
class RestFinding:
    """Which condition fails in the likeliest build (its sentence), and the range of R in which it would run."""

    code: str
    says: str
    limits: str


def weigh_rest(model: Model, constants: CycleConstants) -> list[Weighed]:
    """Every single cause, weighed by how well it parks the node where it was seen."""
    seen = _seen(model, constants)
    rng = np.random.default_rng(7)
    noise = rng.standard_normal((DRAWS, len(model.parameters)))
    groups: dict[tuple[str, ...], list[tuple[float, Array, Array]]] = {}
    for h in (one for one in singles(model) if len(one.freed) < 2):
        states, logs = _draws(model, h, noise)
        logs = logs + _likelihood(model, states, seen)
        groups.setdefault(h.causes, []).append((h.weight, states, logs))
    found = []
    for causes, variants in groups.items():
        prior = sum(v[0] for v in variants)
        logs = np.concatenate([v[2] + math.log(v[0] / prior) for v in variants])
        states = np.concatenate([v[1] for v in variants])
        total = float(logsumexp(logs)) if np.any(np.isfinite(logs)) else -np.inf
        if not np.isfinite(total):
            zero = np.zeros((len(model.parameters),) * 2)
            found.append(
                Weighed(causes, prior, -np.inf, model.center, zero, model.center, np.inf, 1 if causes else 0)
            )
            continue
        p = np.exp(logs - total)
        mean = p @ states
        away = states - mean
        covariance = (away * p[:, None]).T @ away
        found.append(
            Weighed(causes, prior, total, mean, covariance, states[np.argmax(p)], 0.0, 1 if causes else 0)
        )
    weights = np.array([w.log_evidence + math.log(w.prior) for w in found])
    if not np.any(np.isfinite(weights)):
        return found
    p = np.exp(weights - logsumexp(weights))
    from dataclasses import replace

    return sorted(
        (replace(w, probability=float(q)) for w, q in zip(found, p, strict=True)),
        key=lambda w: (-w.probability, len(w.causes)),
    )


def _draws(model: Model, h: Hypothesis, noise: Array) -> tuple[Array, Array]:
    """States drawn from a hypothesis' prior, and ln of the weight of each."""
    center = model.center
    for index, value in h.shifts:
        center[index] = value
    base = center + noise * model.spread
    if not h.freed:
        return base, np.full(len(base), -math.log(len(base)))
    way = h.freed[0]
    grid = np.linspace(way.low, way.high, GRID)
    density = way.density(grid) * (way.high - way.low) / GRID
    states = np.repeat(base[None, :, :], GRID, axis=0)
    states[:, :, way.index] = _ungauge(grid, np.full(GRID, way.gauge))[:, None]
    with np.errstate(divide="ignore"):
        logs = np.log(density)[:, None] - math.log(len(base)) + np.zeros((GRID, len(base)))
    return states.reshape(-1, states.shape[-1]), logs.reshape(-1)


def _seen(model: Model, constants: CycleConstants) -> dict[str, tuple[float, float]]:
    """What was seen of the rest: level and u, with the scope's gain and offset."""
    spreads = {p.name: p.spread for p in model.parameters}
    found = {}
    for name, kind in (("rest", "timing"), ("output_rest", "output")):
        if name in constants:
            v = constants.value(name)
            u = math.sqrt(
                constants.u(name) ** 2
                + (spreads.get(f"gain:{kind}", 0.0) * v) ** 2
                + spreads.get(f"offset:{kind}", 0.0) ** 2
                + (0.005 * model.swing) ** 2
            )
            found[name] = (v, u)
    for name in ("ramp_asymptote", "ramp_curvature"):
        if name in constants and constants.u(name) < 0.5 * abs(constants.value(name)):
            u = constants.u(name)
            if name == "ramp_asymptote":
                u = math.hypot(u, found.get("rest", (0.0, 0.02 * model.swing))[1])
            else:
                u = math.hypot(u, 0.01 * constants.value(name))
            found[name] = (constants.value(name), u)
    return found


def _failing(conditions: Sequence[Condition], shape: tuple[int, ...]) -> Array:
    """Index of the condition that fails, −1 where none does; the first in the circuit's own order."""
    which = np.full(shape, -1)
    for k, c in reversed(list(enumerate(conditions))):
        which = np.where(np.broadcast_to(c.margin, shape) <= 0, k, which)
    return which


def _likelihood(model: Model, states: Array, seen: dict[str, tuple[float, float]]) -> Array:
    """ln of the likelihood of the rest; −inf where the build would oscillate."""
    view = model.views[0]
    with np.errstate(all="ignore"):
        cycle = model.circuit.cycle(model.parts_of(view, model.values(states)))
    shape = states.shape[:-1]
    which = _failing(cycle.conditions, shape)
    out = np.where(which >= 0, 0.0, -np.inf)
    for k, c in enumerate(cycle.conditions):
        mask = which == k
        if not np.any(mask):
            continue
        level = np.broadcast_to(np.nan if c.rests is None else c.rests, shape)
        term = np.zeros(shape)
        if "rest" in seen:
            term = term + _gauss(level, *seen["rest"])
        if "output_rest" in seen and "high" in cycle.levels:
            # The output parks at the level of the phase that cannot end.
            levels = [np.broadcast_to(cycle.levels[w], shape) for w in ("high", "low")]
            order = [p.output for p in cycle.phases]
            stays = levels[0] if (order[min(k, len(order) - 1)] == "high") else levels[1]
            term = term + _gauss(stays, *seen["output_rest"])
        if "ramp_curvature" in seen:
            kappa = np.broadcast_to(cycle.phases[0].curvature, shape)
            v, u = seen["ramp_curvature"]
            term = term + _gauss(
                np.log(np.maximum(kappa, 1e-300)), math.log(max(v, 1e-300)), max(u / max(v, 1e-300), 0.01)
            )
        out = np.where(mask, term, out)
    return np.where(np.isfinite(out), out, -np.inf)


def _gauss(x: Array, mean: float, u: float) -> Array:
    # A tail heavier than the normal: a resting node is a rough witness (drift, hum).
    z = (x - mean) / u
    return -np.log1p(z * z / 4) * 2.5 - math.log(u)


def finding(model: Model, weighed: Sequence[Weighed]) -> RestFinding:
    """What the likeliest build is seen to do, and the range of its part that would make it run."""
    state = weighed[0].mode
    view = model.views[0]
    with np.errstate(all="ignore"):
        cycle = model.circuit.cycle(model.parts_of(view, model.values(state)))
    which = int(_failing(cycle.conditions, ()))
    if which < 0:
        return RestFinding("no-oscillation", "the node does not oscillate", "")
    condition = cycle.conditions[which]
    return RestFinding(condition.code, condition.says, limits_of(model, state, condition.part))


def limits_of(model: Model, state: Array, part: str) -> str:
    """In words: the range of one part in which the build would run, everything else as it is."""
    from benchfit.quantity import si

    found = running_range(model, state, part)
    if found is None:
        return ""
    low, high, unit = found
    if low is not None and high is not None:
        return f"it would run with {part} between {si(low, unit)} and {si(high, unit)}"
    if high is not None:
        return f"it would run with {part} below {si(high, unit)}"
    return f"it would run with {part} above {si(low, unit)}" if low is not None else ""


def running_range(model: Model, state: Array, part: str) -> tuple[float | None, float | None, str] | None:
    """(lowest, highest, unit) of one part for which every condition holds; None ends are beyond four decades."""
    if part not in model.index:
        return None
    i = model.index[part]
    p = model.parameters[i]
    if p.part is None or p.coordinate != "log" or p.follows is not None:
        return None
    grid = state[i] + np.linspace(-4, 4, 801) * math.log(10)

    def runs(values: Array) -> Array:
        states = np.tile(state, (values.size, 1))
        states[:, i] = values
        with np.errstate(all="ignore"):
            cycle = model.circuit.cycle(model.parts_of(model.views[0], model.values(states)))
        ok = np.ones(values.size, bool)
        for c in cycle.conditions:
            ok &= np.broadcast_to(c.margin, ok.shape) > 0
        return ok

    good = np.flatnonzero(runs(grid))
    if good.size == 0:
        return None

    def edge(inside: float, outside: float) -> float:
        for _ in range(50):
            middle = 0.5 * (inside + outside)
            inside, outside = (middle, outside) if runs(np.array([middle]))[0] else (inside, middle)
        return math.exp(inside)

    low = None if good[0] == 0 else edge(grid[good[0]], grid[good[0] - 1])
    high = None if good[-1] == grid.size - 1 else edge(grid[good[-1]], grid[good[-1] + 1])
    return low, high, p.part.unit
