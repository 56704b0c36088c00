"""Builds with something wrong (or not): drawn, built on the bench, looked at, and their truth written down.

A draw is a function of its seed alone. Tolerances are drawn within their limits (mix "rectangular") or with
the same standard deviation from a Gaussian (mix "gaussian"); the parts' own fault comes on top for one or two
of them.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from tools.bench.chain import Input, Record, measure
from tools.bench.designs import DESIGNS, E6, E12, Design, Rng, Spec, standard, written
from tools.bench.simulate import Waves, simulate

TIMING = {"op-amp": "R", "triangle": "R", "two-transistor": "R1", "timer-555": "RB"}
PROBES = {"x10": (10e6, 12e-12), "x1": (1e6, 100e-12)}
LEAST = 0.15


@dataclass(frozen=True)
class Fault:
    """What is wrong: ``causes`` as the record names them, ``values`` the true values of what is off, in
    SI."""

    causes: tuple[str, ...]
    values: Mapping[str, float]
    how: str


@dataclass(frozen=True, eq=False)
class Build:
    """One build as it stands on the bench, with the truth about it.

    ``true`` holds every part's true value (parasitics that are there included), ``probe`` what hung on the
    nodes. ``frequency``, ``duty``: with the probe; ``lifted``: frequency without it; ``restored``: frequency
    with the faulty parts at their nominals, the probe on. NaN where the circuit does not run.
    """

    seed: int
    design: Design
    true: Mapping[str, float]
    fault: Fault
    nodes: tuple[str, ...]
    probe: Mapping[str, tuple[float, float]]
    sheet: str
    record: Record
    names: Mapping[str, str]
    waves: Waves
    target: float
    frequency: float
    duty: float
    lifted: float
    restored: float
    readings: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    gains: Mapping[str, float] = field(default_factory=dict)
    offsets: Mapping[str, float] = field(default_factory=dict)
    inputs: Mapping[str, Input] = field(default_factory=dict)


def _spread(rng: Rng, spec: Spec, mix: str, move: float) -> float:
    """A value within tolerance; ``move`` shifts (or scales) limits that follow another part."""
    low, high = np.array([spec.low, spec.high])
    if spec.log:
        low, high = np.log(low), np.log(high)
    if mix == "gaussian":
        value = 0.5 * (low + high) + (high - low) / np.sqrt(12) * float(
            np.clip(rng.standard_normal(), -2.5, 2.5)
        )
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
        upper = max(most.get(spec.kind, np.log(1.6)), floor + 0.1)
        return float(middle * np.exp(sign * rng.uniform(floor, upper))), "value"
    return float(middle + sign * rng.uniform(floor, max(0.5 * abs(spec.nominal), 2 * floor))), "value"


def _parasitic(rng: Rng, name: str, design: Design, period: float) -> float:
    """A parasitic's size, log-uniform over what is met."""
    nominal = design.nominal()
    timing = nominal.get(TIMING.get(design.circuit, "R"), nominal.get("R_charge"))
    volts = max(abs(nominal.get(k, 0.0)) for k in ("supply", "V_high", "V_low", "V_upper"))
    if timing is None:
        timing = volts / nominal["I_charge"]
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
    """Whether the levels are in an order in which a circuit could be built at all."""
    v = values
    lowest = min(v[s.name] for s in design.specs if s.log)
    if lowest <= 0:
        return False
    if design.circuit == "schmitt-inverter":
        return v["V_low"] < v["V_lower"] < v["V_upper"] < v["V_high"]
    if design.circuit == "timer-555":
        return v["k_lower"] < v["k_upper"] < 1
    if design.circuit == "gas-lamp":
        return v["V_maintain"] < v["V_extinguish"] < v["V_strike"]
    if design.circuit == "unijunction":
        return v["V_floor"] < v["V_valley"] < v["eta"] * v["supply"] and v["eta"] < 0.95
    if design.circuit == "programmable-unijunction":
        return v["V_floor"] < v["V_valley"]
    if design.circuit == "trigger-diode":
        return v["V_breakback"] > 0 and v["V_floor"] < v["V_breakover"] - v["V_breakback"]
    if design.circuit == "current-ramp":
        return v["V_lower"] < v["V_upper"]
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
        without = simulate(
            design.circuit, {**values, **{k: v for k, v in fault.values.items() if k != cause}}
        )
        if not (with_it.oscillates and without.oscillates):
            continue
        change = max(
            abs(np.log(with_it.period / without.period)), abs(with_it.high_share - without.high_share)
        )
        if change < 0.02 and _moved_levels(with_it, without, design.nodes[0]) < 0.02:
            return False
    return True


def _moved_levels(one: Waves, two: Waves, node: str) -> float:
    a = one.at(np.linspace(0, one.period, 800))[node]
    b = two.at(np.linspace(0, two.period, 800))[node]
    return float(max(abs(a.max() - b.max()), abs(a.min() - b.min())) / np.ptp(b))


def restored(fault: Fault, design: Design, true: Mapping[str, float]) -> dict[str, float]:
    """The build with what is off at its nominal, and no parasitic."""
    out = {k: v for k, v in true.items() if k not in fault.values}
    nominal = design.nominal()
    return {**out, **{k: nominal[k] for k in fault.values if k in nominal}}


def _frequency(
    design: Design, values: Mapping[str, float], probe: Mapping[str, tuple[float, float]]
) -> float:
    return 1.0 / simulate(design.circuit, values, probe=probe).period


def draw(
    circuit: str, seed: int, *, mix: str = "rectangular", kind: str | None = None, rough: bool = False
) -> Build:
    """One build of a circuit. ``rough``: devices that are not as simple as their models (bends, soft
    clamps)."""
    rng = np.random.default_rng([seed, sorted(DESIGNS).index(circuit)])
    kind = kind or str(rng.choice(["healthy", "single", "two"], p=[0.25, 0.6, 0.15]))
    for _ in range(500):
        design = DESIGNS[circuit](rng)
        meant = simulate(circuit, design.nominal())
        if not meant.oscillates:
            continue
        fault = draw_fault(rng, design, meant.period, kind)
        true = {**within(rng, design, mix, fault.values), **fault.values}
        if not sensible(design, true):
            continue
        nodes, probe = _clips(rng, design)
        trial = simulate(circuit, true, probe=probe)
        runs = trial.oscillates
        if not runs and rng.uniform() > 0.25:
            continue
        if runs and not trial.period > 1e-3 * meant.period:
            continue
        parts = {k: v for k, v in true.items() if design.nominal().get(k) is not None}
        if runs and not matters(design, parts, fault):
            continue
        return _built(rng, seed, design, meant, fault, true, nodes, probe, rough)
    raise ValueError(f"{circuit}: no build could be drawn with seed {seed}")


def _clips(rng: Rng, design: Design) -> tuple[tuple[str, ...], dict[str, tuple[float, float]]]:
    """Which nodes are looked at, and with what."""
    timing, output = design.nodes[0], (design.nodes[2] if len(design.nodes) > 2 else design.nodes[-1])
    if timing == output:
        nodes: tuple[str, ...] = (timing,)
    else:
        choice = str(rng.choice(["timing", "output", "both"], p=[0.3, 0.25, 0.45]))
        nodes = {"timing": (timing,), "output": (output,), "both": (timing, output)}[choice]
    kind = str(rng.choice(["x10", "x1", "none"], p=[0.65, 0.1, 0.25]))
    probe = {n: PROBES[kind] for n in nodes if n in design.loads and kind in PROBES}
    return nodes, probe


def _options(rng: Rng, circuit: str, rough: bool) -> dict[str, float]:
    if not rough:
        return {}
    if circuit == "gas-lamp":
        return {"current_bend": rng.uniform(0.0, 0.25)}
    if circuit in ("unijunction", "programmable-unijunction", "trigger-diode"):
        return {"valley_bend": rng.uniform(0.0, 0.6)}
    if circuit == "gate-pair":
        return {"soft": rng.uniform(0.02, 0.06)}
    if circuit == "timer-555":
        return {"r_switch": rng.uniform(0.0, 25.0)}
    return {}


def _built(
    rng: Rng,
    seed: int,
    design: Design,
    meant: Waves,
    fault: Fault,
    true: dict[str, float],
    nodes: tuple[str, ...],
    probe: dict[str, tuple[float, float]],
    rough: bool,
) -> Build:
    options = _options(rng, design.circuit, rough)
    if design.circuit == "timer-555":
        bipolar = rng.uniform() < 0.5
        options.update(
            {
                "output_drop": rng.uniform(1.1, 1.5) if bipolar else rng.uniform(0.0, 0.05),
                "output_floor": rng.uniform(0.0, 0.1),
            }
        )
    ideal = simulate(design.circuit, true, probe=probe, **options)
    cycles, samples = float(np.exp(rng.uniform(np.log(2.4), np.log(14)))), int(rng.uniform(1500, 8000))
    waves, interval, begin = _run(rng, seed, design, true, probe, ideal, cycles, samples, options)
    inputs, scope = _scope(rng, waves, nodes)
    ppm = 50.0 if not scope else 25.0
    record = measure(
        waves, inputs, interval, samples, timebase=1e-6 * rng.uniform(-ppm, ppm), begin=begin, seed=seed
    )
    readings = _readings(rng, design, true)
    names = {n: f"CH{i + 1}" for i, n in enumerate(nodes)}
    target = float(f"{1 / meant.period:.4g}")
    text = sheet_text(design, target, names, probe, readings, scope)
    return Build(
        seed=seed,
        design=design,
        true=true,
        fault=fault,
        nodes=nodes,
        probe=probe,
        sheet=text,
        record=record,
        names=names,
        waves=waves,
        target=target,
        frequency=1 / ideal.period,
        duty=ideal.high_share,
        lifted=_frequency(design, true, {}),
        restored=_frequency(design, restored(fault, design, true), probe),
        readings=readings,
        gains={n: i.gain for n, i in inputs.items()},
        offsets={n: i.offset for n, i in inputs.items()},
        inputs=inputs,
    )


def _run(
    rng: Rng,
    seed: int,
    design: Design,
    true: Mapping[str, float],
    probe: Mapping[str, tuple[float, float]],
    ideal: Waves,
    cycles: float,
    samples: int,
    options: Mapping[str, float],
) -> tuple[Waves, float, float | None]:
    """The waves to be recorded, the interval, and where the record begins."""
    if not ideal.oscillates:
        powered = rng.uniform() < 0.7
        waves = simulate(
            design.circuit, true, probe=probe, start="from rest" if powered else "running", **options
        )
        length = max(waves.span, 1e-3) * rng.uniform(0.15, 0.6)
        return waves, float(f"{length / samples:.3g}"), -0.08 * length if powered else 0.0
    interval = float(f"{cycles * ideal.period / samples:.3g}")
    noise = 0.0
    if rng.uniform() < 0.4:
        swing = np.ptp(ideal.at(np.linspace(0, ideal.period, 400))[design.nodes[0]])
        noise = swing * float(np.exp(rng.uniform(np.log(1e-4), np.log(2e-3))))
    lag = (
        ideal.period * rng.uniform(0.0, 0.01) if design.circuit == "gas-lamp" and rng.uniform() < 0.5 else 0.0
    )
    if not noise and not lag:
        return ideal, interval, None
    try:
        waves = simulate(
            design.circuit,
            true,
            probe=probe,
            cycles=int(1.3 * cycles) + 4,
            seed=seed,
            threshold_noise=noise,
            lag=lag,
            **options,
        )
    except RuntimeError:
        return ideal, interval, None
    return waves, interval, None


def _scope(rng: Rng, waves: Waves, nodes: tuple[str, ...]) -> tuple[dict[str, Input], dict[str, str]]:
    """Each channel's errors, within the limits that the sheet states (or the contract's defaults)."""
    stated = rng.uniform() < 0.5
    gain = float(rng.choice([1.0, 2.0, 3.0])) if stated else 3.0
    times = np.linspace(0, waves.period if waves.oscillates else waves.span, 600)
    seen = waves.at(np.sort(times))
    spans = {n: float(np.ptp(seen[n])) for n in nodes}
    limit = float(f"{0.015 * max(spans.values()):.2g}") if stated else 0.0
    inputs = {}
    for node in nodes:
        offset = limit if stated else 0.02 * spans[node]
        inputs[node] = Input(
            gain=0.01 * gain * rng.uniform(-1, 1),
            offset=offset * rng.uniform(-1, 1),
            noise_divisions=float(np.exp(rng.uniform(np.log(0.015), np.log(0.08)))),
        )
    scope = (
        {"gain": f"{gain:g}%", "offset": f"{written(limit)} V", "timebase": "25ppm"}
        if stated and limit
        else {}
    )
    return inputs, scope


def _readings(rng: Rng, design: Design, true: Mapping[str, float]) -> dict[str, tuple[float, float]]:
    """Meter readings: name to (value read, the meter's limit in per cent)."""
    if rng.uniform() > 0.35:
        return {}
    meters = {"resistor": 0.5, "capacitor": 2.0, "supply": 0.3}
    can = [s for s in design.specs if s.kind in meters and s.text is not None]
    chosen = rng.permutation(len(can))[: int(rng.integers(1, 3))]
    return {
        can[i].name: (
            true[can[i].name] * (1 + 0.01 * meters[can[i].kind] * rng.uniform(-1, 1)),
            meters[can[i].kind],
        )
        for i in sorted(chosen)
    }


def sheet_text(
    design: Design,
    target: float,
    names: Mapping[str, str],
    probe: Mapping[str, tuple[float, float]],
    readings: Mapping[str, tuple[float, float]],
    scope: Mapping[str, str],
) -> str:
    """The build sheet as its owner would have written it."""
    lines = [
        f'circuit = "{design.circuit}"',
        "",
        "[target]",
        f'frequency = "{written(target)} Hz 5%"',
        "",
        "[parts]",
    ]
    lines += [f'{s.name} = "{s.text}"' for s in design.specs if s.text is not None]
    if design.circuit == "gate-pair" and all(s.name != "R_series" for s in design.specs):
        lines.append('R_series = "none"')
    if readings:
        lines += ["", "[readings]"]
        lines += [f'{name} = "{value:.8g} ±{limit:g}%"' for name, (value, limit) in readings.items()]
    lines += ["", "[channels]", *(f'{node} = "{name}"' for node, name in names.items())]
    for node, (resistance, capacitance) in probe.items():
        lines += [
            "",
            f"[probe.{node}]",
            f'resistance = "{resistance:g}"',
            f'capacitance = "{capacitance * 1e12:g}p"',
        ]
    if scope:
        lines += ["", "[scope]", *(f'{key} = "{value}"' for key, value in scope.items())]
    return "\n".join(lines) + "\n"


def without(build: Build, cause: str) -> Build:
    """The same build with one cause named away (for checks of the study itself)."""
    values = {k: v for k, v in build.true.items() if k != cause}
    return replace(build, true=values)
