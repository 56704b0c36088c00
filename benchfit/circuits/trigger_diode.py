"""Trigger-diode oscillator: the diode breaks over and the capacitor falls by its breakback voltage."""

from __future__ import annotations

from benchfit.circuits._firing import firing_cycle
from benchfit.circuits.lag import parasitics
from benchfit.circuits.likeness import close, over, ratio, yes
from benchfit.circuits.model import Circuit, Cycle, Features, Node, Part, Parts


def _cycle(p: Parts) -> Cycle:
    return firing_cycle(p, p["V_breakover"], p["V_breakover"] - p["V_breakback"])


def _likeness(seen: Features) -> float:
    """A short discharge by a part of the peak, which lies between about 26 and 45 V."""
    single = seen.high_share is None
    return (
        0.8
        * yes(single)
        * over(seen.charge_share, 0.93, 0.02)
        * yes(not seen.jumps)
        * close(seen.upper, 33.0, 6.0)
        * over(ratio(seen.lower, seen.upper), 0.4, 0.08)
    )


CIRCUIT = Circuit(
    name="trigger-diode",
    title="trigger-diode oscillator (R from the supply, C to ground, diode across C)",
    parts=(
        Part("supply", "V", "supply", tolerance="5 %", kind="supply"),
        Part("R", "Ω", "charging resistor"),
        Part("C", "F", "timing capacitor", tolerance="10 %", kind="capacitor"),
        Part("V_breakover", "V", "breakover voltage", tolerance="12.5 %", kind="threshold"),
        Part("V_breakback", "V", "what the capacitor falls by", tolerance="40 %", kind="threshold"),
        Part("r_discharge", "Ω", "path of the discharge", "log", "30 Ω -60 %/+200 %", None, "60 %", "device"),
        Part(
            "V_floor",
            "V",
            "where the discharge heads for",
            "linear",
            "± 2.5 V",
            lambda p: p["V_breakover"] - p["V_breakback"] - 4.0,
            "10 %",
            "device",
        ),
        Part("I_peak", "A", "current needed to break over", "log", None, None, "50 %", "device", True),
        Part("I_valley", "A", "holding current", "log", None, None, "50 %", "device", True),
        *parasitics("R"),
    ),
    nodes=(Node("capacitor", "timing", "the diode's terminal, where the capacitor sits", True),),
    cycle=_cycle,
    families=(("V_breakover", "V_breakback"),),
    likeness=_likeness,
    equations=(
        "charge:    A = supply, τ = R·C, until V_breakover",
        "discharge: A ≈ V_floor, τ ≈ r_discharge·C, until V_breakover − V_breakback",
        "T = R·C·ln[(supply − V_breakover + V_breakback)/(supply − V_breakover)] + discharge",
    ),
    drawing="""\
  supply ── R ──┬──────┐
                C    diode
                │      │
               gnd    gnd""",
    example={
        "supply": "60 V 5%",
        "R": "47k 5%",
        "C": "100n 10%",
        "V_breakover": "28 .. 36 V",
        "V_breakback": "10 V 40%",
    },
    hazards=(
        "Trigger-diode supplies are often above the limits for voltages that may be touched, and "
        "often mains-derived.",
    ),
)
