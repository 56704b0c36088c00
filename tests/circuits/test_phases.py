"""Phases of every circuit against scipy's integration of its node equations, to 1e-6."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pytest

from benchfit import circuits
from benchfit.circuits.solve import Settled, settle
from tests.circuits.builds import BENCH, VALUES, parts_of, scale_of
from tests.circuits.kirchhoff import Ran, run

FIRING = ("gas-lamp", "unijunction", "programmable-unijunction", "trigger-diode", "current-ramp")


def halves_of(circuit: str, values: Mapping[str, float]) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """The package's phases, those in a row that rise (or fall) taken together: durations, starts, ends."""
    cycle = circuits.get(circuit).cycle(parts_of(circuit, values))
    s: Settled = settle(cycle)
    groups: list[list[int]] = []
    for i, phase in enumerate(cycle.phases):
        if groups and cycle.phases[groups[-1][-1]].rising == phase.rising:
            groups[-1].append(i)
        else:
            groups.append([i])
    return (
        np.array([sum(float(s.durations[i]) for i in g) for g in groups]),
        np.array([float(s.starts[g[0]]) for g in groups]),
        np.array([float(s.ends[g[-1]]) for g in groups]),
    )


def integrated(circuit: str, values: Mapping[str, float]) -> Ran:
    leg, halves = BENCH[circuit](values)
    _, _, _, seconds = scale_of(circuit)
    return run(leg, halves, halves[-1].level, horizon=60 * seconds)


def hold(circuit: str, values: Mapping[str, float], within: float = 1e-6) -> None:
    durations, starts, ends = halves_of(circuit, values)
    truth = integrated(circuit, values)
    swing = np.ptp([*truth.starts, *truth.ends])
    assert durations == pytest.approx(truth.durations, rel=within)
    assert starts == pytest.approx(truth.starts, abs=within * swing)
    assert ends == pytest.approx(truth.ends, abs=within * swing)


def parasitic_cases(circuit: str) -> dict[str, dict[str, float]]:
    """Each parasitic alone, and as many together as have one exponential a half."""
    ohms, farads, volts, seconds = scale_of(circuit)
    device = VALUES[circuit].get("r_lamp", VALUES[circuit].get("r_discharge", 0.15 * ohms))
    rail = {} if circuit == "current-ramp" else {"R_leak_supply": 12 * ohms}
    leaks = {"R_leak": 9 * ohms, "I_leak": 0.02 * volts / ohms, **rail}
    probe = {"G_probe:capacitor": 1 / (15 * ohms), "C_probe:capacitor": 0.03 * farads}
    beside = {**leaks, **probe, "C_stray": 0.07 * farads}
    cases: dict[str, dict[str, float]] = {"nothing": {}}
    cases |= {name: {name: value} for name, value in leaks.items()}
    cases |= {
        "I_leak into the node": {"I_leak": -0.02 * volts / ohms},
        "C_stray": {"C_stray": 0.1 * farads},
        "probe": probe,
        "delay": {"delay": 0.03 * seconds},
        "ESR": {"ESR": 0.2 * device},
        "C_slope": {"C_slope": 0.4 / volts},
        "C_slope, falling": {"C_slope": -0.25 / volts},
        "all that loads": {**beside, "delay": 0.02 * seconds},
        "ESR and leaks": {**leaks, "ESR": 0.1 * device, "delay": 0.01 * seconds},
    }
    if circuit != "gate-pair":
        # A step of the other plate divides by the capacitance of the moment: see the test of its own.
        cases["C_slope beside loads"] = {**beside, "C_slope": 0.3 / volts}
    return cases


CASES = [(c, name) for c in BENCH for name in parasitic_cases(c)]


@pytest.mark.parametrize(("circuit", "case"), CASES)
def test_phases_are_those_of_the_node_equations(circuit, case):
    hold(circuit, {**VALUES[circuit], **parasitic_cases(circuit)[case]})


VARIANTS: dict[str, tuple[str, dict[str, float], tuple[str, ...]]] = {
    "steering diodes": (
        "op-amp", {"R_charge": 15e3, "R_discharge": 39e3, "V_diode": 0.6, "delay": 9e-6}, ("R",),
    ),
    "a single supply with a bias resistor": (
        "op-amp",
        {"R_bias": 33e3, "supply": 12.0, "V_high": 11.7, "V_low": 0.1, "V_reference": 0.0,
         "R_leak_supply": 4e5},
        (),
    ),
    "an open collector with its pull-up": (
        "op-amp",
        {"R_pull": 2.2e3, "R_bias": 15e3, "supply": 12.0, "V_high": 12.0, "V_low": 0.2, "V_reference": 0.0},
        (),
    ),
    "an open collector, loaded": (
        "op-amp",
        {"R_pull": 4.7e3, "V_high": 12.0, "V_low": 0.2, "V_reference": 2.0, "R_leak": 3e5, "delay": 5e-6,
         "I_leak": 1e-6, "C_stray": 1e-9},
        (),
    ),
    "an open collector with steering diodes": (
        "op-amp",
        {"R_pull": 2.2e3, "R_charge": 15e3, "R_discharge": 39e3, "V_diode": 0.55, "V_high": 12.0,
         "V_low": 0.2, "V_reference": 3.0},
        ("R",),
    ),
    "a Schmitt gate's steering diodes": (
        "schmitt-inverter", {"R_charge": 22e3, "R_discharge": 82e3, "V_diode": 0.5, "delay": 3e-6}, ("R",),
    ),
    "a timer's steering diode": ("timer-555", {"V_diode": 0.6, "R_leak": 3e5, "delay": 8e-6}, ()),
    "a gate without its series resistor": ("gate-pair", {}, ("R_series",)),
    "such a gate, late and loaded": (
        "gate-pair",
        {"delay": 9e-6, "C_stray": 3e-10, "R_leak": 1.1e6, "G_probe:capacitor": 1e-7,
         "C_probe:capacitor": 12e-12},
        ("R_series",),
    ),
    "such a gate whose jump stops short of the clamp": ("gate-pair", {"C_stray": 7e-9}, ("R_series",)),
    "a gate whose jump stops short of the clamp behind R_series": ("gate-pair", {"C_stray": 7e-9}, ()),
    "such a gate with a capacitor that bends": ("gate-pair", {"C_slope": 0.03}, ("R_series",)),
    "a bent capacitor whose jump is divided": ("gate-pair", {"C_slope": 0.02, "C_stray": 2e-11}, ()),
}  # fmt: skip


@pytest.mark.parametrize("variant", VARIANTS)
def test_variants_of_a_circuit_are_those_of_the_node_equations(variant):
    circuit, more, without = VARIANTS[variant]
    values = {k: v for k, v in {**VALUES[circuit], **more}.items() if k not in without}
    # Charge that moves between a bent and a straight capacitor at the step is taken to first order.
    hold(circuit, values, 2e-5 if {"C_slope", "C_stray"} <= set(more) else 1e-6)
