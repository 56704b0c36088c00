"""Builds with something wrong (or not): drawn, built on the bench, looked at, and their truth written down.

A draw is a function of its seed alone. Tolerances are drawn within their limits (mix "rectangular") or with
the same standard deviation from a Gaussian (mix "gaussian"); the parts' own fault comes on top for one or two
of them.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from tools.bench.chain import Input, Record, measure
from tools.bench.designs import DESIGNS, Rng
from tools.bench.faults import Fault, alone, draw_fault, matters, restored, sensible, within
from tools.bench.prior import draw_prior
from tools.bench.simulate import Waves, simulate
from tools.bench.specs import Design, written

PROBES = {"x10": (10e6, 12e-12), "x1": (1e6, 100e-12)}


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
    nominal: float
    alone: float
    readings: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    gains: Mapping[str, float] = field(default_factory=dict)
    offsets: Mapping[str, float] = field(default_factory=dict)
    inputs: Mapping[str, Input] = field(default_factory=dict)


def _frequency(design: Design, values: Mapping[str, float], probe: Mapping[str, tuple[float, float]]) -> float:
    return 1.0 / simulate(design.circuit, values, probe=probe).period


def draw(circuit: str, seed: int, *, mix: str = "rectangular", kind: str | None = None, rough: bool = False) -> Build:
    """One build of a circuit. ``mix``: "rectangular", "gaussian", or "prior" (the program's own table).
    ``rough``: devices that are not as simple as their models (bends, soft clamps)."""
    rng = np.random.default_rng([seed, sorted(DESIGNS).index(circuit)])
    kind = kind or str(rng.choice(["healthy", "single", "two"], p=[0.25, 0.6, 0.15]))
    for _ in range(500):
        design = DESIGNS[circuit](rng)
        meant = simulate(circuit, design.nominal())
        if not meant.oscillates:
            continue
        fault = draw_prior(rng, design, meant.period) if mix == "prior" else draw_fault(rng, design, meant.period, kind)
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
        if runs and mix != "prior" and not matters(design, parts, fault):
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


def _options(rng: Rng, circuit: str, rough: bool) -> dict[str, Any]:
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
    record = measure(waves, inputs, interval, samples, timebase=1e-6 * rng.uniform(-ppm, ppm), begin=begin, seed=seed)
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
        nominal=_frequency(design, design.nominal(), probe),
        alone=_frequency(design, alone(fault, design), probe),
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
    options: Mapping[str, Any],
) -> tuple[Waves, float, float | None]:
    """The waves to be recorded, the interval, and where the record begins."""
    if not ideal.oscillates:
        powered = rng.uniform() < 0.7
        waves = simulate(design.circuit, true, probe=probe, start="from rest" if powered else "running", **options)
        length = max(waves.span, 1e-3) * rng.uniform(0.15, 0.6)
        return waves, float(f"{length / samples:.3g}"), -0.08 * length if powered else 0.0
    interval = float(f"{cycles * ideal.period / samples:.3g}")
    noise = 0.0
    if rng.uniform() < 0.4:
        swing = np.ptp(ideal.at(np.linspace(0, ideal.period, 400))[design.nodes[0]])
        noise = swing * float(np.exp(rng.uniform(np.log(1e-4), np.log(2e-3))))
    lag = ideal.period * rng.uniform(0.0, 0.01) if design.circuit == "gas-lamp" and rng.uniform() < 0.5 else 0.0
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
    scope = {"gain": f"{gain:g}%", "offset": f"{written(limit)} V", "timebase": "25ppm"} if stated and limit else {}
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
