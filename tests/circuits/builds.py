"""Parts of each circuit, their parasitics absent unless given, and how the same build looks to Kirchhoff."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np
from scipy.optimize import brentq

from benchfit import circuits
from benchfit.circuits.model import Array
from tests.circuits.kirchhoff import Half, Leg, through

INF = float("inf")


def parts_of(circuit: str, values: Mapping[str, float]) -> dict[str, Array]:
    """What the circuit's map takes: the values, and every parasitic that is not among them at nothing."""
    absent = {
        part.name: INF if part.coordinate == "inverse" else 0.0
        for part in circuits.get(circuit).parts
        if part.kind == "parasitic"
    }
    return {name: np.float64(value) for name, value in {**absent, **values}.items()}


def leg_of(p: Mapping[str, float], capacitor: str = "C", node: str = "capacitor") -> Leg:
    aside = p.get("C_stray", 0.0) + p.get(f"C_probe:{node}", 0.0)
    return Leg(p[capacitor], aside, p.get("ESR", 0.0), p.get("C_slope", 0.0))


def loads(
    p: Mapping[str, float], rail: float, node: str = "capacitor"
) -> tuple[list[tuple[float, float]], float]:
    """Everything that hangs on the timing node besides the circuit: arms, and a current into it."""
    arms = [(p.get("R_leak", INF), 0.0), (p.get("R_leak_supply", INF), rail)]
    if p.get(f"G_probe:{node}", 0.0):
        arms.append((1 / p[f"G_probe:{node}"], 0.0))
    return [a for a in arms if np.isfinite(a[0])], -p.get("I_leak", 0.0)


def _two_levels(
    p: Mapping[str, float],
    rail: float,
    up: list[tuple[float, float]],
    down: list[tuple[float, float]],
    levels: tuple[float, float],
    late_down: bool = True,
    fed: float = 0.0,
) -> tuple[Leg, list[Half]]:
    arms, current = loads(p, rail)
    delay = p.get("delay", 0.0)
    return leg_of(p), [
        Half(through(*up, *arms, current=current + fed), levels[0], True, delay),
        Half(through(*down, *arms, current=current + fed), levels[1], False, delay if late_down else 0.0),
    ]


def gas_lamp(p: Mapping[str, float]) -> tuple[Leg, list[Half]]:
    feed = [(p["R"], p["supply"])]
    lit = [*feed, (p["r_lamp"], p["V_maintain"])]
    return _two_levels(p, p["supply"], feed, lit, (p["V_strike"], p["V_extinguish"]), False)


def _firing(p: Mapping[str, float], peak: float, valley: float) -> tuple[Leg, list[Half]]:
    feed = [(p["R"], p["supply"])]
    fired = [*feed, (p["r_discharge"], p["V_floor"])]
    return _two_levels(p, p["supply"], feed, fired, (peak, valley), False)


def unijunction(p: Mapping[str, float]) -> tuple[Leg, list[Half]]:
    return _firing(p, p["eta"] * p["supply"] + p["V_D"], p["V_valley"])


def programmable(p: Mapping[str, float]) -> tuple[Leg, list[Half]]:
    gate = p["supply"] * p["RG1"] / (p["RG1"] + p["RG2"])
    return _firing(p, gate + p["V_offset"], p["V_valley"])


def trigger_diode(p: Mapping[str, float]) -> tuple[Leg, list[Half]]:
    return _firing(p, p["V_breakover"], p["V_breakover"] - p["V_breakback"])


def current_ramp(p: Mapping[str, float]) -> tuple[Leg, list[Half]]:
    closed = [(p["r_discharge"], 0.0)]
    return _two_levels(p, 0.0, [], closed, (p["V_upper"], p["V_lower"]), False, p["I_charge"])


def plus_input(p: Mapping[str, float], output: float) -> float:
    """The + input's node: currents of its three arms sum to 0."""
    arms = [(p["R_top"], output), (p["R_bottom"], p.get("V_reference", 0.0))]
    if "R_bias" in p:
        arms.append((p["R_bias"], p["supply"]))
    return sum(v / r for r, v in arms) / sum(1 / r for r, _ in arms)


def _pulled_output(p: Mapping[str, float], r: float, drop: float, v: float) -> float:
    """An open collector's node: what the pull-up brings goes into timing resistor and divider."""

    def surplus(out: float) -> float:
        return (
            (p["V_high"] - out) / p["R_pull"] - (out - drop - v) / r - (out - plus_input(p, out)) / p["R_top"]
        )

    return float(brentq(surplus, -50.0, 50.0, xtol=1e-13, rtol=1e-15))


def _open_collector(
    p: Mapping[str, float], r_up: float, r_down: float, drop: float
) -> tuple[Leg, list[Half]]:
    arms, current = loads(p, p.get("supply", p["V_high"]))
    rest = through(*arms, current=current)

    def up(v: float, t: float) -> float:
        return (_pulled_output(p, r_up, drop, v) - drop - v) / r_up + rest(v, t)

    trip = brentq(lambda v: plus_input(p, _pulled_output(p, r_up, drop, v)) - v, -50.0, 50.0, xtol=1e-13)
    low, delay = p["V_low"], p.get("delay", 0.0)
    down = through((r_down, low + drop), *arms, current=current)
    return leg_of(p), [Half(up, float(trip), True, delay), Half(down, plus_input(p, low), False, delay)]


def op_amp(p: Mapping[str, float]) -> tuple[Leg, list[Half]]:
    high, low = p["V_high"], p["V_low"]
    drop = p["V_diode"] if "R" not in p else 0.0
    r_up, r_down = p.get("R", p.get("R_charge")), p.get("R", p.get("R_discharge"))
    assert r_up is not None
    assert r_down is not None
    if "R_pull" in p:
        return _open_collector(p, r_up, r_down, drop)
    return _two_levels(
        p,
        p.get("supply", high),
        [(r_up, high - drop)],
        [(r_down, low + drop)],
        (plus_input(p, high), plus_input(p, low)),
    )


def schmitt(p: Mapping[str, float]) -> tuple[Leg, list[Half]]:
    drop = p["V_diode"] if "R" not in p else 0.0
    up = [(p.get("R", p.get("R_charge", INF)), p["V_high"] - drop)]
    down = [(p.get("R", p.get("R_discharge", INF)), p["V_low"] + drop)]
    return _two_levels(p, p["V_high"], up, down, (p["V_upper"], p["V_lower"]))


def timer(p: Mapping[str, float]) -> tuple[Leg, list[Half]]:
    supply = p["supply"]
    up = [(p["RA"] + p["RB"], supply)]
    if "V_diode" in p:
        up = [(p["RA"], supply - p["V_diode"])]
    levels = (p["k_upper"] * supply, p["k_lower"] * supply)
    return _two_levels(p, supply, up, [(p["RB"], p["V_discharge"])], levels)


def gate_pair(p: Mapping[str, float]) -> tuple[Leg, list[Half]]:
    supply, clamp = p["supply"], p["V_clamp"]
    arms, current = loads(p, supply)

    def inflow(first: float) -> Callable[[float, float], float]:
        plain = through((p["R"] + p["R_gate"], first), *arms, current=current)
        if "R_series" not in p:
            return plain

        def clamped(v: float, t: float) -> float:
            beyond = max(v - supply - clamp, 0.0) - max(-clamp - v, 0.0)
            return plain(v, t) - beyond / p["R_series"]

        return clamped

    hard = "R_series" not in p
    trip, delay = p["V_threshold"], p.get("delay", 0.0)
    return leg_of(p), [
        Half(inflow(0.0), trip, False, delay, supply, supply + clamp if hard else None),
        Half(inflow(supply), trip, True, delay, 0.0, -clamp if hard else None),
    ]


BENCH: dict[str, Callable[[Mapping[str, float]], tuple[Leg, list[Half]]]] = {
    "gas-lamp": gas_lamp,
    "unijunction": unijunction,
    "programmable-unijunction": programmable,
    "trigger-diode": trigger_diode,
    "current-ramp": current_ramp,
    "op-amp": op_amp,
    "schmitt-inverter": schmitt,
    "timer-555": timer,
    "gate-pair": gate_pair,
}

VALUES: dict[str, dict[str, float]] = {
    "gas-lamp": {
        "supply": 135.0, "R": 1.2e6, "C": 68e-9, "V_strike": 92.0, "V_extinguish": 61.0, "V_maintain": 56.0,
        "r_lamp": 5e3,
    },
    "unijunction": {
        "supply": 12.0, "R": 56e3, "C": 82e-9, "eta": 0.63, "V_D": 0.6, "V_valley": 1.6, "r_discharge": 60.0,
        "V_floor": 0.5,
    },
    "programmable-unijunction": {
        "supply": 10.0, "R": 270e3, "C": 22e-9, "RG1": 27e3, "RG2": 16e3, "V_offset": 0.6, "V_valley": 0.9,
        "r_discharge": 50.0, "V_floor": -0.1,
    },
    "trigger-diode": {
        "supply": 60.0, "R": 100e3, "C": 47e-9, "V_breakover": 32.0, "V_breakback": 9.0, "r_discharge": 30.0,
        "V_floor": 19.0,
    },
    "current-ramp": {"I_charge": 0.8e-3, "C": 100e-9, "V_upper": 6.2, "V_lower": 0.9, "r_discharge": 50.0},
    "op-amp": {
        "R": 22e3, "C": 33e-9, "R_top": 15e3, "R_bottom": 10e3, "V_reference": 0.3, "V_high": 11.0,
        "V_low": -9.5,
    },
    "schmitt-inverter": {"R": 47e3, "C": 10e-9, "V_upper": 2.9, "V_lower": 1.9, "V_high": 5.0, "V_low": 0.05},
    "timer-555": {
        "supply": 9.0, "RA": 10e3, "RB": 33e3, "C": 47e-9, "k_upper": 0.66, "k_lower": 0.335,
        "V_discharge": 0.06,
    },
    "gate-pair": {
        "supply": 9.0, "R": 100e3, "C": 4.7e-9, "R_series": 820e3, "V_threshold": 4.2, "V_clamp": 0.6,
        "R_gate": 300.0,
    },
    "triangle": {
        "R": 12e3, "C": 100e-9, "R_in": 120e3, "R_feedback": 470e3, "V_high": 10.0, "V_low": -8.5,
        "V_reference": 0.4,
    },
    "two-transistor": {
        "supply": 5.0, "R1": 47e3, "C1": 100e-9, "R2": 33e3, "C2": 47e-9, "RC1": 2.2e3, "RC2": 3.3e3,
        "V_BE": 0.68, "V_on": 0.56, "V_CE": 0.1, "V_breakdown": 7.0,
    },
}  # fmt: skip


def scale_of(circuit: str) -> tuple[float, float, float, float]:
    """Ohms, farads, volts and seconds on which a circuit's parasitics matter."""
    p = VALUES[circuit]
    ohms = p.get("R", p.get("RA", 0.0) + p.get("RB", 0.0) + p.get("R1", 0.0)) or p["V_upper"] / p["I_charge"]
    farads = p.get("C", p.get("C1", 0.0))
    volts = p.get("supply", p.get("V_high", p.get("V_upper", 0.0)))
    return ohms, farads, volts, ohms * farads
