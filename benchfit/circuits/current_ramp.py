"""Constant-current ramp: a current source fills the capacitor, a switch empties it."""

from __future__ import annotations

import numpy as np

from benchfit.circuits.lag import lag, parasitics, phase
from benchfit.circuits.likeness import over, under, yes
from benchfit.circuits.model import Circuit, Condition, Cycle, Features, Node, Part, Parts

_LEAST = 1e-30  # S; keeps the asymptote of a ramp that nothing bends out of the way


def _cycle(p: Parts) -> Cycle:
    # A current source is a source of voltage I·r behind r, with r left out of the node's conductance.
    source = dict(p)
    source["I_leak"] = p["I_leak"] - p["I_charge"]
    up = lag(source)
    down = lag(source, (1 / p["r_discharge"], 0.0 * p["I_charge"]))
    upper, lower = p["V_upper"], p["V_lower"]
    return Cycle(
        phases=(
            phase(up, upper, rising=True, before=down, delay=p["delay"]),
            phase(down, lower, rising=False, before=up),
        ),
        conditions=(
            Condition(
                "never-reaches",
                up.current - up.conductance * upper,
                "the ramp stops below the upper threshold: what leaks takes all the current",
                "I_charge",
                np.where(up.conductance > 0, up.current / np.maximum(up.conductance, _LEAST), upper),
            ),
            Condition(
                "latched",
                lower - down.asymptote,
                "the switch cannot pull the capacitor below the lower threshold",
                "I_charge",
                down.asymptote,
            ),
            Condition("stuck", upper - lower, "the two thresholds coincide", "V_upper", upper),
        ),
    )


def _likeness(seen: Features) -> float:
    """A straight ramp and a short fall."""
    single = seen.high_share is None
    return (
        0.8
        * yes(single)
        * over(seen.charge_share, 0.93, 0.02)
        * yes(not seen.jumps)
        * under(seen.charge_bend, 0.12, 0.03)
    )


CIRCUIT = Circuit(
    name="current-ramp",
    title="constant-current ramp (current source into C, switch across C)",
    parts=(
        Part("I_charge", "A", "charging current", tolerance="5 %", kind="current"),
        Part("C", "F", "timing capacitor", tolerance="10 %", kind="capacitor"),
        Part("V_upper", "V", "where the switch closes", tolerance="5 %", kind="threshold"),
        Part("V_lower", "V", "where it opens again", tolerance="10 %", kind="threshold"),
        Part("r_discharge", "Ω", "the closed switch", "log", "50 Ω ± 60 %", None, "60 %", "device"),
        *parasitics(scale=lambda p: float(p["V_upper"] / p["I_charge"]), supply=False),
    ),
    nodes=(Node("capacitor", "timing", "the capacitor", True),),
    cycle=_cycle,
    families=(("V_upper", "V_lower"),),
    likeness=_likeness,
    swaps=(("V_upper", "V_lower"),),
    equations=(
        "charge:    slope I_charge/C until V_upper",
        "discharge: A = I_charge·r_discharge, τ = r_discharge·C, until V_lower",
        "f ≈ I_charge/[C·(V_upper − V_lower)]",
    ),
    drawing="""\
  current source ──┬──────┐
                   C    switch
                   │      │
                  gnd    gnd""",
    example={"I_charge": "1 mA 5%", "C": "100n 5%", "V_upper": "6 V 5%", "V_lower": "1 V 10%"},
)
