"""One invented build of each circuit, for an instrument started with --circuit alone (values in SI)."""

from __future__ import annotations

from collections.abc import Mapping

from tools.bench.parts import PARASITICS
from tools.bench.rigs import RIGS

BUILDS: dict[str, dict[str, float]] = {
    "op-amp": {"R": 47e3, "C": 100e-9, "R_top": 22e3, "R_bottom": 22e3, "V_high": 10.6, "V_low": -9.9},
    "gas-lamp": {
        "supply": 125.0, "R": 2.2e6, "C": 56e-9, "V_strike": 90.0, "V_extinguish": 60.0, "V_maintain": 55.0,
        "r_lamp": 5e3,
    },
    "unijunction": {
        "supply": 12.0, "R": 47e3, "C": 220e-9, "eta": 0.63, "V_D": 0.6, "V_valley": 1.8, "r_discharge": 50.0,
        "V_floor": 0.8,
    },
    "programmable-unijunction": {
        "supply": 12.0, "R": 220e3, "C": 100e-9, "RG1": 27e3, "RG2": 16e3, "V_offset": 0.6, "V_valley": 0.8,
        "r_discharge": 50.0, "V_floor": 0.3,
    },
    "trigger-diode": {
        "supply": 60.0, "R": 100e3, "C": 100e-9, "V_breakover": 32.0, "V_breakback": 8.0, "r_discharge": 30.0,
        "V_floor": 20.0,
    },
    "schmitt-inverter": {"R": 33e3, "C": 47e-9, "V_upper": 2.9, "V_lower": 1.9, "V_high": 5.0, "V_low": 0.0},
    "timer-555": {"supply": 9.0, "RA": 10e3, "RB": 47e3, "C": 100e-9},
    "two-transistor": {
        "supply": 5.0, "R1": 47e3, "C1": 100e-9, "R2": 47e3, "C2": 100e-9, "RC1": 1e3, "RC2": 1e3,
    },
    "gate-pair": {"supply": 5.0, "R": 100e3, "C": 10e-9, "R_series": 1e6, "V_threshold": 2.5},
    "triangle": {"R": 22e3, "C": 47e-9, "R_in": 10e3, "R_feedback": 22e3, "V_high": 10.0, "V_low": -10.0},
    "current-ramp": {"I_charge": 100e-6, "C": 100e-9, "V_upper": 6.0, "V_lower": 0.5, "r_discharge": 50.0},
}  # fmt: skip


def known(circuit: str, parts: Mapping[str, float]) -> dict[str, float]:
    """Those of ``parts`` that the bench knows for this circuit (a sheet's defaults may hold more)."""
    rig = RIGS[circuit]
    names = {*rig.required, *rig.defaults, *PARASITICS}
    return {name: value for name, value in parts.items() if name in names}
