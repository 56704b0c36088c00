"""The hypotheses: everything within tolerance; one part off; a slip; a swap; a parasitic; two of them."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from benchfit.circuits.model import Part
from benchfit.explain import odds
from benchfit.explain.infer import IDENTITY, INVERSE, MINUS, PLUS
from benchfit.explain.model import Array, Model, Parameter
from benchfit.sheet.preferred import neighbours, series_for

DECADES = 2 * math.log(10.0)
TWO = math.log(2.0)


@dataclass(frozen=True)
class Freed:
    """One parameter that a hypothesis frees over a range, in its gauge.

    ``hole`` is the stretch within tolerance, which belongs to "nothing off". ``log_scale``: the range is measured in
    ln of the value, so that the prior density is uniform in the gauge; else it is uniform in the value.
    """

    index: int
    gauge: int
    low: float
    high: float
    hole: tuple[float, float] | None
    near: float = 0.0

    def density(self, t: Array) -> Array:
        """Prior density at ``t``: half within ``near`` of the nominal, half over the whole range (1 per gauge
        unit)."""
        inside = (t >= self.low) & (t <= self.high)
        gap = (
            0.0 if self.hole is None else max(0.0, min(self.high, self.hole[1]) - max(self.low, self.hole[0]))
        )
        wide = np.where(inside, 1 / max(self.high - self.low - gap, 1e-12), 0.0)
        if self.hole is not None:
            wide = np.where((t > self.hole[0]) & (t < self.hole[1]), 0.0, wide)
        if not self.near or self.hole is None:
            return wide
        middle = 0.5 * (self.hole[0] + self.hole[1])
        close = (np.abs(t - middle) < self.near) & (wide > 0)
        width = max(2 * self.near - gap, 0.2 * self.near)
        return 0.5 * wide + 0.5 * np.where(close, 1 / width, 0.0)


@dataclass(frozen=True)
class Hypothesis:
    """One way in which the build may be.

    ``causes`` empty: nothing off. ``weight``: prior probability. ``shifts`` maps parameter index → new prior center.
    ``freed``: parameters of its own. ``order``: how many independent causes it takes (a swap is one).
    """

    causes: tuple[str, ...]
    weight: float
    shifts: tuple[tuple[int, float], ...] = ()
    freed: tuple[Freed, ...] = ()
    order: int = 1


def _range(p: Parameter, part: Part, model: Model) -> tuple[float, float, float]:
    """Low, high of the coordinate and the near width, for a part that is off by its kind's usual range."""
    half = 0.5 * (p.limits[1] - p.limits[0])
    if p.coordinate == "log":
        reach = {"resistor": DECADES, "capacitor": DECADES, "current": DECADES, "device": math.log(6.0)}.get(
            part.kind, TWO
        )
        reach = max(reach, 2.5 * half)
        return p.nominal - reach, p.nominal + reach, TWO
    if p.follows is not None or part.kind == "device":
        return p.nominal - 6 * half, p.nominal + 6 * half, 3 * half
    scale = abs(p.nominal)
    if scale < 0.1 * model.swing:
        return p.nominal - 0.5 * model.swing, p.nominal + 0.5 * model.swing, 0.25 * model.swing
    low, high = sorted((0.5 * p.nominal, 2 * p.nominal))
    return low, high, 0.5 * scale


def _parasitic(index: int, part: Part, scales: Mapping[str, float]) -> list[Freed]:
    """Grids of a parasitic, on a log scale of its magnitude; both signs for a bend of the capacitance."""
    assert part.reach is not None
    try:
        low, high = part.reach({k: np.asarray(v) for k, v in scales.items()})
    except (KeyError, StopIteration, ValueError):
        return []
    bounds = sorted((math.log(low), math.log(high)))
    if part.coordinate == "inverse":
        return [Freed(index, INVERSE, bounds[0], bounds[1], None)]
    found = [Freed(index, PLUS, bounds[0], bounds[1], None)]
    if part.name in ("C_slope", "I_leak"):
        found.append(Freed(index, MINUS, bounds[0], bounds[1], None))
    return found


def freed_of(model: Model) -> dict[str, list[Freed]]:
    """For every part that may be off: the ways to free it."""
    values = {name: float(v) for name, v in model.values(model.nominal).items()}
    scales = {**values, "period": model.period}
    found: dict[str, list[Freed]] = {}
    for index, p in enumerate(model.parameters):
        if p.part is None:
            continue
        if p.part.kind == "parasitic" and p.spread == 0:
            grids = _parasitic(index, p.part, scales)
            if grids:
                found[p.name] = grids
        elif p.spread > 0:
            low, high, near = _range(p, p.part, model)
            if low < high:
                found[p.name] = [Freed(index, IDENTITY, low, high, p.limits, near)]
    return found


def _slips(model: Model, name: str, weight: float) -> list[Hypothesis]:
    """A wrong decade, a neighbour in the drawer, one of two: the part's tolerance about another nominal."""
    index = model.index[name]
    p = model.parameters[index]
    assert p.part is not None
    if p.part.kind not in ("resistor", "capacitor") or p.follows is not None:
        return []
    half = 0.5 * (p.limits[1] - p.limits[0])
    nominal = math.exp(p.nominal)
    found = []

    def slip(factor: float, share: float) -> None:
        if abs(math.log(factor)) > 1.5 * half:
            found.append(Hypothesis((name,), weight * share, ((index, p.center + math.log(factor)),)))

    for factor in (10.0, 0.1):
        slip(factor, odds.SLIP_DECADE / 2)
    below, above = neighbours(nominal, series_for(max(half, 0.05)))
    for other in (below, above):
        slip(other / nominal, odds.SLIP_NEIGHBOUR / 2)
    for factor in (0.5, 2.0):
        slip(factor, odds.SLIP_HALF / 2)
    return found


def singles(model: Model) -> list[Hypothesis]:
    """Nothing off, and every single cause; prior probabilities sum to 1 − PAIR."""
    freed = freed_of(model)
    swaps = [s for s in model.circuit.swaps if _worth_swapping(model, *s)]
    weights = {name: odds.weight(name, model.parameters[model.index[name]].part.kind) for name in freed}  # type: ignore[union-attr]
    families = [f for f in model.circuit.families if f[0] in freed and f[1] in freed]
    total = sum(weights.values()) + odds.SWAP * len(swaps) + odds.FAMILY * len(families)
    found = [Hypothesis((), odds.HEALTHY, order=0)]
    for name, ways in freed.items():
        weight = odds.SINGLE * weights[name] / total
        slips = _slips(model, name, weight)
        spent = sum(s.weight for s in slips)
        found.extend(slips)
        found.extend(Hypothesis((name,), (weight - spent) / len(ways), (), (way,)) for way in ways)
    for first, second in swaps:
        i, j = model.index[first], model.index[second]
        p, q = model.parameters[i], model.parameters[j]
        found.append(
            Hypothesis((first, second), odds.SINGLE * odds.SWAP / total, ((i, q.center), (j, p.center)))
        )
    for first, second in families:
        both = (freed[first][0], freed[second][0])
        found.append(Hypothesis((first, second), odds.SINGLE * odds.FAMILY / total, (), both))
    return found


def _worth_swapping(model: Model, first: str, second: str) -> bool:
    index = model.index
    if first not in index or second not in index:
        return False
    p, q = model.parameters[index[first]], model.parameters[index[second]]
    if p.follows is not None or q.follows is not None or p.spread == 0 or q.spread == 0:
        return False
    apart = abs(p.nominal - q.nominal)
    return p.coordinate == q.coordinate and apart > 0.5 * (
        p.limits[1] - p.limits[0] + q.limits[1] - q.limits[0]
    )
