"""Programmable unijunction oscillator: the firing voltage is set by a divider at the gate."""

from __future__ import annotations

from benchfit.circuits._firing import firing_cycle
from benchfit.circuits.lag import parasitics
from benchfit.circuits.likeness import over, under, yes
from benchfit.circuits.model import Circuit, Cycle, Features, Node, Part, Parts


def _cycle(p: Parts) -> Cycle:
    ratio = p["RG1"] / (p["RG1"] + p["RG2"])
    return firing_cycle(p, p["supply"] * ratio + p["V_offset"], p["V_valley"])


def _likeness(seen: Features) -> float:
    """As a unijunction, with a valley below one volt as a rule."""
    single = seen.high_share is None
    return (
        0.4
        * yes(single)
        * over(seen.charge_share, 0.93, 0.02)
        * yes(not seen.jumps)
        * under(seen.upper, 30.0, 3.0)
        * under(seen.lower, 1.4, 0.2)
        * over(seen.lower, 0.2, 0.1)
        * over(seen.charge_bend, 0.3, 0.1)
    )


CIRCUIT = Circuit(
    name="programmable-unijunction",
    title="programmable unijunction oscillator (R and C at the anode, divider RG2/RG1 at the gate)",
    parts=(
        Part("supply", "V", "supply", tolerance="5 %", kind="supply"),
        Part("R", "Ω", "charging resistor, supply to anode"),
        Part("C", "F", "timing capacitor, anode to ground", tolerance="10 %", kind="capacitor"),
        Part("RG1", "Ω", "gate to the cathode side"),
        Part("RG2", "Ω", "gate to the supply"),
        Part(
            "V_offset",
            "V",
            "anode above the gate when it fires",
            "linear",
            "0.6 V ± 0.2 V",
            None,
            "30 %",
            "device",
        ),
        Part("V_valley", "V", "valley voltage, where it lets go", tolerance="30 %", kind="threshold"),
        Part("r_discharge", "Ω", "path of the discharge", "log", "50 Ω -60 %/+200 %", None, "60 %", "device"),
        Part(
            "V_floor",
            "V",
            "where the discharge heads for",
            "linear",
            "± 0.7 V",
            lambda p: p["V_valley"] - 1.0,
            "10 %",
            "device",
        ),
        Part("I_peak", "A", "anode current needed to fire", "log", None, None, "50 %", "device", True),
        Part(
            "I_valley", "A", "anode current below which it lets go", "log", None, None, "50 %", "device", True
        ),
        *parasitics("R"),
    ),
    nodes=(Node("capacitor", "timing", "the anode, where the capacitor sits", True),),
    cycle=_cycle,
    likeness=_likeness,
    swaps=(("RG1", "RG2"),),
    equations=(
        "charge:    A = supply, τ = R·C, until V_peak = supply·RG1/(RG1 + RG2) + V_offset",
        "discharge: A ≈ V_floor, τ ≈ r_discharge·C, until V_valley",
        "runs for (supply − V_valley)/I_valley < R < (supply − V_peak)/I_peak",
    ),
    drawing="""\
  supply ──┬────────────┬──
           R           RG2
           │            │
           ├─ anode  gate
           C     │      │
           │  cathode  RG1
          gnd   gnd    gnd""",
    example={
        "supply": "10 V 2%",
        "R": "270k 5%",
        "C": "22n 10%",
        "RG1": "27k 1%",
        "RG2": "16k 1%",
        "V_valley": "0.8 V 30%",
        "I_peak": "4 uA 50%",
        "I_valley": "70 uA 50%",
    },
)
