"""555-type timer, astable: the capacitor charges through RA + RB and discharges through RB."""

from __future__ import annotations

import numpy as np

from benchfit.circuits.lag import lag, parasitics, phase
from benchfit.circuits.likeness import close, over, ratio, under, yes
from benchfit.circuits.model import Circuit, Condition, Cycle, Features, Node, Part, Parts


def _cycle(p: Parts) -> Cycle:
    supply = p["supply"]
    upper, lower = p["k_upper"] * supply, p["k_lower"] * supply
    if "V_diode" in p:
        up = lag(p, (1 / p["RA"], supply - p["V_diode"]))
    else:
        up = lag(p, (1 / (p["RA"] + p["RB"]), supply))
    down = lag(p, (1 / p["RB"], p["V_discharge"]))
    delay = p["delay"]
    fastest = np.log(3.0) / np.log(2.0)
    rushed = delay > 0.2 / up.curvature / fastest
    return Cycle(
        phases=(
            phase(up, upper, rising=True, before=down, delay=delay, output="high"),
            phase(down, lower, rising=False, before=up, delay=delay, output="low"),
        ),
        conditions=(
            Condition(
                "never-reaches",
                up.asymptote - upper,
                "the capacitor stops charging below the upper threshold; the output stays high",
                "RA",
                up.asymptote,
            ),
            Condition(
                "never-reaches",
                lower - down.asymptote,
                "the capacitor stops discharging above the lower threshold; the output stays low",
                "RB",
                down.asymptote,
            ),
            Condition("stuck", upper - lower, "the two thresholds coincide", "k_upper", upper),
        ),
        remarks=(("fast", np.asarray(rushed), "the timer's own delay is a large part of the cycle"),),
    )


def _likeness(seen: Features) -> float:
    """The lower level half of the upper one, the charge slower than the discharge by (RA + RB)/RB, duty above a
    half."""
    unipolar = None if seen.low is None or seen.high is None else seen.low > -0.2 * seen.high
    halves = ratio(seen.lower, seen.upper)
    return (
        0.8
        * close(halves, 0.5, 0.07)
        * over(ratio(seen.charge_tau, seen.discharge_tau), 1.0, 0.03)
        * yes(unipolar)
        * over(seen.high_share, 0.5, 0.02)
        * under(seen.charge_share, 0.985, 0.004)
        * close(seen.discharge_bend, 0.7, 0.2)
        * yes(not seen.jumps)
    )


CIRCUIT = Circuit(
    name="timer-555",
    title="555-type timer, astable (RA to the discharge pin, RB on to the capacitor)",
    parts=(
        Part("supply", "V", "supply at the pin", tolerance="5 %", kind="supply"),
        Part("RA", "Ω", "from the supply to the discharge pin"),
        Part("RB", "Ω", "from the discharge pin to the capacitor"),
        Part("C", "F", "timing capacitor to ground", tolerance="10 %", kind="capacitor"),
        Part(
            "k_upper",
            "1",
            "upper threshold over the supply",
            "log",
            "0.666666666666666667 ± 5 %",
            None,
            "5 %",
            "threshold",
        ),
        Part(
            "k_lower",
            "1",
            "lower threshold over the supply",
            "log",
            "0.333333333333333333 ± 8 %",
            None,
            "8 %",
            "threshold",
        ),
        Part(
            "V_discharge",
            "V",
            "discharge pin while it conducts",
            "linear",
            "0.05 V -100 %/+300 %",
            None,
            "100 %",
            "device",
        ),
        Part(
            "V_diode",
            "V",
            "drop of the steering diode across RB",
            "linear",
            None,
            None,
            "15 %",
            "device",
            True,
        ),
        *parasitics("RA"),
    ),
    nodes=(
        Node("capacitor", "timing", "the threshold and trigger pins, where the capacitor sits", True),
        Node("output", "square", "the output pin"),
    ),
    cycle=_cycle,
    families=(("k_upper", "k_lower"),),
    likeness=_likeness,
    swaps=(("RA", "RB"),),
    equations=(
        "charge:    A = supply, τ = (RA + RB)·C, until k_upper·supply (with a diode across RB: A = "
        "supply − V_diode, τ = RA·C)",
        "discharge: A = V_discharge, τ = RB·C, until k_lower·supply",
        "t_high = (RA + RB)·C·ln 2,  t_low = RB·C·ln 2  at thirds of the supply and V_discharge = 0",
    ),
    drawing="""\
  supply ── RA ──┬── RB ──┬── threshold, trigger
                 │        │
             discharge    C
                pin       │
                         gnd""",
    example={"supply": "9 V 2%", "RA": "10k 1%", "RB": "33k 1%", "C": "100n 5%"},
    hazards=(),
)
