"""The bench's circuits against published results; the source stands beside each."""

from __future__ import annotations

from math import exp, log

import numpy as np
import pytest

from tools.bench import simulate

LONG = 1e12  # ohms: as good as absent


def _frequency(circuit, **parts):
    return 1.0 / simulate(circuit, parts).period


@pytest.mark.parametrize(
    ("circuit", "parts", "published", "within", "source"),
    [
        (
            "timer-555",
            {"supply": 9, "RA": 2.2e3, "RB": 4.7e3, "C": 22e-9, "V_discharge": 0},
            5653.194,
            1e-6,
            "Floyd, Electronic Devices, Ex. 16-6, with ln 2 exact",
        ),
        (
            "timer-555",
            {"supply": 12, "RA": 3e3, "RB": 2.7e3, "C": 33e-9, "V_discharge": 0},
            5.19e3,
            3e-3,
            "Mehta, Principles of Electronics, Ex. 23.3",
        ),
        (
            "timer-555",
            {"supply": 12, "RA": 14.4e3, "RB": 7.2e3, "C": 1e-9, "V_discharge": 0},
            50e3,
            3e-3,
            "Franco, Design with Op Amps, Ex. 10.3",
        ),
        (
            "unijunction",
            {
                "supply": 12,
                "R": 50e3,
                "C": 0.1e-6,
                "eta": 0.6,
                "V_D": 0.8,
                "V_valley": 1.0,
                "r_discharge": 200.0,
                "V_floor": 0.0,
            },
            196.0,
            2e-3,
            "Boylestad & Nashelsky, Ex. 17.1",
        ),
        (
            "op-amp",
            {"R": 100e3, "C": 0.1e-6, "R_top": 100e3, "R_bottom": 86e3, "V_high": 10, "V_low": -10},
            49.97,
            1e-3,
            "op-amp text Ex. 10.10 (re-solved)",
        ),
        (
            "op-amp",
            {"R": 100e3, "C": 10e-9, "R_top": 100e3, "R_bottom": 86e3, "V_high": 12, "V_low": -12},
            499.68,
            1e-4,
            "Bakshi & Godse, Ex. 9.15",
        ),
        (
            "op-amp",
            {
                "R": 100e3,
                "C": 750e-12,
                "R_top": 100e3,
                "R_bottom": 100e3,
                "R_bias": 100e3,
                "supply": 5,
                "V_high": 5,
                "V_low": 0,
            },
            10e3,
            5e-2,
            "LMV7291 data sheet, fig. 31: about 10 kHz",
        ),
        (
            "triangle",
            {"R": 12e3, "C": 0.1e-6, "R_in": 120e3, "R_feedback": 1e6, "V_high": 10, "V_low": -10},
            1736.0,
            1e-3,
            "J. B. Gupta, Ex. 7.9",
        ),
        (
            "triangle",
            {"R": 10e3, "C": 0.1e-6, "R_in": 100e3, "R_feedback": 820e3, "V_high": 10, "V_low": -10},
            2050.0,
            1e-3,
            "P. Sharma, Ex. 5.15",
        ),
        (
            "triangle",
            {"R": 10e3, "C": 0.05e-6, "R_in": 10e3, "R_feedback": 40e3, "V_high": 14, "V_low": -14},
            2000.0,
            1e-3,
            "Gayakwad, Ex. 7-16",
        ),
        (
            "current-ramp",
            {"I_charge": 0.43e-3, "C": 0.05e-6, "V_upper": 10 / 3, "V_lower": 5 / 3, "r_discharge": 1e-3},
            5160.0,
            1e-3,
            "Gayakwad, Ex. 9-8",
        ),
        (
            "two-transistor",
            {
                "supply": 1e3,
                "R1": 2e3,
                "C1": 10e-9,
                "R2": 10e3,
                "C2": 50e-9,
                "RC1": 20.0,
                "RC2": 20.0,
                "V_BE": 0.0,
                "V_on": 0.0,
                "V_CE": 0.0,
                "V_breakdown": 1e9,
            },
            2.78e3,
            3e-3,
            "Salivahanan, Ex. 16.11 (printed with 0.69; ideal transistors)",
        ),
        (
            "gate-pair",
            {"supply": 10, "R": 100e3, "C": 10e-9, "R_series": LONG, "R_gate": 0.0, "V_threshold": 5.0},
            1 / (1e-3 * log(9)),
            1e-6,
            "HEF4047B data sheet, p. 8: half of 4.40 RC",
        ),
        (
            "gate-pair",
            {"supply": 10, "R": 100e3, "C": 10e-9, "R_series": LONG, "R_gate": 0.0, "V_threshold": 3.0},
            1 / (1e-3 * 4.70728053 / 2),
            1e-6,
            "HEF4047B data sheet, p. 8: half of 4.71 RC",
        ),
    ],
)
def test_frequency_is_the_published_one(circuit, parts, published, within, source):
    assert _frequency(circuit, **parts) == pytest.approx(published, rel=within), source


def test_first_flash_of_a_lamp():
    """Alexander & Sadiku, Fundamentals of Electric Circuits, Ex. 7.19: 110 V, 4 Mohm, 0.1 uF, strike 70 V:
    0.4046 s."""
    waves = simulate(
        "gas-lamp",
        {
            "supply": 110,
            "R": 4e6,
            "C": 0.1e-6,
            "V_strike": 70,
            "V_extinguish": 30,
            "V_maintain": 0.0,
            "r_lamp": 100.0,
        },
        start="from rest",
    )
    assert waves.starts[0] == pytest.approx(0.4046, rel=1e-3)
    assert waves.period == pytest.approx(0.27726, rel=1e-3)


def test_first_charge_of_a_timer_is_longer():
    """Common practice: the first charge from 0 V takes ln 3/ln 2 of the later ones."""
    p = {"supply": 9, "RA": 10e3, "RB": 10e3, "C": 100e-9, "V_discharge": 0.0}
    waves = simulate("timer-555", p, start="from rest", cycles=1)
    first = waves.starts[0] - log(2) * 10e3 * 100e-9
    later = waves.period * waves.high_share
    assert first / later == pytest.approx(log(3) / log(2), rel=1e-6)


def test_delay_of_a_timer():
    """TI SLFS043C, p. 12: tH = tauH ln(3 − exp(−tPLH/tauL)) + tPHL, tL = tauL ln(3 − exp(−tPHL/tauH)) +
    tPLH."""
    ra, rb, c, d = 10e3, 22e3, 1e-9, 2e-6
    waves = simulate("timer-555", {"supply": 5, "RA": ra, "RB": rb, "C": c, "V_discharge": 0.0, "delay": d})
    up, down = (ra + rb) * c, rb * c
    high = up * log(3 - exp(-d / down)) + d
    low = down * log(3 - exp(-d / up)) + d
    assert waves.period == pytest.approx(high + low, rel=1e-8)
    assert waves.high_share == pytest.approx(high / (high + low), rel=1e-8)


def test_ideal_formula_at_the_fastest_network():
    """TI SLFS043C: RA 470, RB 200, C 200 pF; the ideal formula says 8.29 MHz."""
    p = {"supply": 5, "RA": 470, "RB": 200, "C": 200e-12, "V_discharge": 0.0}
    assert _frequency("timer-555", **p) == pytest.approx(8.29e6, rel=1e-3)


def test_op_amp_slew_and_delay_to_first_order():
    """Bell, Electronic Devices and Circuits, Ex. 14.12 (slewing time) and first-order corrections derived
    from it: T0 + 2·ts/(1 + b) for a slew, T0 + 4·td/(1 + b) for a delay."""
    p = {"R": 100e3, "C": 100e-9, "R_top": 10e3, "R_bottom": 10e3, "V_high": 14, "V_low": -14}
    ideal = simulate("op-amp", p).period
    ts, td = 28 / 0.5e6, 50e-6
    assert simulate("op-amp", {**p, "slew": 0.5e6}).period - ideal == pytest.approx(2 * ts / 1.5, rel=1e-2)
    assert simulate("op-amp", {**p, "delay": td}).period - ideal == pytest.approx(4 * td / 1.5, rel=1e-2)


def test_schmitt_gates_of_three_makers():
    """Data sheets of one type number (40106, 5 V): K = T/RC is 1.889, 0.812 and 0.647, so 1 : 2.33 : 2.92 in
    frequency."""
    f = [
        _frequency("schmitt-inverter", R=10e3, C=10e-9, V_upper=u, V_lower=low, V_high=5)
        for u, low in ((3.6, 1.4), (2.9, 1.9), (3.0, 2.2))
    ]
    assert f[1] / f[0] == pytest.approx(2.33, abs=0.01)
    assert f[2] / f[0] == pytest.approx(2.92, abs=0.01)


@pytest.mark.parametrize(
    ("resistor", "ends"), [(1.0e3, "held"), (1.2e3, ""), (390e3, ""), (410e3, "starved")]
)
def test_unijunction_runs_between_its_limits_only(resistor, ends):
    """Boylestad & Nashelsky, Ex. 17.1(c): 1.1 kohm < R < 400 kohm."""
    p = {
        "supply": 12,
        "R": resistor,
        "C": 0.1e-6,
        "eta": 0.6,
        "V_D": 0.8,
        "V_valley": 1.0,
        "I_valley": 10e-3,
        "I_peak": 10e-6,
        "r_discharge": 20.0,
        "V_floor": 0.0,
    }
    assert simulate("unijunction", p).ends_in == ends


def test_two_transistors_at_low_supply():
    """T against the ln 2 form: 1.0815 at 5 V, 1.0316 at 12 V (V_BE 0.7 V, V_CE 0.2 V; no breakdown)."""
    for supply, ratio in ((5, 1.0815), (12, 1.0316)):
        p = {
            "supply": supply,
            "R1": 47e3,
            "C1": 100e-9,
            "R2": 47e3,
            "C2": 100e-9,
            "RC1": 50.0,
            "RC2": 50.0,
            "V_BE": 0.7,
            "V_on": 0.7,
            "V_CE": 0.2,
            "V_breakdown": 1e3,
        }
        assert simulate("two-transistor", p).period / (2 * 4.7e-3 * log(2)) == pytest.approx(ratio, rel=1e-3)


def test_base_breakdown_shortens_the_half_cycle():
    """Field reports: 12 V with a clamp at −7 V runs 39 % faster than with the full swing."""
    p = {"supply": 12, "R1": 47e3, "C1": 100e-9, "R2": 47e3, "C2": 100e-9, "RC1": 100.0, "RC2": 100.0}
    full, clamped = (simulate("two-transistor", {**p, "V_breakdown": v}).period for v in (1e3, 7.0))
    assert full / clamped == pytest.approx(1.39, abs=0.02)


def test_probe_stops_a_lamp():
    """Circuit law (110 V, 4 Mohm, strike 70 V): 10 Mohm leave 78.6 V and a first flash after 0.633 s; 1 Mohm
    stops it."""
    p = {
        "supply": 110,
        "R": 4e6,
        "C": 0.1e-6,
        "V_strike": 70,
        "V_extinguish": 30,
        "V_maintain": 0.0,
        "r_lamp": 100.0,
    }
    waves = simulate("gas-lamp", p, probe={"capacitor": (10e6, 0.0)}, start="from rest")
    assert waves.starts[0] == pytest.approx(0.633, rel=2e-3)
    dead = simulate("gas-lamp", p, probe={"capacitor": (1e6, 0.0)}, start="from rest")
    assert dead.ends_in == "charge"
    assert dead.at(np.array([dead.span]))["capacitor"][0] == pytest.approx(22.0, rel=1e-6)


def test_leaky_timer_of_the_field_reports():
    """Field reports: 9 V, 2 × 470k, 10 uF, 3 Mohm across it: 0.102 Hz becomes 0.0735 Hz, duty 67 % becomes 79
    %."""
    p = {"supply": 9, "RA": 470e3, "RB": 470e3, "C": 10e-6, "V_discharge": 0.0}
    assert _frequency("timer-555", **p) == pytest.approx(0.102, rel=5e-3)
    leaky = simulate("timer-555", {**p, "R_leak": 3e6})
    assert 1 / leaky.period == pytest.approx(0.0735, rel=5e-3)
    assert leaky.high_share == pytest.approx(0.79, abs=0.005)
