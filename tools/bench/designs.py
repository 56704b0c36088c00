"""Plausible designs: what somebody might have meant to build, with the tolerances of the shelf.

Each design is a tuple of specifications, one a part. Timing parts are standard values (IEC 60063) drawn so
that the period is log-uniform over what the circuit is used for.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from tools.bench.specs import E6, E12, E24, Design, Spec, default, ratio, standard

Rng = np.random.Generator


def _resistor(rng: Rng, name: str, value: float) -> Spec:
    percent = float(rng.choice([1, 5]))
    return ratio(name, standard(value, E24), percent, "resistor")


def _capacitor(rng: Rng, name: str, value: float) -> Spec:
    percent = 20.0 if value > 1e-6 else float(rng.choice([5, 10, 20]))
    return ratio(name, standard(value, E12 if percent < 20 else E6), percent, "capacitor")


def _log(rng: Rng, low: float, high: float) -> float:
    return float(np.exp(rng.uniform(np.log(low), np.log(high))))


def _pick(rng: Rng, low: float, high: float, digits: int = 3) -> float:
    return float(f"{rng.uniform(low, high):.{digits}g}")


LEAKS = ("R_leak", "R_leak_supply", "I_leak", "C_stray", "ESR", "C_slope")


def _rc(
    rng: Rng,
    factor: float,
    period: tuple[float, float],
    r: tuple[float, float],
    c: tuple[float, float] = (100e-12, 47e-6),
) -> tuple[float, float]:
    """R and C for a period of about factor·R·C."""
    for _ in range(1000):
        product = _log(rng, *period) / factor
        resistance = _log(rng, *r)
        if c[0] <= product / resistance <= c[1]:
            return resistance, product / resistance
    raise ValueError("no R and C reach such a period")


def op_amp(rng: Rng) -> Design:
    """±5 to ±14 V, or single supply with a bias resistor; now and then steering diodes."""
    style = rng.choice(["split", "single", "steered"], p=[0.7, 0.2, 0.1])
    beta = rng.uniform(0.25, 0.65)
    r, c = _rc(rng, 2 * np.log((1 + beta) / (1 - beta)), (1e-4, 10.0), (4.7e3, 1e6))
    top = standard(_log(rng, 10e3, 100e3), E24)
    bottom = standard(top * beta / (1 - beta), E24)
    both = [_resistor(rng, "R_top", top), _resistor(rng, "R_bottom", bottom)]
    if style == "single":
        supply = float(rng.choice([5, 9, 12]))
        levels = [
            Spec(
                "V_high",
                supply - 0.2,
                supply - 0.35,
                supply - 0.05,
                f"{supply - 0.35:g} .. {supply - 0.05:g}",
                "level",
                False,
            ),
            Spec("V_low", 0.1, 0.0, 0.2, "0 .. 0.2 V", "level", False),
        ]
        both += [_resistor(rng, "R_bias", bottom), ratio("supply", supply, 2.0, "supply")]
    else:
        up, down = _pick(rng, 4, 14), -_pick(rng, 4, 14)
        if rng.uniform() < 0.5:
            down = -up
        percent = float(rng.choice([2, 5]))
        levels = [ratio("V_high", up, percent, "level"), ratio("V_low", down, percent, "level")]
    timing = [_resistor(rng, "R", r)]
    swaps: tuple[tuple[str, str], ...] = (("R_top", "R_bottom"),)
    if style == "steered":
        timing = [
            _resistor(rng, "R_charge", r),
            _resistor(rng, "R_discharge", r * _log(rng, 0.3, 3.0)),
            default("V_diode", 0.6, 0.5, 0.7, False),
        ]
        swaps = (*swaps, ("R_charge", "R_discharge"))
    specs = (*timing, _capacitor(rng, "C", c), *both, *levels)
    return Design("op-amp", specs, ("capacitor", "output"), ("capacitor",), swaps, (*LEAKS, "delay", "slew"))


def gas_lamp(rng: Rng) -> Design:
    """90 to 250 V, megohms, and lamps as they come."""
    strike = _pick(rng, 68, 105, 2)
    out = strike - _pick(rng, 15, 30, 2)
    supply = float(f"{strike * rng.uniform(1.25, 2.0):.2g}")
    factor = np.log((supply - out) / (supply - strike))
    r, c = _rc(rng, factor, (2e-3, 5.0), (470e3, 4.7e6), (1e-9, 2.2e-6))
    specs = (
        ratio("supply", supply, float(rng.choice([1, 2, 5])), "supply"),
        _resistor(rng, "R", r),
        _capacitor(rng, "C", c),
        ratio("V_strike", strike, 8.0, "threshold"),
        ratio("V_extinguish", out, 8.0, "threshold"),
        default("V_maintain", out - 5, out - 8, out - 2, False, "V_extinguish"),
        default("r_lamp", 5e3, 2e3, 8e3, True),
    )
    return Design("gas-lamp", specs, ("capacitor",), ("capacitor",), (), (*LEAKS, "delay"))


def unijunction(rng: Rng) -> Design:
    """A stand-off ratio known to 10 or 15 %."""
    supply, eta, valley = (
        float(rng.choice([9, 12, 15, 20, 24])),
        _pick(rng, 0.58, 0.72, 2),
        _pick(rng, 1.3, 2.2, 2),
    )
    factor = np.log((supply - valley) / (supply - eta * supply - 0.6))
    r, c = _rc(rng, factor, (1e-4, 5.0), (8.2e3, 330e3))
    specs = (
        ratio("supply", supply, float(rng.choice([1, 2, 5])), "supply"),
        _resistor(rng, "R", r),
        _capacitor(rng, "C", c),
        ratio("eta", eta, float(rng.choice([10, 15])), "ratio"),
        ratio("V_valley", valley, 30.0, "threshold"),
        default("V_D", 0.6, 0.5, 0.7, False),
        default("r_discharge", 50.0, 20.0, 150.0, True),
        default("V_floor", valley - 1, valley - 1.7, valley - 0.3, False, "V_valley"),
        ratio("I_peak", 2e-6, 50.0, "device"),
        ratio("I_valley", 5e-3, 50.0, "device"),
    )
    return Design("unijunction", specs, ("capacitor",), ("capacitor",), (), (*LEAKS, "delay"))


def programmable(rng: Rng) -> Design:
    """A stand-off ratio set by two gate resistors."""
    supply, valley = float(rng.choice([6, 9, 12, 15])), _pick(rng, 0.7, 1.2, 2)
    share = rng.uniform(0.5, 0.72)
    lower = standard(_log(rng, 15e3, 100e3), E24)
    upper = standard(lower * (1 - share) / share, E24)
    factor = np.log((supply - valley) / (supply * (1 - share) - 0.6))
    r, c = _rc(rng, factor, (3e-4, 10.0), (100e3, 1e6))
    specs = (
        ratio("supply", supply, float(rng.choice([1, 2, 5])), "supply"),
        _resistor(rng, "R", r),
        _capacitor(rng, "C", c),
        _resistor(rng, "RG1", lower),
        _resistor(rng, "RG2", upper),
        ratio("V_valley", valley, 30.0, "threshold"),
        default("V_offset", 0.6, 0.4, 0.8, False),
        default("r_discharge", 50.0, 20.0, 150.0, True),
        default("V_floor", valley - 1, valley - 1.7, valley - 0.3, False, "V_valley"),
    )
    return Design(
        "programmable-unijunction",
        specs,
        ("capacitor",),
        ("capacitor",),
        (("RG1", "RG2"),),
        (*LEAKS, "delay"),
    )


def trigger_diode(rng: Rng) -> Design:
    """About 32 V, from a supply well above it."""
    over, back = float(rng.choice([28, 32, 35, 40])), _pick(rng, 6, 14, 2)
    supply = float(f"{over * rng.uniform(1.3, 2.2):.2g}")
    factor = np.log((supply - over + back) / (supply - over))
    r, c = _rc(rng, factor, (3e-4, 2.0), (22e3, 470e3))
    low = over - back
    specs = (
        ratio("supply", supply, float(rng.choice([1, 2, 5])), "supply"),
        _resistor(rng, "R", r),
        _capacitor(rng, "C", c),
        ratio("V_breakover", over, 12.5, "threshold"),
        ratio("V_breakback", back, 40.0, "threshold"),
        default("r_discharge", 30.0, 12.0, 90.0, True),
        default("V_floor", low - 4, low - 6.5, low - 1.5, False, "low"),
    )
    return Design("trigger-diode", specs, ("capacitor",), ("capacitor",), (), (*LEAKS, "delay"))


def schmitt(rng: Rng) -> Design:
    """CMOS gates between 3.3 and 15 V, thresholds from a data sheet's typical column."""
    supply = float(rng.choice([3.3, 5, 9, 12, 15]))
    upper, lower = (
        float(f"{supply * rng.uniform(0.55, 0.7):.2g}"),
        float(f"{supply * rng.uniform(0.28, 0.45):.2g}"),
    )
    factor = np.log((supply - lower) / (supply - upper)) + np.log(upper / lower)
    r, c = _rc(rng, factor, (2e-5, 5.0), (4.7e3, 1e6), (220e-12, 10e-6))
    percent = float(rng.choice([5, 10, 15]))
    specs = (
        _resistor(rng, "R", r),
        _capacitor(rng, "C", c),
        ratio("V_upper", upper, percent, "threshold"),
        ratio("V_lower", lower, percent, "threshold"),
        ratio("V_high", supply, float(rng.choice([1, 2, 5])), "level"),
        default("V_low", 0.0, -0.1, 0.1, False),
    )
    return Design("schmitt-inverter", specs, ("capacitor", "output"), ("capacitor",), (), (*LEAKS, "delay"))


def timer(rng: Rng) -> Design:
    """555-type astable; now and then with a steering diode."""
    supply = float(rng.choice([5, 6, 9, 12, 15]))
    r, c = _rc(rng, 1.4, (3e-5, 10.0), (3.3e3, 1e6))
    specs = [
        ratio("supply", supply, float(rng.choice([1, 2, 5])), "supply"),
        _resistor(rng, "RA", r * _log(rng, 0.3, 2.0)),
        _resistor(rng, "RB", r),
        _capacitor(rng, "C", c),
        default("k_upper", 2 / 3, 2 / 3 * 0.95, 2 / 3 * 1.05, True),
        default("k_lower", 1 / 3, 1 / 3 * 0.92, 1 / 3 * 1.08, True),
        default("V_discharge", 0.05, 0.0, 0.2, False),
    ]
    specs[4] = replace(specs[4], kind="threshold")
    specs[5] = replace(specs[5], kind="threshold")
    if rng.uniform() < 0.12:
        specs.append(Spec("V_diode", 0.6, 0.5, 0.7, "0.5 .. 0.7 V", "device", False))
    return Design(
        "timer-555", tuple(specs), ("capacitor", "output"), ("capacitor",), (("RA", "RB"),), (*LEAKS, "delay")
    )


def two_transistor(rng: Rng) -> Design:
    """3 to 12 V, collectors a tenth to a fortieth of the base resistors."""
    supply = float(rng.choice([3, 4.5, 5, 6, 9, 12]))
    r, c = _rc(rng, 1.4, (1e-4, 5.0), (15e3, 330e3), (470e-12, 47e-6))
    other = r if rng.uniform() < 0.5 else r * _log(rng, 0.5, 2.0)
    second = c if rng.uniform() < 0.5 else c * _log(rng, 0.4, 2.5)
    load = _log(rng, 12, 40)
    specs = (
        ratio("supply", supply, float(rng.choice([1, 2, 5])), "supply"),
        _resistor(rng, "R1", r),
        _capacitor(rng, "C1", c),
        _resistor(rng, "R2", other),
        _capacitor(rng, "C2", second),
        _resistor(rng, "RC1", r / load),
        _resistor(rng, "RC2", r / load),
        default("V_BE", 0.68, 0.63, 0.73, False),
        default("V_on", 0.56, 0.51, 0.61, False, "V_BE"),
        default("V_CE", 0.1, 0.0, 0.25, False),
        default("V_breakdown", 7.0, 5.5, 8.5, True),
    )
    swaps = tuple(s for s, same in ((("R1", "R2"), other == r), (("C1", "C2"), second == c)) if not same)
    return Design(
        "two-transistor",
        specs,
        ("base1", "base2", "collector1", "collector2"),
        ("base1", "base2"),
        swaps,
        (*LEAKS, "delay"),
    )


def gate_pair(rng: Rng) -> Design:
    """Two CMOS gates, with or without the resistor before the first one's input."""
    supply = float(rng.choice([5, 9, 12, 15]))
    r, c = _rc(rng, 2.2, (5e-5, 5.0), (10e3, 1e6), (220e-12, 4.7e-6))
    trip = supply / 2
    series: list[Spec] = []
    style = rng.choice(["series", "none"], p=[0.8, 0.2])
    timing = _resistor(rng, "R", r)
    if style == "series":
        series = [_resistor(rng, "R_series", 10 * r)]
    specs = (
        ratio("supply", supply, float(rng.choice([1, 2, 5])), "supply"),
        timing,
        _capacitor(rng, "C", c),
        *series,
        replace(default("V_threshold", trip, 0.9 * trip, 1.1 * trip, True, "supply"), kind="threshold"),
        default("V_clamp", 0.6, 0.5, 0.7, False),
        default("R_gate", 250.0, 0.0, 500.0, False),
    )
    swaps = (("R", "R_series"),) if series else ()
    return Design("gate-pair", specs, ("capacitor", "output"), ("capacitor",), swaps, (*LEAKS, "delay"))


def triangle(rng: Rng) -> Design:
    """Integrator and comparator between ±4 and ±13 V."""
    up = _pick(rng, 4, 13)
    down = -up if rng.uniform() < 0.5 else -_pick(rng, 4, 13)
    share = rng.uniform(0.2, 0.8)
    feedback = standard(_log(rng, 22e3, 220e3), E24)
    r, c = _rc(rng, 4 * share, (3e-4, 10.0), (4.7e3, 470e3))
    percent = float(rng.choice([2, 5]))
    specs = (
        _resistor(rng, "R", r),
        _capacitor(rng, "C", c),
        _resistor(rng, "R_in", feedback * share),
        _resistor(rng, "R_feedback", feedback),
        ratio("V_high", up, percent, "level"),
        ratio("V_low", down, percent, "level"),
    )
    return Design("triangle", specs, ("capacitor", "output"), (), (("R_in", "R_feedback"),), ("delay", "slew"))


def current_ramp(rng: Rng) -> Design:
    """Microamperes to a milliampere into C."""
    upper, lower = _pick(rng, 3, 8, 2), _pick(rng, 0.3, 1.2, 2)
    for _ in range(1000):
        current, period = _log(rng, 2e-6, 1e-3), _log(rng, 1e-4, 5.0)
        c = current * period / (upper - lower)
        if 470e-12 <= c <= 22e-6:
            break
    specs = (
        ratio("I_charge", float(f"{current:.2g}"), float(rng.choice([2, 5])), "current"),
        _capacitor(rng, "C", c),
        ratio("V_upper", upper, 5.0, "threshold"),
        ratio("V_lower", lower, 10.0, "threshold"),
        default("r_discharge", 50.0, 20.0, 80.0, True),
    )
    parasitics = ("R_leak", "I_leak", "C_stray", "ESR", "C_slope", "delay")
    return Design("current-ramp", specs, ("capacitor",), ("capacitor",), (), parasitics)


DESIGNS: dict[str, Callable[[Rng], Design]] = {
    "op-amp": op_amp,
    "gas-lamp": gas_lamp,
    "unijunction": unijunction,
    "schmitt-inverter": schmitt,
    "timer-555": timer,
    "programmable-unijunction": programmable,
    "trigger-diode": trigger_diode,
    "two-transistor": two_transistor,
    "gate-pair": gate_pair,
    "triangle": triangle,
    "current-ramp": current_ramp,
}
FIVE = ("op-amp", "gas-lamp", "unijunction", "schmitt-inverter", "timer-555")
