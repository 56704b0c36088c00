"""Unijunction relaxation oscillator: fires at eta·supply + V_D, empties the capacitor down to the valley."""

from __future__ import annotations

from benchfit.circuits._firing import firing_cycle
from benchfit.circuits.lag import parasitics
from benchfit.circuits.likeness import over, under, yes
from benchfit.circuits.model import Circuit, Cycle, Features, Node, Part, Parts


def _cycle(p: Parts) -> Cycle:
    return firing_cycle(p, p["eta"] * p["supply"] + p["V_D"], p["V_valley"])


def _likeness(seen: Features) -> float:
    """A short discharge from some volts down to a valley of one to three."""
    single = seen.high_share is None
    return (
        0.7
        * yes(single)
        * over(seen.charge_share, 0.93, 0.02)
        * yes(not seen.jumps)
        * under(seen.upper, 30.0, 3.0)
        * under(seen.lower, 3.5, 0.5)
        * over(seen.lower, 0.4, 0.15)
        * over(seen.charge_bend, 0.5, 0.1)
    )


CIRCUIT = Circuit(
    name="unijunction",
    title="unijunction relaxation oscillator (R from the supply, C from the emitter to ground)",
    parts=(
        Part("supply", "V", "supply across the bases", tolerance="5 %", kind="supply"),
        Part("R", "Ω", "charging resistor, supply to emitter"),
        Part("C", "F", "timing capacitor, emitter to ground", tolerance="10 %", kind="capacitor"),
        Part("eta", "1", "intrinsic stand-off ratio", tolerance="15 %", kind="ratio"),
        Part("V_D", "V", "emitter diode drop", "linear", "0.6 V ± 0.1 V", None, "15 %", "device"),
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
        Part("I_peak", "A", "emitter current needed to fire", "log", None, None, "50 %", "device", True),
        Part(
            "I_valley",
            "A",
            "emitter current below which it lets go",
            "log",
            None,
            None,
            "50 %",
            "device",
            True,
        ),
        *parasitics("R"),
    ),
    nodes=(Node("capacitor", "timing", "the emitter, where the capacitor sits", True),),
    cycle=_cycle,
    families=(("eta", "V_valley"),),
    likeness=_likeness,
    equations=(
        "charge:    A = supply, τ = R·C, until V_peak = eta·supply + V_D",
        "discharge: A ≈ V_floor, τ ≈ r_discharge·C, until V_valley",
        "runs for (supply − V_valley)/I_valley < R < (supply − V_peak)/I_peak",
    ),
    drawing="""\
  supply ──┬────────┐
           R     base 2
           │        │
           ├── emitter
           C        │
           │     base 1
          gnd      gnd""",
    example={
        "supply": "12 V 2%",
        "R": "47k 5%",
        "C": "100n 10%",
        "eta": "0.56..0.75",
        "V_valley": "1.5 V 30%",
        "I_peak": "2 uA 60%",
        "I_valley": "6 mA 40%",
    },
)
