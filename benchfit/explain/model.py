"""The forward model: from parts, probe and scope to the constants that the captures would give.

A state is a vector of coordinates, one a parameter: ln of a part, the part itself where zero or a sign is possible,
1/x of a resistance that is absent at infinity; and the scope's nuisances. Many states are evaluated at once.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from benchfit.circuits.model import Circuit, Part
from benchfit.circuits.solve import constants as circuit_constants
from benchfit.circuits.solve import shares
from benchfit.cycle.constants import CycleConstants

Array = NDArray[np.float64]

TIMES = ("period", "rise_time", "fall_time")
VOLTAGES = ("upper", "lower", "charge_start", "discharge_start", "charge_bow", "discharge_bow", "high", "low")
EDGES = ("rise_time", "fall_time")
DIFFERENCES = ("charge_bow", "discharge_bow", "charge_jump", "discharge_jump")
OUTPUT = ("high", "low")

# What a closed form leaves out of a real circuit, as a share of the swing, of the period, of a phase's bend. It
# bounds how hard a capture may argue, however quiet it is. Ours (judgement): a tenth of a scope's own accuracy.
FLOOR_VOLTS = 0.0015
FLOOR_PERIOD = 5e-4
FLOOR_SHARE = 4e-4
FLOOR_BEND = 0.004
FLOOR_BEND_RELATIVE = 0.004
FLOOR_EDGE = 0.05

# The corner of an a.c. coupled input lies at 2 to 10 Hz (common practice).
COUPLING_CORNER = 10.0


@dataclass(frozen=True)
class Parameter:
    """One coordinate of the state with its Gaussian prior.

    ``center`` and ``spread`` are the prior's mean and standard deviation in the coordinate, ``nominal`` and
    ``limits`` the sheet's. A part whose default follows others has the coordinate of its difference from (linear) or
    ratio to (log) that base.
    """

    name: str
    coordinate: str
    center: float
    spread: float
    nominal: float
    limits: tuple[float, float]
    part: Part | None = None
    follows: Callable[[Mapping[str, Array]], Array] | None = None


@dataclass(frozen=True)
class View:
    """The conditions under which one capture was taken.

    ``timing`` names the timing node that was probed ("" where none was), ``shape`` its kind; ``loads`` maps node →
    (conductance S, capacitance F) of the probes that load it. ``swaps`` maps a part's name to the parameter that
    takes its place in this capture; ``added_C`` and ``added_R`` name parameters.
    """

    timing: str
    shape: str
    loads: Mapping[str, tuple[Array | float, Array | float]] = field(default_factory=dict)
    swaps: Mapping[str, str] = field(default_factory=dict)
    added_C: str = ""
    added_R: str = ""
    capacitor: str = "C"

    def without_probe(self) -> View:
        """The same, with every probe lifted."""
        return View(self.timing, self.shape, {}, self.swaps, self.added_C, self.added_R, self.capacitor)


@dataclass(frozen=True)
class Observation:
    """One number that was measured: ``name`` of the cycle's vocabulary in capture ``view``, or a reading.

    ``kind``: "constant", "reading" (of the parameter ``name``) or "counter" (frequency or duty of the first capture).
    ``value`` and its place in the covariance are in the transformed scale (ln for times; bend per phase for κ).
    """

    view: int
    name: str
    kind: str
    value: float
    scale: float = 1.0


@dataclass(frozen=True, eq=False)
class Model:
    """Circuit, parameters, captures and observations: everything that inference needs.

    ``covariance`` (m, m) belongs to the observations' values.
    """

    circuit: Circuit
    parameters: tuple[Parameter, ...]
    views: tuple[View, ...]
    observations: tuple[Observation, ...]
    covariance: Array
    swing: float
    period: float

    @property
    def index(self) -> dict[str, int]:
        """Parameter name → position in the state."""
        return {p.name: i for i, p in enumerate(self.parameters)}

    @property
    def center(self) -> Array:
        """Prior means, shape (n,)."""
        return np.array([p.center for p in self.parameters])

    @property
    def spread(self) -> Array:
        """Prior standard deviations, shape (n,); 0 where exact or absent."""
        return np.array([p.spread for p in self.parameters])

    @property
    def nominal(self) -> Array:
        """The sheet's nominals as a state, shape (n,)."""
        return np.array([p.nominal for p in self.parameters])

    @property
    def observed(self) -> Array:
        """Observed values, shape (m,)."""
        return np.array([o.value for o in self.observations])

    def values(self, state: Array) -> dict[str, Array]:
        """Parts (SI) of states of shape (..., n): name → array of shape (...)."""
        found: dict[str, Array] = {}
        for last in (False, True):
            for i, p in enumerate(self.parameters):
                if (p.follows is not None) is not last:
                    continue
                x = state[..., i]
                if p.coordinate == "log":
                    x = np.exp(x)
                elif p.coordinate == "inverse":
                    with np.errstate(divide="ignore"):
                        x = 1 / x
                if p.follows is not None:
                    base = p.follows(found)
                    x = base * x if p.coordinate == "log" else base + x
                found[p.name] = x
        return found

    def parts_of(self, view: View, values: Mapping[str, Array]) -> dict[str, Array]:
        """The parts as they were while ``view`` was captured, with the probe's load."""
        parts = {name: values[replacement] for name, replacement in view.swaps.items()}
        parts = {**values, **parts}
        for node, (conductance, capacitance) in view.loads.items():
            parts[f"G_probe:{node}"] = np.asarray(conductance, float)
            parts[f"C_probe:{node}"] = np.asarray(capacitance, float)
        if view.added_C:
            parts[view.capacitor] = parts[view.capacitor] + values[view.added_C]
        if view.added_R and "R_leak" in parts:
            parts["R_leak"] = 1 / (1 / parts["R_leak"] + 1 / values[view.added_R])
        return parts

    def constants_of(self, view: View, values: Mapping[str, Array]) -> dict[str, Array]:
        """The cycle constants of ``view`` on an ideal scope, by the cycle stage's names."""
        with np.errstate(all="ignore"):
            found = circuit_constants(self.circuit.cycle(self.parts_of(view, values)), view.timing)
        for rising, word in (("charge", "upper"), ("discharge", "lower")):
            if f"{rising}_end" in found:
                found[word] = found[f"{rising}_end"]
        if "charge_start" in found and "discharge_start" in found:
            found["charge_jump"] = found["charge_start"] - found["lower"]
            found["discharge_jump"] = found["discharge_start"] - found["upper"]
        if view.shape == "holding" and "charge_start" in found:
            found["lower"] = found["charge_start"]
        return found

    def predict(self, state: Array) -> Array:
        """What would be observed: states (..., n) → (..., m); NaN where a state does not oscillate."""
        values = self.values(state)
        seen = [self.constants_of(view, values) for view in self.views]
        clock = 1 + values["timebase"]
        out = np.empty((*state.shape[:-1], len(self.observations)))
        for j, o in enumerate(self.observations):
            if o.kind == "reading":
                out[..., j] = state[..., self.index[o.name]] if o.scale == 1.0 else values[o.name]
                continue
            x = seen[o.view].get("period" if o.name == "frequency" else o.name, np.nan)
            if o.kind == "counter":
                out[..., j] = -np.log(x) if o.name == "frequency" else x
            elif o.name in EDGES:
                # An output that nothing slows has edges of its own making: they say nothing (see
                # unexplained_edges).
                out[..., j] = np.where(np.asarray(x) > 0, np.log(np.maximum(x * clock, 1e-300)), o.value)
            elif o.name in TIMES:
                out[..., j] = np.log(x * clock)
            elif o.name in VOLTAGES or o.name in DIFFERENCES:
                node = "output" if o.name in OUTPUT else "timing"
                offset = 0.0 if o.name in DIFFERENCES else values.get(f"offset:{node}", 0.0)
                out[..., j] = (1 + values.get(f"gain:{node}", 0.0)) * x + offset
            elif o.name.endswith("curvature"):
                out[..., j] = x / clock * o.scale
            else:
                out[..., j] = x
        return out

    def unexplained_edges(self, state: Array) -> Array:
        """ln of the density with which edges of no stated cause have just these durations, against FLOOR_EDGE's bell.

        A slew rate explains resolved edges; without one they may be anything over four decades. Shape (...).
        """
        seen = [o for o in self.observations if o.name in EDGES]
        if not seen or "slew" not in self.index:
            return np.zeros(state.shape[:-1])
        chance = math.log(FLOOR_EDGE * math.sqrt(2 * math.pi) / (4 * math.log(10)))
        return np.where(state[..., self.index["slew"]] > 0, 0.0, chance)

    def frequency_and_duty(self, state: Array, view: View) -> tuple[Array, Array]:
        """Frequency (Hz) and duty cycle of states (..., n) under ``view``."""
        node = view.timing or next((n.name for n in self.circuit.nodes if n.shape != "square"), "")
        with np.errstate(all="ignore"):
            found = shares(self.circuit.cycle(self.parts_of(view, self.values(state))), node)
        return 1 / found["period"], found.get("high_share", found["charge_share"])


def observe(
    constants: CycleConstants, view: int, predicted: Sequence[str]
) -> tuple[list[Observation], Array]:
    """Observations of one capture with their covariance, floors included.

    Only what both the record and the circuit speak of is taken. Times go in as logarithms, curvatures as bend over
    their phase (κ·t), so that every floor is a plain share.
    """
    names = [n for n in constants.names if n in predicted and np.isfinite(constants.value(n))]
    rows = [constants.names.index(n) for n in names]
    raw = constants.covariance[np.ix_(rows, rows)]
    period = constants.value("period")
    swing = _swing(constants)
    droop = _droop(constants)
    scales, values, floors = [], [], []
    for name in names:
        x = constants.value(name)
        scale, value = 1.0, x
        if name in TIMES:
            scale, value = 1 / x, float(np.log(x))
            floor = FLOOR_PERIOD if name == "period" else FLOOR_EDGE
        elif name in VOLTAGES:
            floor = math.hypot(
                FLOOR_VOLTS * swing, droop["output" if name in OUTPUT else "timing"] * swing / 2
            )
        elif name.endswith("curvature"):
            share = constants.value("charge_share") if "charge_share" in constants else 0.5
            scale = period * (share if name.startswith("charge") else 1 - share)
            value = x * scale
            floor = math.hypot(
                FLOOR_BEND + FLOOR_BEND_RELATIVE * abs(value), droop["timing"] * (1 + abs(value))
            )
        else:
            # Shares near 0 or 1 belong to a flyback; its own length is then known better than the floor.
            short = min(x, 1 - x)
            floor = min(FLOOR_SHARE, 0.05 * short + 1e-6)
            if short * period < 3 * constants.interval:
                floor = max(floor, 0.3 * constants.interval / period)
        scales.append(scale)
        values.append(value)
        floors.append(floor)
    s = np.array(scales)
    covariance = raw * np.outer(s, s) + np.diag(np.square(floors))
    found = [
        Observation(view, n, "constant", v, k if n.endswith("curvature") else 1.0)
        for n, v, k in zip(names, values, scales, strict=True)
    ]
    quiet = _no_jumps(constants, predicted, swing)
    if not quiet:
        return found, covariance
    found += [Observation(view, name, "constant", 0.0) for name in quiet]
    size = len(names)
    larger = np.zeros((len(found), len(found)))
    larger[:size, :size] = covariance
    larger[range(size, len(found)), range(size, len(found))] = [u * u for u in quiet.values()]
    return found, larger


def _no_jumps(constants: CycleConstants, predicted: Sequence[str], swing: float) -> dict[str, float]:
    """Corners at which no step was seen, with the u of that "none": a series resistance would have made one."""
    if "charge_jump" not in predicted or "charge_start" in constants or "discharge_start" in constants:
        return {}
    if not all(n in constants for n in ("upper", "lower", "charge_share")):
        return {}
    noise = next((x for node, x in constants.noise.items() if not _is_output(node)), 0.0)
    share = constants.value("charge_share")
    fastest = swing / (constants.value("period") * max(min(share, 1 - share), 1e-6))
    u = math.hypot(2 * FLOOR_VOLTS * swing, 2 * noise, min(fastest * constants.interval, 0.5 * swing))
    return {"charge_jump": u, "discharge_jump": u}


def _is_output(node: str) -> bool:
    return node == "output" or node.startswith("collector")


def _droop(constants: CycleConstants) -> dict[str, float]:
    """Standard uncertainty of what an a.c. coupled input does to half a cycle, as a share of the swing.

    Its high-pass takes 2π·f_c·t of a level in the time t; f_c is anything up to COUPLING_CORNER (a rectangle).
    """
    taken = min(2 * math.pi * COUPLING_CORNER * constants.value("period") / 2, 1.0) / math.sqrt(3.0)
    found = {"timing": 0.0, "output": 0.0}
    for node, coupling in constants.coupling.items():
        if coupling == "ac":
            found["output" if _is_output(node) else "timing"] = taken
    return found


def _swing(constants: CycleConstants) -> float:
    levels = [
        constants.value(n) for n in ("upper", "lower", "charge_start", "discharge_start") if n in constants
    ]
    if len(levels) < 2:
        levels = [constants.value(n) for n in ("high", "low") if n in constants]
    return float(max(levels) - min(levels)) if len(levels) > 1 else 1.0
