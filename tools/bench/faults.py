"""What goes wrong: parts off beyond their tolerance, slips, swaps, parasitics; and the tolerances of all the
rest."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from tools.bench.designs import Rng
from tools.bench.simulate import Waves, simulate
from tools.bench.specs import E6, E12, Design, Spec, standard

TIMING = {"op-amp": "R", "triangle": "R", "two-transistor": "R1", "timer-555": "RB"}
LEAST = 0.15


@dataclass(frozen=True)
class Fault:
    """What is wrong: ``causes`` as the record names them, ``values`` the true values of what is off, in
    SI."""

    causes: tuple[str, ...]
    values: Mapping[str, float]
    how: str


def _spread(rng: Rng, spec: Spec, mix: str, move: float) -> float:
    """A value within tolerance; ``move`` shifts (or scales) limits that follow another part."""
    low, high = np.array([spec.low, spec.high])
    if spec.log:
        low, high = np.log(low), np.log(high)
    if mix == "gaussian":
        value = 0.5 * (low + high) + (high - low) / np.sqrt(12) * float(np.clip(rng.standard_normal(), -2.5, 2.5))
    else:
        value = rng.uniform(low, high)
    return float(np.exp(value)) * move if spec.log else float(value) + move


def _moved(spec: Spec, design: Design, values: Mapping[str, float]) -> float:
    """How far the limits of a part have moved with the part that they follow."""
    if not spec.follows:
        return 1.0 if spec.log else 0.0
    if spec.follows == "low":
        now = values["V_breakover"] - values["V_breakback"]
        meant = design.spec("V_breakover").nominal - design.spec("V_breakback").nominal
    else:
        now, meant = values[spec.follows], design.spec(spec.follows).nominal
    return now / meant if spec.log else now - meant


def within(rng: Rng, design: Design, mix: str, off: Mapping[str, float]) -> dict[str, float]:
    """True values of all parts: those in ``off`` as given, the others within tolerance."""
    values: dict[str, float] = {}
    for spec in sorted(design.specs, key=lambda s: bool(s.follows)):
        drawn = _spread(rng, spec, mix, 1.0 if spec.log else 0.0)
        values[spec.name] = off.get(spec.name, drawn)
        if spec.follows and spec.name not in off:
            move = _moved(spec, design, values)
            values[spec.name] = drawn * move if spec.log else drawn + move
    return values


def least(spec: Spec) -> float:
    """The smallest deviation that counts as a fault: 15 %, or three standard uncertainties of a wide
    tolerance."""
    if spec.log:
        half = 0.5 * np.log(spec.high / spec.low)
        return float(max(np.log1p(LEAST), np.sqrt(3) * half))
    return float(max(LEAST * abs(spec.nominal), np.sqrt(3) * 0.5 * (spec.high - spec.low)))


def _off(rng: Rng, spec: Spec) -> tuple[float, str]:
    """One part off beyond its tolerance: a value and how it came about."""
    sign = 1.0 if rng.uniform() < 0.5 else -1.0
    floor = least(spec)
    middle = np.sqrt(spec.low * spec.high) if spec.log else 0.5 * (spec.low + spec.high)
    if spec.kind in ("resistor", "capacitor"):
        style = rng.choice(["any", "decade", "neighbour", "half"], p=[0.6, 0.2, 0.15, 0.05])
        if style == "decade":
            return spec.nominal * 10.0**sign * rng.uniform(0.98, 1.02), "decade"
        if style == "half":
            return spec.nominal * 2.0**sign * rng.uniform(0.98, 1.02), "half"
        if style == "neighbour":
            step = 1.5 if spec.kind == "capacitor" else 1.22
            beside = standard(spec.nominal * step**sign, E6 if spec.kind == "capacitor" else E12)
            if abs(np.log(beside / middle)) > floor:
                return beside * rng.uniform(0.99, 1.01), "neighbour"
    most = {"resistor": np.log(2.5), "capacitor": np.log(2.5), "current": np.log(2.5), "device": np.log(4.0)}
    if spec.log:
        upper = max(float(most.get(spec.kind, np.log(1.6))), floor + 0.1)
        return float(middle * np.exp(sign * rng.uniform(floor, upper))), "value"
    return float(middle + sign * rng.uniform(floor, max(0.5 * abs(spec.nominal), 2 * floor))), "value"


def scale_of(circuit: str, nominal: Mapping[str, float], volts: float) -> float:
    """The resistance (ohm) against which leaks are felt: the timing resistor, or a ramp's volts over its
    current."""
    name = TIMING.get(circuit, "R")
    if name in nominal:
        return nominal[name]
    return nominal["R_charge"] if "R_charge" in nominal else volts / nominal["I_charge"]


def _parasitic(rng: Rng, name: str, design: Design, period: float) -> float:
    """A parasitic's size, log-uniform over what is met."""
    nominal = design.nominal()
    volts = max(abs(nominal.get(k, 0.0)) for k in ("supply", "V_high", "V_low", "V_upper"))
    timing = scale_of(design.circuit, nominal, volts)
    capacitance = nominal.get("C", nominal.get("C1", 0.0))
    # Where a device empties the capacitor, a resistance in its leg is felt against the device's own.
    device = nominal.get("r_lamp", nominal.get("r_discharge"))
    leg = (0.005 * timing, 0.5 * timing) if device is None else (0.03 * device, 0.6 * device)
    low, high = {
        "R_leak": (0.5 * timing, 60 * timing),
        "R_leak_supply": (0.5 * timing, 60 * timing),
        "I_leak": (0.01 * volts / timing, 0.4 * volts / timing),
        "C_stray": (max(3e-12, 0.02 * capacitance), 500e-12),
        "ESR": leg,
        "C_slope": (0.05 / volts, 0.6 / volts),
        "delay": (0.003 * period, 0.2 * period),
        "slew": (3.0, 300.0),
    }[name]
    if low >= high:
        return float("nan")
    size = float(np.exp(rng.uniform(np.log(low), np.log(high))))
    if name == "slew":
        return abs(nominal["V_high"] - nominal["V_low"]) / period * size
    if name == "C_slope" and rng.uniform() < 0.8:
        return -size
    if name == "I_leak" and rng.uniform() < 0.3:
        return -size
    return size


WEIGHTS = {
    "resistor": 3.0,
    "capacitor": 3.0,
    "threshold": 2.0,
    "ratio": 2.0,
    "supply": 1.0,
    "level": 1.0,
    "current": 2.0,
    "device": 0.3,
}


def _single(rng: Rng, design: Design, period: float) -> Fault | None:
    """One fault: a part, a swapped pair, or a parasitic; None where the draw came to nothing."""
    kind = rng.choice(["part", "parasitic", "swap"], p=[0.68, 0.25, 0.07])
    if kind == "swap":
        if not design.swaps:
            return None
        one, two = design.swaps[int(rng.integers(len(design.swaps)))]
        a, b = design.spec(one), design.spec(two)
        if abs(np.log(a.nominal / b.nominal)) < max(least(a), least(b)):
            return None
        values = {one: b.nominal * rng.uniform(0.995, 1.005), two: a.nominal * rng.uniform(0.995, 1.005)}
        return Fault((one, two), values, "swap")
    if kind == "parasitic":
        name = str(rng.choice(design.parasitics))
        value = _parasitic(rng, name, design, period)
        return None if np.isnan(value) else Fault((name,), {name: value}, "parasitic")
    specs = [s for s in design.specs if s.name not in ("I_peak", "I_valley")]
    weights = np.array([WEIGHTS[s.kind] for s in specs])
    spec = specs[int(rng.choice(len(specs), p=weights / weights.sum()))]
    value, how = _off(rng, spec)
    return Fault((spec.name,), {spec.name: value}, how)


def draw_fault(rng: Rng, design: Design, period: float, kind: str) -> Fault:
    """``kind``: "healthy", "single" or "two"."""
    if kind == "healthy":
        return Fault((), {}, "healthy")
    for _ in range(200):
        first = _single(rng, design, period)
        if first is None:
            continue
        if kind == "single":
            return first
        second = _single(rng, design, period)
        if second is None or set(second.causes) & set(first.causes) or "swap" in (first.how, second.how):
            continue
        return Fault(
            (*first.causes, *second.causes),
            {**first.values, **second.values},
            f"{first.how} and {second.how}",
        )
    raise ValueError(f"{design.circuit}: no such fault can be drawn")


def sensible(design: Design, values: Mapping[str, float]) -> bool:
    """Whether the levels are in an order, and as far apart, as a circuit could be built with at all."""
    v = values
    if min(v[s.name] for s in design.specs if s.log) <= 0:
        return False
    if design.circuit == "schmitt-inverter":
        return v["V_low"] < v["V_lower"] < v["V_upper"] - 0.06 * v["V_high"] and v["V_upper"] < v["V_high"]
    if design.circuit == "timer-555":
        return v["k_lower"] < v["k_upper"] - 0.08 and v["k_upper"] < 1
    if design.circuit == "gas-lamp":
        return v["V_maintain"] < v["V_extinguish"] < v["V_strike"] - 5
    if design.circuit == "unijunction":
        return v["V_floor"] < v["V_valley"] < v["eta"] * v["supply"] - 1 and v["eta"] < 0.95
    if design.circuit == "programmable-unijunction":
        gate = v["supply"] * v["RG1"] / (v["RG1"] + v["RG2"])
        return v["V_floor"] < v["V_valley"] < gate - 0.5
    if design.circuit == "trigger-diode":
        return 1 < v["V_breakback"] < v["V_breakover"] - v["V_floor"]
    if design.circuit == "current-ramp":
        return v["V_lower"] < v["V_upper"] - 0.3
    if design.circuit in ("op-amp", "triangle"):
        return v["V_low"] < v["V_high"] - 0.5
    return v.get("V_on", 0.0) <= v.get("V_BE", 1.0)


def matters(design: Design, values: Mapping[str, float], fault: Fault) -> bool:
    """Whether a parasitic can be felt: 2 % of frequency or duty, or of a node's span."""
    if "parasitic" not in fault.how:
        return True
    with_it = simulate(design.circuit, {**values, **fault.values})
    for cause in fault.causes:
        if cause in values:
            continue
        without = simulate(design.circuit, {**values, **{k: v for k, v in fault.values.items() if k != cause}})
        if not (with_it.oscillates and without.oscillates):
            continue
        change = max(abs(np.log(with_it.period / without.period)), abs(with_it.high_share - without.high_share))
        if change < 0.02 and _moved_levels(with_it, without, design.nodes[0]) < 0.02:
            return False
    return True


def _moved_levels(one: Waves, two: Waves, node: str) -> float:
    a = one.at(np.linspace(0, one.period, 800))[node]
    b = two.at(np.linspace(0, two.period, 800))[node]
    return float(max(abs(a.max() - b.max()), abs(a.min() - b.min())) / np.ptp(b))


def restored(fault: Fault, design: Design, true: Mapping[str, float]) -> dict[str, float]:
    """The build with what is off at its nominal, and no parasitic; what follows a part moves back with it."""
    nominal = design.nominal()
    out = {k: nominal.get(k, v) if k in fault.values else v for k, v in true.items()}
    out = {k: v for k, v in out.items() if k in nominal}
    return _carried(fault, design, true, out)


def alone(fault: Fault, design: Design) -> dict[str, float]:
    """The nominal parts with the fault as the only thing amiss; what follows a part moves with it."""
    nominal = design.nominal()
    return _carried(fault, design, nominal, {**nominal, **fault.values})


def _carried(fault: Fault, design: Design, before: Mapping[str, float], after: dict[str, float]) -> dict[str, float]:
    """Values after a change, with the parts that follow others carried along."""
    out = dict(after)
    for spec in design.specs:
        if spec.follows and spec.name not in fault.values:
            was, now = _moved(spec, design, before), _moved(spec, design, after)
            out[spec.name] = before[spec.name] * now / was if spec.log else before[spec.name] + now - was
    return out
