"""A timing node as a first-order lag: sources behind resistances, a capacitor, and what loads them both.

Shared by the circuits' files. Every function works on arrays of one broadcast shape.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.circuits.model import Array, Part, Parts, Phase


@dataclass(frozen=True, eq=False)
class Lag:
    """Thevenin picture of a node: total conductance (S), total short-circuit current (A), capacitance (F),
    ESR (Ω)."""

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
        """κ = 1/τ (1/s), τ = (1/G + ESR)·C."""
        return self.conductance / ((1 + self.conductance * self.esr) * self.capacitance)

    @property
    def drive(self) -> Array:
        """dv/dt at v = 0 (V/s)."""
        return self.current / ((1 + self.conductance * self.esr) * self.capacitance)


def lag(p: Parts, *sources: tuple[Array, Array], node: str = "capacitor", capacitor: str = "C") -> Lag:
    """The lag of a node fed by ``sources`` (conductance S, voltage V), with every parasitic that can load it.

    R_leak to ground, R_leak_supply to the supply, I_leak out of the node, C_stray and the probe to ground
    add to what the circuit itself connects (Thevenin; Millman's theorem).
    """
    supply = p.get("supply", p.get("V_high", np.float64(0.0)))
    to_supply = 1 / p["R_leak_supply"]
    conductance = 1 / p["R_leak"] + to_supply + p.get(f"G_probe:{node}", np.float64(0.0))
    current = to_supply * supply - p["I_leak"]
    for g, volts in sources:
        conductance = conductance + g
        current = current + g * volts
    capacitance = p[capacitor] + p["C_stray"] + p.get(f"C_probe:{node}", np.float64(0.0))
    return Lag(conductance, current, capacitance, p["ESR"], p["C_slope"])


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
    output: str = "",
) -> Phase:
    """A phase in which ``now`` drives the node; ``before`` drove it until then.

    With a series resistance in the capacitor's leg the node steps as the current changes: the capacitor's own
    voltage v_C = v·(1 + ESR·G) − ESR·I is what stays.
    """
    gain: Array | float = 1.0
    if before is not None:
        below = 1 + now.conductance * now.esr
        gain = (1 + before.conductance * now.esr) / below
        jump = jump + now.esr * (now.current - before.current) / below
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
        output=output,  # type: ignore[arg-type]
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


def _scaled(names: tuple[str, ...], low: float, high: float):  # type: ignore[no-untyped-def]
    def reach(p: Parts) -> tuple[float, float]:
        scale = float(next(p[name] for name in names if name in p))
        return low * scale, high * scale

    return reach


def parasitics(
    *resistor: str, leaks: bool = True, delay: bool = True, slew: bool = False
) -> tuple[Part, ...]:
    """The parasitics that can act in a circuit, absent unless the sheet says otherwise.

    ``resistor`` names the part (the first that the build has) that sets the scale on which they matter.
    """
    found: list[Part] = []

    def add(name: str, unit: str, says: str, coordinate: str, reach) -> None:  # type: ignore[no-untyped-def]
        found.append(Part(name, unit, says, coordinate, "absent", None, "0 %", "parasitic", True, reach))  # type: ignore[arg-type]

    if leaks:

        def volts(p: Parts) -> float:
            return float(max(abs(v) for n, v in p.items() if n in _VOLTAGES and np.isfinite(v)))

        def current(p: Parts) -> tuple[float, float]:
            least, most = _scaled(resistor, 1.0, 1.0)(p)
            return 0.003 * volts(p) / least, 0.7 * volts(p) / most

        def bend(p: Parts) -> tuple[float, float]:
            return 0.02 / volts(p), 0.9 / volts(p)

        add("R_leak", "Ω", "leak from the timing node to ground", "inverse", _scaled(resistor, 0.3, 300.0))
        add(
            "R_leak_supply",
            "Ω",
            "leak from the timing node to the supply",
            "inverse",
            _scaled(resistor, 0.3, 300.0),
        )
        add(
            "I_leak",
            "A",
            "constant current out of the timing node: input bias, device leakage",
            "linear",
            current,
        )
        add(
            "C_stray",
            "F",
            "stray capacitance of the timing node to ground",
            "linear",
            lambda p: (2e-12, 500e-12),
        )
        add("ESR", "Ω", "series resistance in the capacitor's leg", "linear", _scaled(resistor, 0.002, 1.0))
        add("C_slope", "1/V", "relative change of the capacitance per volt", "linear", bend)
    if delay:
        add(
            "delay",
            "s",
            "dead time between crossing and switching",
            "linear",
            _scaled(("period",), 0.001, 0.3),
        )
    if slew:

        def slope(p: Parts) -> tuple[float, float]:
            swing = abs(float(p["V_high"]) - float(p["V_low"]))
            return swing / (0.4 * float(p["period"])), swing / (0.002 * float(p["period"]))

        add("slew", "V/s", "slew rate of the output", "inverse", slope)
    return tuple(found)


_VOLTAGES = ("supply", "V_high", "V_low", "V_upper")
ABSENT = {
    "R_leak": np.inf,
    "R_leak_supply": np.inf,
    "I_leak": 0.0,
    "C_stray": 0.0,
    "ESR": 0.0,
    "C_slope": 0.0,
    "delay": 0.0,
    "slew": np.inf,
}
