"""Circuits in which two comparators turn the capacitor round: Schmitt inverter and 555-type timer."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from tools.bench.engine import Array, End, Mode, Numbers, Rig, Values
from tools.bench.parts import Source, conductance, grounded, loaded


@dataclass(frozen=True, eq=False)
class _Face:
    """What differs: source of the charge and of the discharge, the two trip levels, the output's two
    levels."""

    up: Callable[[Values], Source]
    down: Callable[[Values], Source]
    trips: Callable[[Values], tuple[Array, Array]]
    output: Callable[[Values], tuple[Array, Array]]


def _mode(p: Values, face: _Face, rising: bool, late: bool) -> Mode:
    rate, node = grounded(p, loaded(p, face.up(p) if rising else face.down(p)))
    upper, lower = face.trips(p)
    shown = face.output(p)[0 if rising else 1]

    def rates(y: Array) -> Array:
        return rate(y[0])[None]

    def nodes(y: Array) -> dict[str, Array]:
        return {"capacitor": node(y[0]), "output": shown + 0.0 * y[0]}

    if late:
        wait = p.delay + (p.late_up if rising else p.late_down)
        return Mode(rates, nodes, lasts=np.maximum(wait, 0.0), then="discharge" if rising else "charge")
    if rising:
        return Mode(rates, nodes, ends=(End(lambda y: node(y[0]) - upper - p.trip_up, "late charge"),))
    return Mode(rates, nodes, ends=(End(lambda y: lower + p.trip_down - node(y[0]), "late discharge"),))


def _rig(
    name: str,
    face: _Face,
    horizon: Callable[[Values], Array],
    required: tuple[str, ...],
    defaults: Numbers,
    fill: Callable[[Numbers], Numbers],
) -> Rig:
    return Rig(
        name=name,
        nodes=("capacitor", "output"),
        first="charge",
        high=frozenset({"charge", "late charge"}),
        modes={
            "charge": lambda p: _mode(p, face, rising=True, late=False),
            "late charge": lambda p: _mode(p, face, rising=True, late=True),
            "discharge": lambda p: _mode(p, face, rising=False, late=False),
            "late discharge": lambda p: _mode(p, face, rising=False, late=True),
        },
        running=lambda p: ("charge", face.trips(p)[1][None].copy()),
        rest=lambda p: ("charge", 0.0 * p.C[None]),
        horizon=horizon,
        required=required,
        defaults=defaults,
        fill=fill,
    )


def _whole(p: Values) -> Array:
    return p.C + p.C_stray + p.C_probe_capacitor


def _schmitt_fill(parts: Numbers) -> Numbers:
    out = dict(parts)
    both, up, down = (out.pop(name, None) for name in ("R", "R_charge", "R_discharge"))
    out["G_up"] = conductance(both if up is None else up)
    out["G_down"] = conductance(both if down is None else down)
    if both is not None:
        out["V_diode"] = 0.0
    return out


def _schmitt_source(p: Values, output: Array) -> Source:
    """Through R, or through one of two resistors with its diode; neither conducts within a diode's drop."""

    def source(v: Array) -> tuple[Array, Array]:
        up, down = output - p.V_diode > v, output + p.V_diode < v
        g = np.where(up, p.G_up, np.where(down, p.G_down, 0.0))
        return g * (output - np.where(up, p.V_diode, -p.V_diode)), g

    return source


SCHMITT = _rig(
    "schmitt-inverter",
    _Face(
        up=lambda p: _schmitt_source(p, p.V_high),
        down=lambda p: _schmitt_source(p, p.V_low),
        trips=lambda p: (p.V_upper, p.V_lower),
        output=lambda p: (p.V_high, p.V_low),
    ),
    horizon=lambda p: 60.0 * _whole(p) / np.minimum(p.G_up, p.G_down) + 20.0 * p.delay,
    required=("C", "V_upper", "V_lower", "V_high"),
    defaults={
        "V_low": 0.0,
        "V_diode": 0.6,
        "supply": 0.0,
        "R": None,
        "R_charge": None,
        "R_discharge": None,
    },
    fill=_schmitt_fill,
)


def _timer_charge(p: Values) -> Source:
    """Through RA and RB; or through RA and the diode, which takes over while RB would drop more than it
    does."""

    def source(v: Array) -> tuple[Array, Array]:
        both = 1.0 / (p.RA + p.RB)
        steered = p.steered * (p.supply - p.V_diode - v) / p.RA > (p.supply - v) * both
        g = np.where(steered, 1.0 / p.RA, both)
        return g * (p.supply - np.where(steered, p.V_diode, 0.0)), g

    return source


def _timer_discharge(p: Values) -> Source:
    """Through RB to the discharge pin, whose transistor also carries the current of RA.

    The pin is at V_discharge in the middle of the fall; with ``r_switch`` it follows the current about there.
    """
    upper, lower = p.k_upper * p.supply, p.k_lower * p.supply
    g = 1.0 / (p.RB + p.r_switch)
    middle = (0.5 * (upper + lower) - p.V_discharge) * g

    def source(v: Array) -> tuple[Array, Array]:
        foot = p.V_discharge - p.r_switch * middle
        return g * foot + 0.0 * v, g + 0.0 * v

    return source


def _timer_fill(parts: Numbers) -> Numbers:
    out = dict(parts)
    out["steered"] = 0.0 if out["V_diode"] is None else 1.0
    if out["V_diode"] is None:
        out["V_diode"] = 0.0
    return out


TIMER_555 = _rig(
    "timer-555",
    _Face(
        up=_timer_charge,
        down=_timer_discharge,
        trips=lambda p: (p.k_upper * p.supply, p.k_lower * p.supply),
        output=lambda p: (p.supply - p.output_drop, p.output_floor),
    ),
    horizon=lambda p: 60.0 * _whole(p) * (p.RA + p.RB) + 20.0 * p.delay,
    required=("supply", "RA", "RB", "C"),
    defaults={
        "k_upper": 2.0 / 3.0,
        "k_lower": 1.0 / 3.0,
        "V_discharge": 0.05,
        "V_diode": None,
        "r_switch": 0.0,
        "output_drop": 0.0,
        "output_floor": 0.0,
    },
    fill=_timer_fill,
)
