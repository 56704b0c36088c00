"""A build runs exactly where the integrated one does; and where it does not, it says what is seen."""

from __future__ import annotations

import numpy as np
import pytest

from benchfit import circuits
from benchfit.circuits.solve import settle
from tests.circuits.builds import BENCH, VALUES, parts_of, scale_of
from tests.circuits.test_phases import integrated

DRAWS = 24


def heavy(circuit: str, rng: np.random.Generator) -> dict[str, float]:
    """Leaks, probes and currents that stop about every second build."""
    ohms, _, volts, _ = scale_of(circuit)
    p = {name: value * rng.uniform(0.9, 1.1) for name, value in VALUES[circuit].items()}
    p["R_leak"] = ohms * 10 ** rng.uniform(-0.7, 1.5)
    if circuit != "current-ramp":
        p["R_leak_supply"] = ohms * 10 ** rng.uniform(-0.3, 1.5)
    p["I_leak"] = rng.uniform(-0.15, 0.15) * volts / ohms
    p["G_probe:capacitor"] = 10 ** rng.uniform(-2, -0.5) / ohms
    return p


@pytest.mark.parametrize("circuit", sorted(BENCH))
def test_margins_fail_exactly_where_the_node_equations_never_arrive(circuit):
    rng = np.random.default_rng(4)
    stopped = 0
    for _ in range(DRAWS):
        p = heavy(circuit, rng)
        cycle = circuits.get(circuit).cycle(parts_of(circuit, p))
        margins = [float(np.ravel(c.margin)[0]) for c in cycle.conditions]
        runs = min(margins) > 0
        assert np.isfinite(settle(cycle).period) == runs
        truth = integrated(circuit, p)
        assert np.isfinite(truth.period) == runs, (p, margins)
        stopped += not runs
    assert 0 < stopped < DRAWS


@pytest.mark.parametrize("circuit", ["unijunction", "programmable-unijunction", "trigger-diode"])
def test_a_device_needs_its_current_to_fire_and_lets_go_below_another(circuit):
    """The margins are the currents that Kirchhoff leaves for the device when it fires and at its valley."""
    base = {**VALUES[circuit], "R_leak": 30 * VALUES[circuit]["R"], "I_leak": 2e-6}
    _, halves = BENCH[circuit](base)
    spare, fed = halves[0].inflow(halves[0].level, 0.0), halves[0].inflow(halves[1].level, 0.0)
    for factor, code in ((0.9, None), (1.1, "never-fires")):
        p = {**base, "I_peak": spare * factor, "I_valley": fed * 2}
        assert failing(circuit, p) == ([code] if code else [])
    for factor, code in ((1.1, None), (0.9, "latched")):
        p = {**base, "I_peak": spare / 2, "I_valley": fed * factor}
        assert failing(circuit, p) == ([code] if code else [])


def failing(circuit, p):
    cycle = circuits.get(circuit).cycle(parts_of(circuit, p))
    return [c.code for c in cycle.conditions if not float(np.ravel(c.margin)[0]) > 0]


@pytest.mark.parametrize(
    ("circuit", "change", "code", "rests"),
    [
        ("gas-lamp", {"R_leak": 2e6}, "never-reaches", 135 * 2 / 3.2),
        ("gas-lamp", {"R": 12e3}, "latched", (135 / 12 + 56 / 5) / (1 / 12 + 1 / 5)),
        ("timer-555", {"R_leak": 50e3}, "never-reaches", 9 * 50 / 93),
        ("schmitt-inverter", {"R_leak": 60e3}, "never-reaches", 5 * 60 / 107),
        ("schmitt-inverter", {"R_leak_supply": 50e3}, "never-reaches", (0.05 * 50 + 5 * 47) / 97),
        ("op-amp", {"R_leak": 15e3}, "never-reaches", 11 * 15 / 37),
        ("trigger-diode", {"supply": 30.0}, "never-reaches", 30.0),
        ("gate-pair", {"R_leak": 80e3}, "never-reaches", 9 * 80 / 180.3),
        ("current-ramp", {"R_leak": 7e3}, "never-reaches", 5.6),
    ],
)
def test_what_stops_a_build_and_where_its_node_then_rests(circuit, change, code, rests):
    """Resting voltages by hand, from the divider that the leak makes."""
    cycle = circuits.get(circuit).cycle(parts_of(circuit, {**VALUES[circuit], **change}))
    failed = [c for c in cycle.conditions if not float(c.margin) > 0]
    assert failed[0].code == code
    assert failed[0].rests is not None
    assert float(failed[0].rests) == pytest.approx(rests, rel=1e-9)
    assert len(failed[0].says) > 20


def test_a_base_that_a_leak_holds_down_never_turns_on():
    p = {**VALUES["two-transistor"], "R_leak": 5e3}
    assert failing("two-transistor", p) == ["stuck"]  # 5 V · 5/52 < 0.56 V; base 2: 5 V · 5/38 > 0.56 V
