"""A timing node as a first-order lag: sources behind resistances, a capacitor, and what loads them both.

Shared by the circuits' files. Every function works on arrays of one broadcast shape.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np

from benchfit.circuits.model import Array, Output, Part, Parts, Phase


@dataclass(frozen=True, eq=False)
class Lag:
    """Thevenin picture of a node.

    Attributes
    ----------
    conductance : Array
        Total conductance (S).
    current : Array
        Total short-circuit current (A).
    capacitance : Array
        Total capacitance with the node at 0 V (F).
    esr : Array
        The leg's share of the node's current times its series resistance: what the node is off the plates by, per
        ampere (Ω).
    slope : Array
        Relative change of the whole capacitance per volt of the node (1/V).
    """

    conductance: Array
    current: Array
    capacitance: Array
    esr: Array | float = 0.0
    slope: Array | float = 0.0

    @property
    def asymptote(self) -> Array:
        """Where the node would settle (V)."""
        return self.current / self.conductance

    @property
    def curvature(self) -> Array:
        """κ = 1/τ (1/s), τ = (1/G + ESR)·C where nothing but the capacitor sits on the node."""
        return self.conductance / ((1 + self.conductance * self.esr) * self.capacitance)

    @property
    def drive(self) -> Array:
        """dv/dt at v = 0 (V/s)."""
        return self.current / ((1 + self.conductance * self.esr) * self.capacitance)


def lag(
    p: Parts,
    *sources: tuple[Array, Array],
    node: str = "capacitor",
    capacitor: str = "C",
    foot: Array | float = 0.0,
) -> Lag:
    """The lag of a node fed by ``sources`` (conductance S, voltage V), with every parasitic that can load it.

    R_leak to ground, R_leak_supply to the supply, I_leak out of the node, C_stray and the probe to ground
    add to what the circuit itself connects (Thevenin; Millman's theorem). ``foot`` is the voltage of the
    capacitor's other plate: C_slope goes by the voltage across it, C·(1 + C_slope·(v − foot)).

    Stray and probe capacitance sit beside the leg with the ESR: once they have settled (ESR·C_stray, short against τ)
    the leg takes C/(C + C_stray + C_probe) of the node's current, and so much of ESR counts.
    """
    supply = p.get("supply", p.get("V_high", np.float64(0.0)))
    to_supply = 1 / p.get("R_leak_supply", np.float64(np.inf))
    conductance = 1 / p["R_leak"] + to_supply + p.get(f"G_probe:{node}", np.float64(0.0))
    current = to_supply * supply - p["I_leak"]
    for g, volts in sources:
        conductance = conductance + g
        current = current + g * volts
    leg = p[capacitor] * (1 - p["C_slope"] * foot)
    capacitance = leg + p["C_stray"] + p.get(f"C_probe:{node}", np.float64(0.0))
    slope = p["C_slope"] * p[capacitor] / capacitance
    return Lag(conductance, current, capacitance, p["ESR"] * leg / capacitance, slope)


def phase(
    now: Lag,
    threshold: Array,
    *,
    rising: bool,
    before: Lag | None = None,
    node: str = "capacitor",
    delay: Array | float = 0.0,
    start: Array | None = None,
    jump: Array | float = 0.0,
    output: Output = "",
) -> Phase:
    """A phase in which ``now`` drives the node; ``before`` drove it until then.

    ``jump`` (V) is by how much the capacitor's far end steps as the phase begins. With a series resistance in the
    capacitor's leg the node steps as the current changes: the capacitor's own voltage v_C = v·(1 + ESR·G) − ESR·I is
    what stays, but for a ``jump`` (V) of its other plate.
    """
    gain: Array | float = 1.0
    if before is not None:
        below = 1 + now.conductance * now.esr
        gain = (1 + before.conductance * now.esr) / below
        jump = (jump + now.esr * (now.current - before.current)) / below
    return Phase(
        node=node,
        rising=rising,
        drive=now.drive,
        curvature=now.curvature,
        threshold=threshold,
        delay=delay,
        start=start,
        gain=gain,
        jump=jump,
        slope=now.slope,
        output=output,
    )


def slewing(swing: Array, slew: Array, curvature: Array) -> Array:
    """Dead time (s) that stands for a drive which takes swing/slew to cross from one level to the other.

    The lag is linear: after a ramp of duration T it is where a single step at t_e would have left it, with
    e^(κ·t_e) the mean of e^(κ·t) over the ramp. So t_e = ln[(e^(κT) − 1)/(κT)]/κ, exactly, as long as
    the next threshold is not met before the ramp is over. T/2 for a pure integrator.
    """
    duration = swing / slew
    y = curvature * duration
    small = np.abs(y) < 1e-3
    safe = np.where(small, 1.0, y)
    exact = np.log(np.expm1(np.minimum(safe, 500.0)) / safe) / np.where(small, 1.0, curvature)
    return np.where(small, duration * (0.5 + y / 24), exact)


Reach = Callable[[Parts], tuple[float, float]]


def _scaled(scale: Callable[[Parts], float], low: float, high: float) -> Reach:
    return lambda p: (low * scale(p), high * scale(p))


def _first(names: tuple[str, ...]) -> Callable[[Parts], float]:
    return lambda p: float(next(p[name] for name in names if name in p))


def _volts(p: Parts) -> float:
    return float(max(abs(v) for n, v in p.items() if n in _VOLTAGES and np.isfinite(v)))


def parasitics(
    *resistor: str,
    scale: Callable[[Parts], float] | None = None,
    leaks: bool = True,
    supply: bool = True,
    delay: bool = True,
    slew: bool = False,
) -> tuple[Part, ...]:
    """The parasitics that can act in a circuit, absent unless the sheet says otherwise.

    ``resistor`` names the part (the first that the build has) that sets the scale on which they matter;
    ``scale`` gives it (Ω) where no part does. ``supply``: there is one to leak to.
    """
    found: list[Part] = []

    def add(
        name: str, unit: str, says: str, coordinate: Literal["log", "linear", "inverse"], reach: Reach
    ) -> None:
        found.append(Part(name, unit, says, coordinate, "absent", None, "0 %", "parasitic", True, reach))

    if leaks:
        ohms = scale if scale is not None else _first(resistor)

        def current(p: Parts) -> tuple[float, float]:
            return 0.003 * _volts(p) / ohms(p), 0.7 * _volts(p) / ohms(p)

        def bend(p: Parts) -> tuple[float, float]:
            return 0.02 / _volts(p), 0.9 / _volts(p)

        add("R_leak", "Ω", "leak from the timing node to ground", "inverse", _scaled(ohms, 0.3, 300.0))
        if supply:
            says = "leak from the timing node to the supply"
            add("R_leak_supply", "Ω", says, "inverse", _scaled(ohms, 0.3, 300.0))
        says = "constant current out of the timing node: input bias, device leakage"
        add("I_leak", "A", says, "linear", current)
        says = "stray capacitance of the timing node to ground"
        add("C_stray", "F", says, "linear", lambda p: (2e-12, 500e-12))
        add("ESR", "Ω", "series resistance in the capacitor's leg", "linear", _scaled(ohms, 0.002, 1.0))
        add("C_slope", "1/V", "relative change of the capacitance per volt", "linear", bend)
    if delay:
        period = _scaled(_first(("period",)), 0.001, 0.3)
        add("delay", "s", "dead time between crossing and switching", "linear", period)
    if slew:

        def slope(p: Parts) -> tuple[float, float]:
            swing = abs(float(p["V_high"]) - float(p["V_low"]))
            return swing / (0.4 * float(p["period"])), swing / (0.002 * float(p["period"]))

        add("slew", "V/s", "slew rate of the output", "inverse", slope)
    return tuple(found)


_VOLTAGES = ("supply", "V_high", "V_low", "V_upper")
