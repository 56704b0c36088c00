"""Seeded families of captures, each with one condition that benches produce, and with what is true of it.

Everything is integrated (``tools.bench``), then measured by its chain without gain and offset errors, so that the
record's own uncertainty is what the constants are held to.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from benchfit.capture.model import Capture, Channel
from benchfit.cycle import Assignment
from tools.bench.chain import Input, Record, screen
from tools.bench.chain import measure as record
from tools.bench.simulate import Waves, simulate

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Case:
    """One capture of a family.

    ``truth`` holds what is known exactly (names as in CycleConstants); ``code`` the remark that must come, or ""
    where none may.
    """

    capture: Capture
    assignments: tuple[Assignment, ...]
    truth: Mapping[str, float]
    code: str = ""


Family = Callable[[int], Case]


def resolution(values: Array) -> float:
    """Smallest step between different values."""
    steps = np.diff(np.unique(values))
    return float(steps.min()) if steps.size else 0.0


def to_capture(seen: Mapping[str, Array], interval: float, start: float = 0.0) -> Capture:
    """Channels named by their nodes."""
    return Capture(
        "family", interval, start, tuple(Channel(n, "V", v, resolution(v)) for n, v in seen.items())
    )


def nodes(*names: str, shape: str = "timing", coupling: str = "dc") -> tuple[Assignment, ...]:
    """Assignments of channels that bear their nodes' names."""
    return tuple(
        Assignment(n, n, "square" if n == "output" else shape, coupling=coupling)  # type: ignore[arg-type]
        for n in names
    )


def op_amp_parts(rng: np.random.Generator) -> dict[str, float]:
    """Random parts of an astable; levels apart, so that its halves differ."""
    high, low = rng.uniform(8, 14), -rng.uniform(6, 14)
    top, bottom = 10e3, 10e3 * rng.uniform(0.4, 2.0)
    r, c = 10 ** rng.uniform(3.7, 5), 10 ** rng.uniform(-8.5, -6)
    return {"R": r, "C": c, "R_top": top, "R_bottom": bottom, "V_high": high, "V_low": low}


def op_amp(rng: np.random.Generator, **more: float) -> tuple[Waves, dict[str, float]]:
    """An astable of random parts and what is true of it."""
    parts = op_amp_parts(rng)
    waves = simulate("op-amp", {**parts, **more})
    return waves, op_amp_truth(parts, waves)


def op_amp_truth(parts: Mapping[str, float], waves: Waves) -> dict[str, float]:
    """Constants of an ideal astable."""
    share, kappa = parts["R_bottom"] / (parts["R_top"] + parts["R_bottom"]), 1 / (parts["R"] * parts["C"])
    high, low = parts["V_high"], parts["V_low"]
    return {
        "period": waves.period, "charge_share": waves.high_share, "upper": high * share, "lower": low * share,
        "charge_curvature": kappa, "discharge_curvature": kappa, "high": high, "low": low,
        "high_share": waves.high_share,
    }


def lamp(rng: np.random.Generator, cycles: int, lag: float = 0.0, **more: float) -> tuple[Waves, dict[str, float]]:
    """A neon flasher of random parts; ``lag`` as a share of the period."""
    strike, out = rng.uniform(75, 95), rng.uniform(52, 62)
    r, c, supply = 10 ** rng.uniform(5.7, 6.3), 10 ** rng.uniform(-7.5, -6.5), rng.uniform(110, 150)
    parts = {"supply": supply, "R": r, "C": c, "V_strike": strike, "V_extinguish": out, "V_maintain": out - 5.0,
             "r_lamp": 5e3, **more}
    waves = simulate("gas-lamp", parts, cycles=cycles, lag=lag * r * c, seed=int(rng.integers(1 << 30)))
    truth = {"period": waves.period, "lower": out, "charge_curvature": 1 / (r * c)}
    if lag == 0:
        truth["upper"] = strike
    return waves, truth


def look(waves: Waves, rng: np.random.Generator, cycles: float, per_cycle: float, *names: str,
         noise: float = 0.03, **settings: object) -> tuple[Capture, Record]:
    """Record some nodes on an ideal 8-bit scope with ``noise`` divisions of noise."""
    setting = Input(noise_divisions=noise, **settings)  # type: ignore[arg-type]
    interval = waves.period / per_cycle
    seen = record(
        waves, dict.fromkeys(names, setting), interval, int(cycles * per_cycle), seed=int(rng.integers(1 << 30))
    )
    return to_capture(seen.channels, interval), seen


def _shape(rng: np.random.Generator, most: float = 25.0) -> tuple[float, float]:
    return float(np.exp(rng.uniform(np.log(4.2), np.log(most)))), float(rng.uniform(120, 600))


def clean_both(seed: int) -> Case:
    """Capacitor and output of a healthy astable."""
    rng = np.random.default_rng(seed)
    waves, truth = op_amp(rng)
    return Case(look(waves, rng, *_shape(rng), "capacitor", "output")[0], nodes("capacitor", "output"), truth)


def clean_capacitor(seed: int) -> Case:
    """The capacitor's node alone."""
    rng = np.random.default_rng(seed)
    waves, truth = op_amp(rng)
    return Case(look(waves, rng, *_shape(rng), "capacitor")[0], nodes("capacitor"), truth)


def clean_output(seed: int) -> Case:
    """The output alone."""
    rng = np.random.default_rng(seed)
    waves, truth = op_amp(rng)
    return Case(look(waves, rng, *_shape(rng), "output")[0], nodes("output"), truth)


def clean_lamp(seed: int) -> Case:
    """A lamp that strikes late now and then, its fall resolved."""
    rng = np.random.default_rng(seed)
    cycles, _ = _shape(rng)
    waves, truth = lamp(rng, int(cycles) + 4, lag=0.01)
    per_cycle = rng.uniform(1200, 2500)
    return Case(look(waves, rng, cycles, per_cycle, "capacitor")[0], nodes("capacitor"), truth)


def startup_op_amp(seed: int) -> Case:
    """The 555's or the astable's first charge begins at 0 V."""
    rng = np.random.default_rng(seed)
    r, c = 10 ** rng.uniform(3.5, 5.5), 10 ** rng.uniform(-8, -6)
    parts = {"supply": 9.0, "RA": r, "RB": 2 * r, "C": c}
    running = simulate("timer-555", parts)
    cycles, per_cycle = _shape(rng, 12.0)
    waves = simulate("timer-555", parts, start="from rest", cycles=int(cycles) + 4)
    interval = running.period / per_cycle
    names = ("capacitor", "output") if seed % 2 else ("capacitor",)
    before = rng.uniform(0.0, 0.5) * running.period * (seed % 3 > 0)
    seen = record(waves, {n: Input(noise_divisions=0.03) for n in names}, interval, int(cycles * per_cycle),
                  seed=seed, begin=-before)
    truth = {"period": running.period, "charge_share": running.high_share, "charge_curvature": 1 / (3 * r * c),
             "upper": 6.0, "lower": 3.0}
    return Case(to_capture(seen.channels, interval), nodes(*names), truth, "startup")


def startup_lamp(seed: int) -> Case:
    """A lamp's first charge begins at 0 V."""
    rng = np.random.default_rng(seed)
    running, truth = lamp(rng, 3)
    cycles, _ = _shape(rng, 10.0)
    waves = simulate("gas-lamp", {k: float(v[0]) for k, v in _parts_of(running).items()}, start="from rest",
                     cycles=int(cycles) + 4)
    interval = running.period / rng.uniform(800, 2000)
    seen = record(waves, {"capacitor": Input(noise_divisions=0.03)}, interval, int(cycles * running.period / interval),
                  seed=seed, begin=-rng.uniform(0.0, 0.5) * running.period * (seed % 3 > 0))
    return Case(to_capture(seen.channels, interval), nodes("capacitor"), truth, "startup")


def _parts_of(waves: Waves) -> dict[str, Array]:
    names = ("supply", "R", "C", "V_strike", "V_extinguish", "V_maintain", "r_lamp")
    known = waves.values.__dict__
    return {n: known[n] for n in names if n in known}


def startup_output(seed: int) -> Case:
    """A 555's output alone: its first high is longer by half."""
    case = startup_op_amp(2 * seed + 1)
    only = Capture("family", case.capture.interval, 0.0, case.capture.channels[1:])
    truth = {"period": case.truth["period"], "high_share": case.truth["charge_share"]}
    return Case(only, nodes("output"), truth, "startup")


def clipped(seed: int) -> Case:
    """The top or the bottom of the capacitor's wave is beyond the range."""
    rng = np.random.default_rng(seed)
    waves, truth = op_amp(rng)
    swing = truth["upper"] - truth["lower"]
    cut = rng.uniform(0.05, 0.2) * swing
    low, high = screen(np.array([truth["lower"], truth["upper"]]))
    bounds = (low, truth["upper"] - cut) if seed % 2 else (truth["lower"] + cut, high)
    capture, _ = look(waves, rng, *_shape(rng), "capacitor", range=bounds)
    return Case(capture, nodes("capacitor"), truth, "clipped")


def coarse(seed: int) -> Case:
    """6 to 11 samples a cycle."""
    rng = np.random.default_rng(seed)
    waves, truth = op_amp(rng)
    capture, _ = look(waves, rng, rng.uniform(20, 200), rng.uniform(6, 11.5), "capacitor")
    return Case(capture, nodes("capacitor"), truth, "coarse-sampling")


def fast_flyback(seed: int) -> Case:
    """A flyback within a sample."""
    rng = np.random.default_rng(seed)
    cycles, per_cycle = _shape(rng)
    waves, truth = lamp(rng, int(cycles) + 4, r_lamp=rng.uniform(50, 500))
    return Case(look(waves, rng, cycles, per_cycle, "capacitor")[0], nodes("capacitor"), truth, "coarse-sampling")


def few(seed: int) -> Case:
    """Two to three cycles."""
    rng = np.random.default_rng(seed)
    waves, truth = op_amp(rng)
    names = (("capacitor",), ("output",), ("capacitor", "output"))[seed % 3]
    capture, _ = look(waves, rng, rng.uniform(2.1, 2.95), rng.uniform(200, 800), *names)
    return Case(capture, nodes(*names), truth, "few-cycles")


def quantised(seed: int) -> Case:
    """Noise of less than half a step."""
    rng = np.random.default_rng(seed)
    waves, truth = op_amp(rng)
    noise = rng.uniform(0.0, 0.4) / 25.0
    capture, _ = look(waves, rng, *_shape(rng), "capacitor", noise=noise)
    return Case(capture, nodes("capacitor"), truth, "quantised")


def alternating(seed: int) -> Case:
    """Captured a.c.-coupled, and declared so."""
    rng = np.random.default_rng(seed)
    waves, truth = op_amp(rng)
    while waves.period > 0.02:
        waves, truth = op_amp(rng)
    corner = rng.uniform(2.0, 10.0)
    capture, _ = look(waves, rng, *_shape(rng), "capacitor", coupling="ac", corner=corner)
    known = {n: truth[n] for n in ("period", "charge_share", "charge_curvature", "discharge_curvature")}
    return Case(capture, nodes("capacitor", coupling="ac"), known, "ac-coupled")


def _warped(seed: int, warp: Callable[[Array, float], Array], code: str, least: float) -> Case:
    rng = np.random.default_rng(seed)
    waves, truth = op_amp(rng)
    cycles, per_cycle = rng.uniform(least, 4 * least), rng.uniform(100, 300)
    interval = waves.period / per_cycle
    t = interval * np.arange(int(cycles * per_cycle)) + rng.uniform(0, waves.period)
    volts = waves.at(np.mod(warp(t - t[0], float(t[-1] - t[0])) + t[0], waves.period))["capacitor"]
    low, high = screen(volts)
    quantum = (high - low) / 256
    seen = np.round((volts + 0.03 * (high - low) / 10.24 * rng.standard_normal(t.size)) / quantum) * quantum
    known = {n: truth[n] for n in ("upper", "lower")}
    return Case(to_capture({"capacitor": seen}, interval), nodes("capacitor"), known, code)


def drifting(seed: int) -> Case:
    """The period drifts by 0.3 % to 3 % from start to end."""
    rng = np.random.default_rng(seed + 1)
    total = rng.choice([-1, 1]) * 10 ** rng.uniform(-2.5, -1.5)
    return _warped(seed, lambda t, span: t - 0.5 * total * t**2 / span, "drifting", 12.0)


def rippled(seed: int) -> Case:
    """The period swings by 0.3 % to 2 %."""
    rng = np.random.default_rng(seed + 1)
    size, turns = 10 ** rng.uniform(-2.5, -1.7), rng.uniform(4, 12)

    def warp(t: Array, span: float) -> Array:
        w = 2 * np.pi * turns / span
        return t + size / w * np.sin(w * t)

    return _warped(seed, warp, "ripple", 30.0)


def missing(seed: int) -> Case:
    """The output misses a pulse or makes one too many."""
    case = clean_output(seed)
    rng = np.random.default_rng(seed + 3)
    channel = case.capture.channels[0]
    v = channel.values.copy()
    middle = 0.5 * (case.truth["high"] + case.truth["low"])
    edges = np.flatnonzero(np.diff((v > middle).astype(int)))
    pick = int(rng.integers(3, max(4, edges.size - 3)))
    a, b = int(edges[min(pick, edges.size - 2)]), int(edges[min(pick + 1, edges.size - 1)])
    # The whole half-cycle between two edges takes its neighbours' level.
    v[a + 1 : b + 1] = v[a - (b - a) + 1 : a + 1][: b - a] if a > b - a else v[a]
    known = {n: case.truth[n] for n in ("period", "high_share")}
    capture = replace(case.capture, channels=(replace(channel, values=v),))
    return Case(capture, case.assignments, known, "missing-cycles")


def glitches(seed: int) -> Case:
    """Spikes of a few samples on the capacitor's node: named or not, the constants must hold."""
    case = clean_capacitor(seed)
    rng = np.random.default_rng(seed + 4)
    channel = case.capture.channels[0]
    v = channel.values.copy()
    swing = case.truth["upper"] - case.truth["lower"]
    for at in rng.integers(5, v.size - 5, max(3, v.size // 800)):
        v[at : at + int(rng.integers(1, 4))] += rng.choice([-1, 1]) * rng.uniform(0.2, 0.9) * swing
    capture = replace(case.capture, channels=(replace(channel, values=v),))
    return Case(capture, case.assignments, case.truth, "glitches")


def ringing(seed: int) -> Case:
    """Every turn is followed by a ring that dies out within a few per cent of the cycle."""
    case = clean_both(seed)
    rng = np.random.default_rng(seed + 5)
    output, capacitor = case.capture.channels[1].values, case.capture.channels[0]
    edges = np.flatnonzero(np.abs(np.diff(output)) > 0.5 * np.ptp(output))
    per_cycle = case.truth["period"] / case.capture.interval
    k = np.arange(int(0.06 * per_cycle))
    ring = 0.08 * np.exp(-k / (0.01 * per_cycle)) * np.cos(2 * np.pi * k / max(0.008 * per_cycle, 2.5))
    v = capacitor.values.copy()
    swing = case.truth["upper"] - case.truth["lower"]
    for at in edges:
        part = v[at + 1 : at + 1 + k.size]
        part += rng.uniform(0.8, 1.2) * swing * ring[: part.size] * np.sign(output[at + 1] - output[at])
    capture = replace(case.capture, channels=(replace(capacitor, values=v), case.capture.channels[1]))
    return Case(capture, case.assignments, case.truth, "ringing")


def inverted(seed: int) -> Case:
    """The probe was clipped the wrong way round."""
    case = clean_capacitor(seed)
    channel = case.capture.channels[0]
    turned = replace(channel, values=-channel.values)
    t = case.truth
    truth = {"period": t["period"], "charge_share": 1 - t["charge_share"], "upper": -t["lower"], "lower": -t["upper"],
             "charge_curvature": t["discharge_curvature"], "discharge_curvature": t["charge_curvature"]}
    return Case(replace(case.capture, channels=(turned,)), case.assignments, truth)


def slewing(seed: int) -> Case:
    """An output so slow that the capacitor's corners are round: 2 % to 8 % of the cycle."""
    rng = np.random.default_rng(seed)
    probe, truth = op_amp(np.random.default_rng(seed))
    swing = truth["high"] - truth["low"]
    waves, truth = op_amp(np.random.default_rng(seed), slew=swing / (rng.uniform(0.01, 0.04) * probe.period))
    truth = {"period": waves.period, "charge_curvature": truth["charge_curvature"],
             "discharge_curvature": truth["discharge_curvature"]}
    cycles, per_cycle = _shape(rng)
    return Case(look(waves, rng, cycles, per_cycle, "capacitor", "output")[0], nodes("capacitor", "output"), truth)


FAMILIES: dict[str, Family] = {
    "clean, both": clean_both, "clean, capacitor": clean_capacitor, "clean, output": clean_output,
    "clean, lamp": clean_lamp, "start-up, 555": startup_op_amp, "start-up, lamp": startup_lamp,
    "start-up, output": startup_output, "clipped": clipped, "coarse": coarse, "fast flyback": fast_flyback,
    "few cycles": few, "quantised": quantised, "a.c.-coupled": alternating, "drifting": drifting, "ripple": rippled,
    "missing or double": missing, "glitches": glitches, "ringing": ringing, "inverted": inverted, "slewing": slewing,
}
