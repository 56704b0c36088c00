"""Builds on the bench, with the sheets of those who meant them: explained once, looked at by many tests."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cache
from typing import Any

import numpy as np

from benchfit.pipeline import Found
from tests.explain.bench import explained


@dataclass(frozen=True)
class Design:
    """A circuit as meant: its sheet (without the circuit's line) and what the bench builds for it."""

    circuit: str
    sheet: str
    parts: Mapping[str, float]
    nodes: tuple[str, ...]

    @property
    def text(self) -> str:
        return f'circuit = "{self.circuit}"\n{self.sheet}'


DESIGNS = {
    "op-amp": Design(
        "op-amp",
        '[target]\nfrequency = "455 Hz 3%"\nduty = "50 %"\n[parts]\nR = "10k 1%"\nC = "100n 5%"\n'
        'R_top = "10k 1%"\n'
        'R_bottom = "10k 1%"\nV_high = "13.5 V 5%"\nV_low = "-13.5 V 5%"\n',
        {"R": 10e3, "C": 100e-9, "R_top": 10e3, "R_bottom": 10e3, "V_high": 13.5, "V_low": -13.5},
        ("capacitor", "output"),
    ),
    "timer-555": Design(
        "timer-555",
        '[target]\nfrequency = "190 Hz 3%"\n[parts]\nsupply = "9 V 2%"\nRA = "10k 1%"\n'
        'RB = "33k 1%"\nC = "100n 5%"\n',
        {"supply": 9.0, "RA": 10e3, "RB": 33e3, "C": 100e-9},
        ("capacitor", "output"),
    ),
    "gas-lamp": Design(
        "gas-lamp",
        '[target]\nfrequency = "14.2 Hz 5%"\n[parts]\nsupply = "125 V 2%"\nR = "1M1 5%"\nC = "100n 10%"\n'
        'V_strike = "90 V 8%"\nV_extinguish = "60 V 8%"\n',
        {"supply": 125.0, "R": 1.1e6, "C": 100e-9, "V_strike": 90.0, "V_extinguish": 60.0, "V_maintain": 55.0,
         "r_lamp": 5e3},
        ("capacitor",),
    ),
    "unijunction": Design(
        "unijunction",
        '[target]\nfrequency = "198 Hz"\n[parts]\nsupply = "12 V 2%"\nR = "47k 5%"\nC = "100n 10%"\n'
        'eta = "0.65 10%"\n'
        'V_valley = "1.5 V 30%"\nI_peak = "2u 60%"\nI_valley = "6m 40%"\n',
        {"supply": 12.0, "R": 47e3, "C": 100e-9, "eta": 0.65, "V_D": 0.6, "V_valley": 1.5,
         "r_discharge": 50.0, "V_floor": 0.5, "I_peak": 2e-6, "I_valley": 6e-3},
        ("capacitor",),
    ),
    "schmitt-inverter": Design(
        "schmitt-inverter",
        '[target]\nfrequency = "2.62 kHz 5%"\n[parts]\nR = "47k 1%"\nC = "10n 5%"\nV_upper = "2.9 V 8%"\n'
        'V_lower = "1.9 V 8%"\nV_high = "5 V 2%"\n',
        {"R": 47e3, "C": 10e-9, "V_upper": 2.9, "V_lower": 1.9, "V_high": 5.0},
        ("capacitor", "output"),
    ),
    "programmable-unijunction": Design(
        "programmable-unijunction",
        '[target]\nfrequency = "156 Hz 5%"\n[parts]\nsupply = "10 V 2%"\nR = "270k 5%"\n'
        'C = "22n 10%"\nRG1 = "27k 1%"\n'
        'RG2 = "16k 1%"\nV_valley = "0.8 V 30%"\n',
        {"supply": 10.0, "R": 270e3, "C": 22e-9, "RG1": 27e3, "RG2": 16e3, "V_valley": 0.8, "V_offset": 0.6,
         "r_discharge": 50.0, "V_floor": -0.2},
        ("capacitor",),
    ),
    "trigger-diode": Design(
        "trigger-diode",
        '[target]\nfrequency = "760 Hz 5%"\n[parts]\nsupply = "60 V 2%"\nR = "100k 5%"\nC = "47n 10%"\n'
        'V_breakover = "32 V 12%"\nV_breakback = "9 V 20%"\n',
        {"supply": 60.0, "R": 100e3, "C": 47e-9, "V_breakover": 32.0, "V_breakback": 9.0, "r_discharge": 30.0,
         "V_floor": 19.0},
        ("capacitor",),
    ),
    "gate-pair": Design(
        "gate-pair",
        '[target]\nfrequency = "455 Hz 5%"\n[parts]\nsupply = "5 V 2%"\nR = "100k 1%"\nC = "10n 5%"\n',
        {"supply": 5.0, "R": 100e3, "C": 10e-9, "R_series": 1e6, "V_threshold": 2.5, "R_gate": 250.0},
        ("capacitor", "output"),
    ),
    "triangle": Design(
        "triangle",
        '[target]\nfrequency = "573 Hz 5%"\n[parts]\nR = "12k 1%"\nC = "100n 5%"\nR_in = "120k 1%"\n'
        'R_feedback = "330k 1%"\nV_high = "10 V 5%"\nV_low = "-10 V 5%"\n',
        {"R": 12e3, "C": 100e-9, "R_in": 120e3, "R_feedback": 330e3, "V_high": 10.0, "V_low": -10.0},
        ("capacitor", "output"),
    ),
    "current-ramp": Design(
        "current-ramp",
        '[target]\nfrequency = "200 Hz 5%"\n[parts]\nI_charge = "100u 2%"\nC = "100n 5%"\n'
        'V_upper = "6 V 5%"\n'
        'V_lower = "1 V 10%"\n',
        {"I_charge": 1e-4, "C": 100e-9, "V_upper": 6.0, "V_lower": 1.0, "r_discharge": 50.0},
        ("capacitor",),
    ),
    "two-transistor": Design(
        "two-transistor",
        '[target]\nfrequency = "198 Hz 5%"\n[parts]\nsupply = "5 V 2%"\nR1 = "47k 1%"\n'
        'C1 = "100n 5%"\nR2 = "47k 1%"\n'
        'C2 = "47n 5%"\nRC1 = "1k 5%"\nRC2 = "1k 5%"\n',
        {"supply": 5.0, "R1": 47e3, "C1": 100e-9, "R2": 47e3, "C2": 47e-9, "RC1": 1e3, "RC2": 1e3},
        ("collector1",),
    ),
}  # fmt: skip


@dataclass(frozen=True)
class Scene:
    """One build: a design, what is off in it, what its sheet says besides, how it was recorded."""

    design: str
    off: Mapping[str, float] = field(default_factory=dict)
    sheet: str = ""
    nodes: tuple[str, ...] | None = None
    more: Mapping[str, Any] = field(default_factory=dict)


TIMES_TEN_PROBE = '[probe.capacitor]\nresistance = "10M"\ncapacitance = "12p"\n'
POWERED = {"start": "from rest"}

SCENES: dict[str, Scene] = {
    **{f"healthy {name}": Scene(name) for name in DESIGNS},
    "a capacitor": Scene("op-amp", {"C": 130e-9}),
    "a resistor": Scene("op-amp", {"R": 13e3}),
    "a capacitor, R read": Scene("op-amp", {"C": 130e-9}, '[readings]\nR = "10.01k 0.5%"\n'),
    "a resistor, R read": Scene("op-amp", {"R": 13e3}, '[readings]\nR = "13.01k 0.5%"\n'),
    "a decade of C": Scene("op-amp", {"C": 1e-6}, '[readings]\nR = "9.99k 0.5%"\n'),
    "the divider": Scene("op-amp", {"R_top": 12e3}),
    "the high level": Scene("op-amp", {"V_high": 11.0}),
    "a leak at the op-amp": Scene("op-amp", {"R_leak": 80e3}),
    "a leak to the supply": Scene("op-amp", {"R_leak_supply": 60e3}),
    "bias at the op-amp": Scene("op-amp", {"I_leak": 1.2e-4}),
    "a slow op-amp": Scene("op-amp", {"slew": 0.2e6}),
    "a late op-amp": Scene("op-amp", {"delay": 60e-6}),
    "a dry capacitor": Scene("op-amp", {"ESR": 800.0}),
    "a bending capacitor": Scene("op-amp", {"C_slope": -0.04}),
    "the timer's C": Scene("timer-555", {"C": 130e-9}),
    "the timer's RA": Scene("timer-555", {"RA": 13e3}),
    "the timer's RB": Scene("timer-555", {"RB": 43e3}),
    "the timer's swap": Scene("timer-555", {"RA": 33e3, "RB": 10e3}),
    "the timer's upper threshold": Scene("timer-555", {"k_upper": 0.74}),
    "the timer's lower threshold": Scene("timer-555", {"k_lower": 0.26}),
    "the timer's supply": Scene("timer-555", {"supply": 7.5}),
    "the timer's leak": Scene("timer-555", {"R_leak": 200e3}),
    "the timer's decade": Scene("timer-555", {"C": 10e-9}),
    "the lamp's strike": Scene("gas-lamp", {"V_strike": 105.0}),
    "the lamp's end": Scene("gas-lamp", {"V_extinguish": 45.0, "V_maintain": 40.0}),
    "the lamp's leak": Scene("gas-lamp", {"R_leak": 6e6}),
    "the lamp's decade": Scene("gas-lamp", {"C": 1e-6}),
    "the lamp behind a probe": Scene(
        "gas-lamp", {}, TIMES_TEN_PROBE, None, {"probe": {"capacitor": (10e6, 12e-12)}}
    ),
    "the stand-off ratio": Scene("unijunction", {"eta": 0.8}),
    "the unijunction's R by ten": Scene("unijunction", {"R": 4.7e3}),
    "another maker's gate": Scene("schmitt-inverter", {"V_upper": 3.6, "V_lower": 1.4}),
    "a third maker's gate": Scene("schmitt-inverter", {"V_upper": 3.0, "V_lower": 2.2}),
    "the gate's leak": Scene("schmitt-inverter", {"R_leak": 300e3}),
    "the programming resistors": Scene("programmable-unijunction", {"RG1": 16e3, "RG2": 27e3}),
    "the trigger diode": Scene("trigger-diode", {"V_breakover": 40.0, "V_floor": 27.0}),
    "the pair's trip point": Scene("gate-pair", {"V_threshold": 3.2}),
    "the pair's leak": Scene("gate-pair", {"R_leak": 1.2e6}),
    "the triangle's level": Scene("triangle", {"V_high": 8.0}),
    "the triangle's slew": Scene("triangle", {"slew": 1e5}),
    "the ramp's foot": Scene("current-ramp", {"V_lower": 1.8}),
    "the ramp's leak": Scene("current-ramp", {"R_leak": 200e3}),
    "probed ten times too small": Scene("timer-555", more={"inputs": {"capacitor": {"ratio": 10.0}}}),
    "probed ten times too large": Scene("timer-555", more={"inputs": {"capacitor": {"ratio": 0.1}}}),
    "coupled for alternating": Scene(
        "timer-555", {"C": 130e-9}, more={"inputs": {"capacitor": {"coupling": "ac", "corner": 0.1}}}
    ),
    "a lamp on too little": Scene(
        "gas-lamp", {"supply": 85.0}, more={**POWERED, "length": 1.0, "begin": -0.05}
    ),
    "a timer that a leak stops": Scene(
        "timer-555", {"R_leak": 60e3}, more={**POWERED, "length": 0.05, "begin": -0.002}
    ),
    "a unijunction that never fires": Scene(
        "unijunction", {"R": 4.7e6}, more={**POWERED, "length": 1.5, "begin": -0.05}
    ),
    "a unijunction that latches": Scene(
        "unijunction", {"R": 1e3}, more={**POWERED, "length": 0.01, "begin": -0.001}
    ),
}


@cache
def found(name: str) -> Found:
    """What the program makes of a scene."""
    scene = SCENES[name]
    design = DESIGNS[scene.design]
    parts = {**design.parts, **scene.off}
    nodes = scene.nodes or design.nodes
    # Slow edges make numpy say "overflow": a blemish with a test of its own (in test_single_faults).
    with np.errstate(over="ignore"):
        return explained(design.circuit, parts, design.text + scene.sheet, nodes, **dict(scene.more))
