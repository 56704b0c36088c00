"""Gas-lamp oscillator: a capacitor charges until the lamp strikes and is emptied by it until the lamp goes out."""

from __future__ import annotations

from benchfit.circuits.lag import lag, parasitics, phase
from benchfit.circuits.likeness import over, ratio, yes
from benchfit.circuits.model import Circuit, Condition, Cycle, Features, Node, Part, Parts


def _cycle(p: Parts) -> Cycle:
    feed = (1 / p["R"], p["supply"])
    up = lag(p, feed)
    down = lag(p, feed, (1 / p["r_lamp"], p["V_maintain"]))
    strike, out = p["V_strike"], p["V_extinguish"]
    return Cycle(
        phases=(
            phase(up, strike, rising=True, before=down, delay=p["delay"]),
            phase(down, out, rising=False, before=up),
        ),
        conditions=(
            Condition(
                "never-reaches",
                up.asymptote - strike,
                "the lamp never strikes: the capacitor stops below its striking voltage",
                "R",
                up.asymptote,
            ),
            Condition(
                "latched",
                out - down.asymptote,
                "the lamp stays lit: the resistor feeds enough current to "
                "keep it above its extinguishing voltage",
                "R",
                down.asymptote,
            ),
            Condition("stuck", strike - out, "the lamp strikes no higher than it goes out", "V_strike", out),
        ),
    )


def _likeness(seen: Features) -> float:
    """A short discharge, levels of a lamp: tens of volts, going out at half of the strike or more."""
    single = seen.high_share is None
    return (
        0.8
        * yes(single)
        * over(seen.charge_share, 0.93, 0.02)
        * yes(not seen.jumps)
        * over(seen.upper, 50.0, 4.0)
        * over(ratio(seen.lower, seen.upper), 0.45, 0.05)
    )


CIRCUIT = Circuit(
    name="gas-lamp",
    title="gas-lamp relaxation oscillator (R from the supply, C across the lamp)",
    parts=(
        Part("supply", "V", "supply", tolerance="5 %", kind="supply"),
        Part("R", "Ω", "charging resistor"),
        Part("C", "F", "capacitor across the lamp", tolerance="10 %", kind="capacitor"),
        Part("V_strike", "V", "striking voltage", tolerance="15 %", kind="threshold"),
        Part("V_extinguish", "V", "voltage at which it goes out", tolerance="15 %", kind="threshold"),
        Part(
            "V_maintain",
            "V",
            "voltage the lit lamp would settle at without current",
            "linear",
            "± 3 V",
            lambda p: p["V_extinguish"] - 5.0,
            "5 %",
            "device",
        ),
        Part("r_lamp", "Ω", "slope resistance of the lit lamp", "log", "5 kΩ ± 60 %", None, "60 %", "device"),
        *parasitics("R"),
    ),
    nodes=(Node("capacitor", "timing", "the lamp's terminal, where the capacitor sits", True),),
    cycle=_cycle,
    families=(("V_strike", "V_extinguish"),),
    likeness=_likeness,
    equations=(
        "charge:    A = supply, τ = R·C, until V_strike",
        "discharge: A = (supply/R + V_maintain/r_lamp)/(1/R + 1/r_lamp), τ = (R ∥ r_lamp)·C, until "
        "V_extinguish",
        "T = R·C·ln[(supply − V_extinguish)/(supply − V_strike)] + discharge",
    ),
    drawing="""\
  supply ── R ──┬──────┐
                │      │
                C    (lamp)
                │      │
               gnd    gnd""",
    example={
        "supply": "125 V 2%",
        "R": "1M1 5%",
        "C": "120n 10%",
        "V_strike": "90 V 8%",
        "V_extinguish": "60 V 8%",
    },
    hazards=("The supply of a gas lamp is above the limits for voltages that may be touched.",),
)
