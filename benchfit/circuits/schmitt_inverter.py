"""Schmitt-inverter astable: one inverting Schmitt gate, R from output to input, C from input to ground."""

from __future__ import annotations

import numpy as np

from benchfit.circuits.lag import lag, parasitics, phase
from benchfit.circuits.model import Circuit, Condition, Cycle, Node, Part, Parts


def _cycle(p: Parts) -> Cycle:
    if "R" in p:
        r_charge = r_discharge = p["R"]
        drop = np.float64(0.0)
    else:
        r_charge, r_discharge, drop = p["R_charge"], p["R_discharge"], p["V_diode"]
    up = lag(p, (1 / r_charge, p["V_high"] - drop))
    down = lag(p, (1 / r_discharge, p["V_low"] + drop))
    upper, lower = p["V_upper"], p["V_lower"]
    return Cycle(
        phases=(
            phase(up, upper, rising=True, before=down, delay=p["delay"], output="high"),
            phase(down, lower, rising=False, before=up, delay=p["delay"], output="low"),
        ),
        conditions=(
            Condition("never-reaches", up.asymptote - upper,
                      "the input stops rising below the upper threshold; the output stays high",
                      "R" if "R" in p else "R_charge", up.asymptote),
            Condition("never-reaches", lower - down.asymptote,
                      "the input stops falling above the lower threshold; the output stays low",
                      "R" if "R" in p else "R_discharge", down.asymptote),
            Condition("stuck", upper - lower, "there is no hysteresis left between the thresholds",
                      "V_upper", 0.5 * (upper + lower)),
        ),
        levels={"high": p["V_high"], "low": p["V_low"]},
    )


CIRCUIT = Circuit(
    name="schmitt-inverter",
    title="Schmitt-inverter astable (R from output to input, C from input to ground)",
    parts=(
        Part("R", "Ω", "timing resistor, output to input"),
        Part("C", "F", "timing capacitor, input to ground", tolerance="10 %", kind="capacitor"),
        Part("V_upper", "V", "threshold of the rising input", tolerance="15 %", kind="threshold"),
        Part("V_lower", "V", "threshold of the falling input", tolerance="15 %", kind="threshold"),
        Part("V_high", "V", "output high level", "linear", None, None, "5 %", "level"),
        Part("V_low", "V", "output low level", "linear", "0 V ± 0.1 V", None, "5 %", "level"),
        Part("R_charge", "Ω", "timing resistor of the charge, with steering diodes"),
        Part("R_discharge", "Ω", "timing resistor of the discharge, with steering diodes"),
        Part("V_diode", "V", "drop of a steering diode", "linear", "0.6 V ± 0.1 V", None, "15 %", "device", True),
        *parasitics("R", "R_charge"),
    ),
    nodes=(
        Node("capacitor", "timing", "the gate's input, where the capacitor sits", True),
        Node("output", "square", "the gate's output"),
    ),
    cycle=_cycle,
    swaps=(("R_charge", "R_discharge"),),
    alternatives=((("R",), ("R_charge", "R_discharge", "V_diode")),),
    equations=(
        "charge:    A = V_high, τ = R·C, until V_upper",
        "discharge: A = V_low,  τ = R·C, until V_lower",
        "T = R·C·{ln[(V_high − V_lower)/(V_high − V_upper)] + ln[(V_upper − V_low)/(V_lower − V_low)]}",
    ),
    drawing="""\
       ┌────── R ──────┐
       │   ┌───────┐   │
  C ───┴───┤ hyst. ├o──┴── output
  │        └───────┘
 gnd""",
    example={"R": "47k 1%", "C": "10n 5%", "V_upper": "2.9 V 20%", "V_lower": "1.9 V 30%", "V_high": "5 V 2%"},
)
