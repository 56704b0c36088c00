"""Builds drawn from the program's own prior table: the mix on which its probabilities must come true.

The odds are read from the program's table; how far a part is off is drawn here, as that table words it: a
resistor or capacitor by a decade, to the value beside it, by two, or to any value (half of them within a
factor of two, half over the whole range); a parasitic over its range, on a logarithmic scale.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from tools.bench.designs import Rng
from tools.bench.faults import Fault
from tools.bench.specs import E6, E12, Design, Spec, standard

NEAR = float(np.log(2))
REACH = {
    "resistor": 2 * np.log(10),
    "capacitor": 2 * np.log(10),
    "current": 2 * np.log(10),
    "device": np.log(6),
}


def draw_prior(rng: Rng, design: Design, period: float) -> Fault:
    """Nothing, one cause or two, as often as the table says."""
    from benchfit.explain import odds

    orders = np.array([odds.HEALTHY, odds.SINGLE, odds.PAIR])
    order = int(rng.choice(3, p=orders / orders.sum()))
    if order == 0:
        return Fault((), {}, "healthy")
    for _ in range(500):
        found = [_cause(rng, design, period) for _ in range(order)]
        causes = [c for f in found for c in f.causes]
        values = {k: v for f in found for k, v in f.values.items()}
        if len(set(causes)) == len(causes) and all(np.isfinite(v) for v in values.values()):
            return Fault(tuple(causes), values, " and ".join(f.how for f in found))
    raise ValueError(f"{design.circuit}: nothing could be drawn from the table")


def _cause(rng: Rng, design: Design, period: float) -> Fault:
    import benchfit
    from benchfit.explain import odds

    circuit = benchfit.circuits.get(design.circuit)
    specs = {s.name: s for s in design.specs if s.high > s.low and s.name not in ("I_peak", "I_valley")}
    weights: dict[tuple[str, ...], float] = {
        (p.name,): odds.weight(p.name, p.kind) for p in circuit.parts if p.name in specs or p.name in design.parasitics
    }
    swaps = [s for s in design.swaps if _apart(specs[s[0]], specs[s[1]])]
    families = [f for f in getattr(circuit, "families", ()) if f[0] in specs and f[1] in specs]
    weights.update({tuple(s): odds.SWAP for s in swaps})
    weights.update({("family", *f): odds.FAMILY for f in families})
    names, sizes = list(weights), np.array(list(weights.values()))
    chosen = names[int(rng.choice(len(names), p=sizes / sizes.sum()))]
    if chosen[0] == "family":
        return Fault(chosen[1:], {n: _any(rng, specs[n]) for n in chosen[1:]}, "family")
    if len(chosen) == 2:
        one, two = chosen
        return Fault(chosen, {one: _within(rng, specs[two]), two: _within(rng, specs[one])}, "swap")
    (name,) = chosen
    if name in specs:
        value, how = _off(rng, specs[name])
        return Fault((name,), {name: value}, how)
    scales: Mapping[str, object] = {k: np.asarray(v) for k, v in {**design.nominal(), "period": period}.items()}
    low, high = circuit.part(name).reach(scales)  # type: ignore[misc]
    size = float(np.exp(rng.uniform(*sorted((np.log(low), np.log(high))))))
    sign = -1.0 if name in ("C_slope", "I_leak") and rng.uniform() < 0.5 else 1.0
    return Fault((name,), {name: sign * size}, "parasitic")


def _apart(a: Spec, b: Spec) -> bool:
    gap = abs(np.log(a.nominal / b.nominal))
    return bool(gap > 0.5 * (np.log(a.high / a.low) + np.log(b.high / b.low)))


def _within(rng: Rng, spec: Spec) -> float:
    return float(np.exp(rng.uniform(np.log(spec.low), np.log(spec.high))))


def _off(rng: Rng, spec: Spec) -> tuple[float, str]:
    from benchfit.explain import odds

    if spec.kind in ("resistor", "capacitor"):
        half = 0.5 * np.log(spec.high / spec.low)
        shares = np.array([odds.SLIP_DECADE, odds.SLIP_NEIGHBOUR, odds.SLIP_HALF, odds.ANY_VALUE])
        how = str(rng.choice(["decade", "neighbour", "half", "value"], p=shares / shares.sum()))
        up = rng.uniform() < 0.5
        step = 1.5 if half > 0.075 else 1.22
        factor = {
            "decade": 10.0,
            "half": 2.0,
            "neighbour": standard(spec.nominal * step, E6 if step > 1.3 else E12) / spec.nominal,
            "value": 1.0,
        }[how]
        if abs(np.log(factor)) > 1.5 * half:
            return _within(rng, spec) * (factor if up else 1 / factor), how
    return _any(rng, spec), "value"


def _any(rng: Rng, spec: Spec) -> float:
    """Any value outside the limits: half within a factor of two (half of itself), half over the whole
    range."""
    if spec.log:
        reach, near = float(max(REACH.get(spec.kind, NEAR), 1.25 * np.log(spec.high / spec.low))), NEAR
        middle = np.log(spec.nominal)
        low, high = np.log(spec.low), np.log(spec.high)
    else:
        half = 0.5 * (spec.high - spec.low)
        plain = spec.kind != "device" and abs(spec.nominal) > 0
        reach, near = (abs(spec.nominal) * 0.75, 0.5 * abs(spec.nominal)) if plain else (6 * half, 3 * half)
        middle, low, high = spec.nominal, spec.low, spec.high
    span = min(near, reach) if rng.uniform() < 0.5 else reach
    for _ in range(1000):
        value = middle + span * rng.uniform(-1, 1)
        if not low <= value <= high:
            return float(np.exp(value)) if spec.log else float(value)
        span = min(1.2 * span, reach) if span < 1.05 * max(high - middle, middle - low) else span
    return float("nan")
