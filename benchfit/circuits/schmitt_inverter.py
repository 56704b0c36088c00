"""Schmitt-inverter astable: one inverting Schmitt gate, R from output to input, C from input to ground."""

from __future__ import annotations

from benchfit.circuits.lag import lag, parasitics, phase
from benchfit.circuits.likeness import close, over, ratio, yes
from benchfit.circuits.model import Circuit, Condition, Cycle, Features, Node, Part, Parts


def _cycle(p: Parts) -> Cycle:
    if "R" in p:
        r_charge = r_discharge = p["R"]
        drop = 0.0 * p["R"]
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
            Condition(
                "never-reaches",
                up.asymptote - upper,
                "the input stops rising below the upper threshold; the output stays high",
                "R" if "R" in p else "R_charge",
                up.asymptote,
            ),
            Condition(
                "never-reaches",
                lower - down.asymptote,
                "the input stops falling above the lower threshold; the output stays low",
                "R" if "R" in p else "R_discharge",
                down.asymptote,
            ),
            Condition(
                "stuck",
                upper - lower,
                "there is no hysteresis left between the thresholds",
                "V_upper",
                0.5 * (upper + lower),
            ),
        ),
        levels={"high": p["V_high"], "low": p["V_low"]},
    )


def _likeness(seen: Features) -> float:
    """Unipolar, node within the supply, one time constant both ways, duty near a half."""
    unipolar = None if seen.low is None or seen.high is None else seen.low > -0.2 * seen.high
    above = None if seen.lower is None else seen.lower > 0
    third = None
    if seen.lower and seen.upper and seen.high:
        third = abs(seen.upper / seen.high - 2 / 3) + abs(seen.lower / seen.high - 1 / 3)
    return (
        0.7
        * yes(unipolar)
        * yes(above)
        * close(ratio(seen.charge_tau, seen.discharge_tau), 1.0, 0.12)
        * close(seen.high_share, 0.49, 0.08)
        * over(seen.charge_share, 0.2, 0.05)
        * over(third, 0.08, 0.04)
        * yes(not seen.jumps)
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
        Part(
            "V_diode",
            "V",
            "drop of a steering diode",
            "linear",
            "0.6 V ± 0.1 V",
            None,
            "15 %",
            "device",
            True,
        ),
        *parasitics("R", "R_charge"),
    ),
    nodes=(
        Node("capacitor", "timing", "the gate's input, where the capacitor sits", True),
        Node("output", "square", "the gate's output"),
    ),
    cycle=_cycle,
    families=(("V_upper", "V_lower"), ("V_high", "V_low")),
    likeness=_likeness,
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
    example={
        "R": "47k 1%",
        "C": "10n 5%",
        "V_upper": "2.9 V 20%",
        "V_lower": "1.9 V 30%",
        "V_high": "5 V 2%",
    },
)
